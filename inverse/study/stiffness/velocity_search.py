"""Minima of the constants' posterior: from many draws of the priors, followed down and ranked."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_seed, whole_number
from inverse.inference.minima.least_squares import Basin, basin_distance, make_basin, ranked
from inverse.inference.minima.minimise import minimise
from inverse.study.stiffness.velocity_posterior import VelocityPosterior

__all__ = ["minima"]

Array = NDArray[np.float64]

_CANDIDATES = 2048
# Standard normal variables beyond this are no place to start from.
_REACH = 3.0
# A minimum with a smaller share of the probability is a place where the search got stuck.
_NEGLIGIBLE = 1e-9


def minima(posterior: VelocityPosterior, starts: int, seed: int) -> tuple[Basin, ...]:
    """Find distinct minima, the most probable first.

    Parameters
    ----------
    posterior : VelocityPosterior
    starts : int
        Starting points that are followed down: the best of 2048 draws from the priors.
    seed : int

    Returns
    -------
    tuple of Basin
        In each the nearest admitted branch is taken for every measurement; their weights count all.

    Raises
    ------
    ValueError
        If `starts` is below 1 or no stable minimum was found.
    """
    starts, seed = whole_number("starts", starts, 1), checked_seed(seed)
    found: list[Basin] = []
    for start in _starting_points(posterior, starts, seed):
        lowest = minimise(posterior.residuals, start, max_evaluations=200)
        if not np.isfinite(posterior(lowest.x[None])[0]):
            continue
        if all(basin_distance(lowest.x, b) > 0.5 for b in found):
            found.append(make_basin(posterior, lowest.x, lowest.covariance, lowest))
    if not found:
        raise ValueError(
            "No stable stiffness within the priors comes near the measurements; check the directions, the "
            "branches, the density and the priors."
        )
    return tuple(basin for basin in ranked(found) if basin.weight > _NEGLIGIBLE)


def _starting_points(posterior: VelocityPosterior, starts: int, seed: int) -> Array:
    from scipy.special import ndtri
    from scipy.stats import qmc

    count = len(posterior.parameters.names)
    unit = qmc.Sobol(count, rng=np.random.default_rng(seed)).random(_CANDIDATES)
    z = np.clip(ndtri(np.clip(unit, 1e-6, 1 - 1e-6)), -_REACH, _REACH)
    z[0] = 0.0
    # The logarithm lets a start that fits most measurements win over one that misses all of them by less.
    misfit = np.log1p(posterior.residuals(z) ** 2).sum(axis=1)
    return z[np.argsort(misfit, kind="stable")[:starts]]
