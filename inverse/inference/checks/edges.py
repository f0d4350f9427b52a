"""Unknowns that the data press against an end of their prior: what that does to all the others."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity
from inverse.inference.checks.prior_view import touches, view_of_distribution

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["edge_warnings"]

_PRESSED = 3.0
"""How much narrower than its prior an unknown must be: where the data say little, its prior's ends do no harm."""


def edge_warnings(inversion: Inversion, values: NDArray[np.float64]) -> list[str]:
    """Warn of ends of priors, not set by nature, against which the data press an unknown.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (draws, unknowns)
        Draws of the posterior, public units.

    Returns
    -------
    list of str
        One sentence per unknown other than noise; empty where there is none.
    """
    said = []
    for column, name in enumerate(inversion.names):
        if name in inversion.noise_names:
            continue
        draws, known = values[:, column], quantity(inversion.fields[name])
        view = view_of_distribution(inversion.priors[name], (known.low, known.high))
        low, high = np.quantile(draws, [0.16, 0.84])
        if not view.width(0.68) > _PRESSED * (high - low):
            continue
        for word, side, end, natural in (
            ("lower", "<", view.low, known.low),
            ("upper", ">", view.high, known.high),
        ):
            if end != natural and touches(draws, end, side):
                unit = "" if inversion.units[name] == "1" else f" {inversion.units[name]}"
                said.append(
                    f"{name} is pressed against the {word} end of its prior, {end:.6g}{unit}: every interval, of the "
                    "other unknowns too, holds only if it cannot lie beyond. Widen the prior, or look for what else "
                    "in the description drives it there."
                )
    return said
