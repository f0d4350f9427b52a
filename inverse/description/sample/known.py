"""Values for every unknown of a stack that is to be computed, not fitted."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import check
from inverse.description.sample.places import BoundStack

__all__ = ["known_values"]


def known_values(bound: BoundStack, values: Mapping[str, float]) -> dict[str, NDArray[np.float64]]:
    """Return each unknown's value, the median of its prior where none is given, as an array of shape (1,).

    Raises
    ------
    ValueError
        If `values` is no mapping, names no unknown of the stack, or a value is out of range.
    """
    if not isinstance(values, Mapping):
        raise ValueError(f"values is a {type(values).__name__}; give a mapping of unknowns to numbers.")
    strange = sorted(set(values) - set(bound.priors))
    if strange:
        raise ValueError(
            f"values names {', '.join(strange)}; the stack's unknowns are {', '.join(bound.priors) or 'none'}."
        )
    fields = {slot.name: slot.field for slot in bound.slots}
    wanted = {n: values[n] if n in values else prior.median() for n, prior in bound.priors.items()}
    return {
        name: np.array([check(fields[name], value, name.removesuffix(f".{fields[name]}"))])
        for name, value in wanted.items()
    }
