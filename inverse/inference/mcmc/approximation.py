"""The first approximation of a posterior: the normal one around each minimum, in straight coordinates."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from inverse.inference.mcmc.coordinates import Straight
from inverse.inference.mcmc.independence import StudentMixture, adapt
from inverse.inference.minima.least_squares import Basin

__all__ = ["first_mixture", "prepare"]

Array = NDArray[np.float64]

_LEAST_WEIGHT = 1e-3
"""A minimum with less probability than this in the normal approximation gets no walkers."""

_WITHIN = 0.95
"""How far towards an end, of the way there, the middle of an approximation may be moved."""

_EDGED_PRECISION = 0.25
"""Of an unknown between ends that the data leave open: twice the deviation of its uniform prior."""

_HALVINGS = 4
_ROUNDING = 1e-13


def prepare(
    density: Straight, minima: Sequence[Basin], ensembles: int, walkers: int, seed: int
) -> tuple[Array, StudentMixture]:
    """Approximate the posterior from its minima and draw starting points from the approximation.

    Returns
    -------
    starts : array, shape (ensembles, walkers, unknowns)
        Importance-resampled without replacement: no two ensembles share a point.
    mixture : StudentMixture
    """
    rng = np.random.default_rng(np.random.SeedSequence(seed).spawn(2)[1])
    mixture, points, log_weights = adapt(density, first_mixture(density, minima), rng)
    count = ensembles * walkers
    if len(points) < count:
        raise ValueError(
            f"Only {len(points)} of the points drawn around the minima are possible; {count} walkers are asked for. "
            "Check the priors against the allowed ranges."
        )
    # Gumbel's trick: sampling without replacement in proportion to the weights.
    order = np.argsort(-(log_weights + rng.gumbel(size=len(points))))[:count]
    return points[rng.permutation(order)].reshape(ensembles, walkers, -1), mixture


def first_mixture(density: Straight, minima: Sequence[Basin]) -> StudentMixture:
    """Give every minimum that matters a component of its normal approximation, with equal weights."""
    kept = [_normal(density, b) for b in minima if b.weight >= _LEAST_WEIGHT]
    return StudentMixture(
        np.full(len(kept), 1 / len(kept)), np.array([m for m, _ in kept]), np.array([r for _, r in kept])
    )


def _normal(density: Straight, basin: Basin) -> tuple[Array, Array]:
    """Middle and lower Cholesky factor of the covariance in straight coordinates.

    A minimum of standard normal variables z has the curvature 1 of their prior in each and the slope z. Between ends
    y replaces z, and the prior is flat there: the curvature is taken out, and the slope is followed to where the
    density is highest, or towards the end before it.
    """
    columns = [axis.column for axis in density.edged]
    covariance = _positive(basin.covariance_z)
    if not columns:
        return basin.z, _root(covariance)
    middle = _between_ends(density, density.of_z(basin.z))
    slope = np.ones(basin.z.size)
    for axis in density.edged:
        slope[axis.column] = np.exp(axis.to_z(middle[[axis.column]])[1][0])
    edged = np.isin(np.arange(basin.z.size), columns)
    # With the slopes, some very large, outside, and a floor under what rounding leaves of the curvatures.
    precision = np.linalg.inv(covariance) + np.diag(np.where(edged, _EDGED_PRECISION / slope**2 - 1.0, 0.0))
    size, vectors = np.linalg.eigh((precision + precision.T) / 2)
    scaled = (vectors / np.maximum(size, _ROUNDING * size[-1])) @ vectors.T
    step = scaled @ np.where(edged, basin.z, 0.0) / slope
    return _moved(density, middle, step), _root(scaled) / slope[:, None]


def _between_ends(density: Straight, y: Array) -> Array:
    """Return a point that no end touches."""
    for axis in density.edged:
        y[axis.column] = np.clip(y[axis.column], (1 - 1e-9) * axis.ends[0], (1 - 1e-9) * axis.ends[1])
    return y


def _moved(density: Straight, middle: Array, step: Array) -> Array:
    """Go as far along a step as keeps within the ends and does not lower the density."""
    for axis in density.edged:
        along = step[axis.column]
        room = axis.ends[int(along > 0)] - middle[axis.column]
        if along != 0:
            step = step * min(1.0, _WITHIN * room / along)
    ways = middle + np.outer([*(0.5**k for k in range(_HALVINGS)), 0.0], step)
    return np.asarray(ways[int(np.argmax(density(ways)))])


def _root(covariance: Array) -> Array:
    return np.asarray(np.linalg.cholesky(covariance), dtype=float)


def _positive(covariance: Array) -> Array:
    size, vectors = np.linalg.eigh(covariance)
    return np.asarray((vectors * np.clip(size, 1e-12, 1.0)) @ vectors.T)
