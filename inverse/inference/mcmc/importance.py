"""Importance sampling from a mixture close to a density, with weights that say how far they can be trusted.

The largest weights are replaced by quantiles of a generalised Pareto distribution fitted to them; its shape k tells
whether averages exist and how fast they settle: below 0.7 they are reliable (Vehtari, Simpson, Gelman, Yao and Gabry,
Pareto smoothed importance sampling, J. Machine Learning Research 25 (2024) 72; fit: Zhang and Stephens, Technometrics
51 (2009) 316; both from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from inverse.inference.mcmc.approximation import Approximation
from inverse.inference.mcmc.independence import EXTRA, refit

__all__ = [
    "LARGEST_SHAPE",
    "LEAST_SPREAD",
    "ImportanceDraws",
    "importance_draws",
    "pareto_shape",
    "smoothed_weights",
]

Array = NDArray[np.float64]

LARGEST_SHAPE = 0.7
"""Pareto shape above which weighted draws are not to be used."""

LEAST_SPREAD = 0.7
"""Spread over that of the first approximation below which weighted draws are not to be used.

A narrow ridge that bends leaves a straight mixture where it ends: the draws there have no weight, those that are left
look even, and only their spread, too small, tells. An approximation that holds comes out near 1.
"""

_DRAWS_PER_UNKNOWN = 200
_LEAST_DRAWS = 1000


@dataclass(frozen=True)
class ImportanceDraws:
    """Weighted draws.

    Attributes
    ----------
    points : array, shape (n, unknowns)
    weights : array, shape (n,)
        Smoothed, adding up to one.
    ess : float
        Effective sample size, one over the sum of squared weights.
    shape : float
        Pareto k of the largest weights.
    spread : float
        Least standard deviation of an unknown over that of the first approximation.
    """

    points: Array
    weights: Array
    ess: float
    shape: float
    spread: float

    def suffice(self, ess: float) -> bool:
        """Tell whether the weights can be trusted and are even enough for an effective sample size."""
        return self.shape <= LARGEST_SHAPE and self.ess >= ess and self.spread >= LEAST_SPREAD

    def resample_evenly(self, count: int, rng: np.random.Generator) -> Array:
        """Take each point as often as its share of `count`, rounded up or down at random (systematic resampling)."""
        places = (np.arange(count) + rng.random()) / count
        return self.points[np.searchsorted(np.cumsum(self.weights)[:-1], places, side="right")]


def importance_draws(
    log_density: Callable[[Array], Array], first: Approximation, rng: np.random.Generator, ess: float
) -> ImportanceDraws:
    """Draw from a mixture and weight by a density; refit the mixture until the weights are even enough.

    Each round's draws are independent of those its mixture was fitted to. The first round whose effective sample
    size, Pareto shape and spread suffice is returned, or the last of five.

    Parameters
    ----------
    log_density : callable
        Points (n, unknowns) to log densities (n,), not necessarily normalised.
    first : Approximation
    rng : Generator
    ess : float
        Wanted; less may be returned.

    Raises
    ------
    ValueError
        If no draw of a round has a finite density.
    """
    mixture = first.mixture
    count = max(_LEAST_DRAWS, _DRAWS_PER_UNKNOWN * mixture.means.shape[1])
    for extra in (*EXTRA, None):
        points = mixture.draw(rng, count)
        log_weights = log_density(points) - mixture.log_density(points)
        good = np.isfinite(log_weights)
        if not good.any():
            raise ValueError(f"None of {count} draws from the approximation is possible; check the priors.")
        points, log_weights = points[good], log_weights[good]
        weights, shape = smoothed_weights(log_weights)
        spread = float((_deviations(points, weights) / first.spread).min())
        found = ImportanceDraws(points, weights, float(1 / (weights @ weights)), shape, spread)
        if extra is None or found.suffice(ess):
            break
        mixture = refit(points, log_weights, first.mixture.means, extra, rng)
    return found


def _deviations(points: Array, weights: Array) -> Array:
    return np.asarray(np.sqrt(weights @ (points - weights @ points) ** 2))


def smoothed_weights(log_weights: Array) -> tuple[Array, float]:
    """Return smoothed weights adding up to one, and the Pareto shape of the largest; inf where there are too few."""
    weights = np.exp(log_weights - logsumexp(log_weights))
    tail = int(np.ceil(min(len(weights) / 5, 3 * np.sqrt(len(weights)))))
    order = np.argsort(weights)
    cut = weights[order[-tail - 1]]
    excess = weights[order[-tail:]] - cut
    if tail < 5 or excess[0] <= 0:
        return weights, np.inf
    shape, scale = pareto_shape(excess)
    quantile = (np.arange(tail) + 0.5) / tail
    smooth = -np.log1p(-quantile) if abs(shape) < 1e-8 else np.expm1(-shape * np.log1p(-quantile)) / shape
    weights[order[-tail:]] = np.minimum(cut + scale * smooth, weights.max())
    return weights / weights.sum(), shape


def pareto_shape(excess: Array) -> tuple[float, float]:
    """Fit a generalised Pareto distribution to positive excesses, in increasing order.

    Returns
    -------
    shape, scale : float
        The shape is drawn towards 0.5 as if by ten more excesses.
    """
    size = excess.size
    grid = 30 + int(np.sqrt(size))
    quarter = excess[int(size / 4 + 0.5) - 1]
    theta = 1 / excess[-1] + (1 - np.sqrt(grid / (np.arange(1, grid + 1) - 0.5))) / (3 * quarter)
    shapes = np.log1p(-theta[:, None] * excess).mean(axis=1)
    profile = size * (np.log(-theta / shapes) - shapes - 1)
    share = np.exp(profile - logsumexp(profile))
    best = float(share @ theta)
    shape = float(np.log1p(-best * excess).mean())
    return (size * shape + 5) / (size + 10), -shape / best
