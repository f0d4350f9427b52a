"""A prior as a report needs it: bounds, widths, and whether a value would surprise it."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.unknowns import rebuild_prior

__all__ = ["PriorView", "quantiles", "touches", "view_of_distribution", "view_of_variable"]

Array = NDArray[np.float64]

# A bound is touched where the density there, relative to its peak, is above that of a normal 1.96 deviations
# away: then the bound belongs to the interval of highest density that holds 95 %.
_TOUCHED = math.exp(-0.5 * 1.96**2)


@dataclass(frozen=True)
class PriorView:
    """What a report needs of a prior.

    Attributes
    ----------
    low, high : float
        Bounds: the support, cut where nature ends.
    natural : tuple of float
        The range that nature allows.
    quantiles : callable
        Probabilities -> quantiles, of the prior cut to its bounds.
    density : callable or None
        Density, not normalised after the cut; None where only draws are known.
    """

    low: float
    high: float
    natural: tuple[float, float]
    quantiles: Callable[[Sequence[float]], Array]
    density: Callable[[Array], Array] | None = None

    def width(self, mass: float) -> float:
        """Width of the central interval that holds `mass`."""
        low, high = self.quantiles([0.5 - mass / 2, 0.5 + mass / 2])
        return float(high - low)

    @property
    def median(self) -> float:
        """Median."""
        return float(self.quantiles([0.5])[0])

    def is_surprised_by(self, value: float) -> bool:
        """Tell whether a value lies in the prior's outer 5 % and where its density is low.

        Both are asked for: a compliance of nearly zero lies in the lowest 2.5 % of a half-Cauchy prior, at
        its peak. Low means under exp(-1.96^2 / 2) of the peak. A prior of which only draws are known says
        nothing.
        """
        if self.density is None:
            return False
        low, high = self.quantiles([0.025, 0.975])
        grid = self.quantiles(np.linspace(0.005, 0.995, 199).tolist())
        sparse = self.density(np.array([value]))[0] < _TOUCHED * self.density(grid).max()
        return bool(sparse and not low <= value <= high)


def view_of_variable(attrs: Mapping[str, Any], draws: Array | None) -> PriorView | None:
    """View the prior of a variable of a posterior.

    Parameters
    ----------
    attrs : mapping
        ``prior``, JSON of the distribution or empty; ``low`` and ``high``, the range nature allows;
        ``constrained``, 1 where a condition on several unknowns cuts the prior further, so that only draws
        show what is left of it.
    draws : numpy.ndarray or None
        Draws from the prior, used where no distribution is stated.

    Returns
    -------
    PriorView or None
        None where nothing is known.
    """
    natural = float(attrs.get("low", -math.inf)), float(attrs.get("high", math.inf))
    if attrs.get("prior") and not (attrs.get("constrained") and draws is not None):
        return view_of_distribution(rebuild_prior(json.loads(attrs["prior"])), natural)
    if draws is None:
        return None
    return PriorView(-math.inf, math.inf, natural, lambda p: quantiles(draws.ravel(), p))


def view_of_distribution(prior: Any, natural: tuple[float, float]) -> PriorView:
    """View a frozen distribution, cut to the range nature allows."""
    low, high = (float(bound) for bound in prior.support())
    low, high = max(low, natural[0]), min(high, natural[1])
    start, stop = prior.cdf(low), prior.cdf(high)

    def cut_quantiles(probabilities: Sequence[float]) -> Array:
        return np.asarray(prior.ppf(start + np.asarray(probabilities) * (stop - start)))

    return PriorView(low, high, natural, cut_quantiles, prior.pdf)


def quantiles(draws: Array, probabilities: Sequence[float]) -> Array:
    """Quantiles of draws that may hold infinities (a perfect bond has infinite stiffness)."""
    at = np.asarray(probabilities, dtype=float)
    if np.all(np.isfinite(draws)):
        return np.quantile(draws, at)
    return np.quantile(draws, at, method="nearest")


def touches(draws: Array, bound: float, side: str) -> bool:
    """Tell whether a sample's density at a bound is not small against its peak.

    Parameters
    ----------
    draws : numpy.ndarray
        Shape (n,), finite or infinite.
    bound : float
        An end of the allowed range; an infinite one is never touched.
    side : {"<", ">"}
        ``<`` where the draws lie above the bound (an upper limit results), ``>`` where they lie below.

    Returns
    -------
    bool
        True above exp(-1.96^2 / 2) of the peak, both counted in bins an eighth of the central 68 % wide.
    """
    low, high = quantiles(draws, [0.16, 0.84])
    width = (high - low) / 8
    if not (math.isfinite(bound) and math.isfinite(width) and width > 0):
        return False
    distance = draws - bound if side == "<" else bound - draws
    counts = np.bincount((distance[distance < 64 * width] / width).astype(int).clip(0), minlength=1)
    # The bins between the quantiles hold 0.68 / 8 of the draws each on average, also where they are far away.
    peak = max(counts.max(), 0.68 / 8 * draws.size)
    return bool(counts[0] > _TOUCHED * peak)
