"""Slots: the places of the model, each holding a number, an unknown, or what follows from other places."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.unknowns import Unknown, is_unknown

__all__ = ["DEFAULT", "GIVEN", "ComputedSlot", "Slot", "Slots", "slot_of"]

GIVEN = "given by the user"

DEFAULT = "the default"
"""Source of what nobody gave: no loss, one temperature, a smooth and massless bond."""

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Slot:
    """A place in the model and what stands there.

    Attributes
    ----------
    name : str
        Name of the unknown, or of the place if it holds a number.
    field : str
        Quantity of the place.
    value : float
        The number, or nan if unknown.
    prior : object
        Frozen distribution, or None if known.
    source : str
        Where the number comes from.
    spread : float
        Standard uncertainty of a fixed constant, 0 where none is stated.
    shared : bool
        The unknown was given by an `Unknown` and keeps its name wherever it stands.
    terms : tuple of (Slot, float)
        Where the place holds a weighted sum of others, as in a slice of a graded layer.
    """

    name: str
    field: str
    value: float
    prior: Any = None
    source: str = ""
    spread: float = 0.0
    shared: bool = False
    terms: tuple[tuple[Slot, float], ...] = ()

    def leaves(self) -> Iterator[Slot]:
        """Give the slots that hold numbers or unknowns."""
        if not self.terms:
            yield self
        for slot, _ in self.terms:
            yield from slot.leaves()

    def fill(self, values: Mapping[str, Array]) -> Array | float:
        """Return the number, or the unknown's values."""
        if not self.terms:
            return values.get(self.name, self.value)
        return sum(weight * slot.fill(values) for slot, weight in self.terms)


Slots = dict[str, Slot]


@dataclass(frozen=True, kw_only=True)
class ComputedSlot(Slot):
    """A place whose value follows from others by a formula, such as a velocity from elastic constants.

    Attributes
    ----------
    inputs : tuple of Slot
    formula : callable
        Takes the inputs' values in order, numbers or arrays of one shape; picklable.
    """

    inputs: tuple[Slot, ...]
    formula: Callable[..., Any]

    def leaves(self) -> Iterator[Slot]:
        """Give the slots that hold numbers or unknowns."""
        for slot in self.inputs:
            yield from slot.leaves()

    def fill(self, values: Mapping[str, Array]) -> Array | float:
        """Return what the formula gives."""
        found: Array | float = self.formula(*(slot.fill(values) for slot in self.inputs))
        return found


def slot_of(field: str, value: Any, place: str, source: str, spread: float, suffix: str = "") -> Slot:
    """Make a slot of a number, a distribution or an `Unknown`."""
    name = f"{place}.{field}{suffix}"
    if isinstance(value, Unknown):
        return Slot(value.name, field, np.nan, value.prior, shared=True)
    if is_unknown(value):
        return Slot(name, field, np.nan, value)
    return Slot(name, field, float(value), None, source, spread)
