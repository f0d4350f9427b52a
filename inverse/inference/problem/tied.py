"""Coefficients that are unknowns of the problem: their basis functions join the one that carries the scale alone.

A trace is ``F (u + sum P_m p_m + Q_m q_m)``, F the fluence, u the displacement's response. Where P_m and Q_m are
eliminated, each product with F is a coefficient of its own. Where P_m is an unknown with a prior, ``u + P_m p_m`` is
one function, whose only coefficient is F.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from inverse.description.sample.optic_slots import OPTIC
from inverse.description.sample.places import BoundStack
from inverse.response.basis import Columns

__all__ = ["tie"]

Array = NDArray[np.float64]

_LETTERS = dict(zip(OPTIC, "PQN", strict=True))


def tie(rows: Array, layout: Columns, bound: BoundStack, values: Mapping[str, Array]) -> Array:
    """Move the functions of coefficients that are unknowns into the displacement's.

    Parameters
    ----------
    rows : array, shape (sets, functions, delays)
        In the order of ``layout.names``; left as it is.
    layout : Columns
    bound : BoundStack
    values : mapping
        Unknown name -> array of shape (sets,).

    Returns
    -------
    array, shape (sets, functions, delays)
        Zero where a function was moved.
    """
    tied = {
        (group, field): slots
        for group, slots in zip(bound.materials, bound.media, strict=True)
        for field in OPTIC
        if f"{field}_real" in slots
    }
    if not tied:
        return rows
    out = rows.copy()
    for (group, field), slots in tied.items():
        for part in ("real", "imag"):
            i = layout.names.index(f"{group}.{_LETTERS[field]}.{part}")
            value = np.asarray(slots[f"{field}_{part}"].fill(values), dtype=float).reshape(-1, 1)
            out[:, -1] += value * rows[:, i]
            out[:, i] = 0.0
    return out
