"""The first approximation of a posterior, from its minima, in straight coordinates."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.inference.mcmc.advance import GuardedLogProb
from inverse.inference.mcmc.coordinates import Straight
from inverse.inference.mcmc.independence import StudentMixture, adapt, fit_mixture
from inverse.inference.mcmc.linear_problem import EDGED_PRECISION, LinearProblem
from inverse.inference.minima.least_squares import Basin
from inverse.inference.problem.posterior import Posterior

__all__ = ["Approximation", "approximate", "prepare"]

Array = NDArray[np.float64]

_LEAST_WEIGHT = 1e-3
"""A minimum with less probability than this in the normal approximation gets no walkers."""

_WITHIN = 0.95
"""How far towards an end, of the way there, the middle of an approximation may be moved."""

_COMPONENTS = 6
_DRAWS = 2000
_LEAST_WITHIN = 20  # draws per unknown
_WALKERS, _BURN_IN, _KEPT = 32, 40, 40
_HALVINGS = 4
_ROUNDING = 1e-13


@dataclass(frozen=True)
class Approximation:
    """An approximation of a posterior.

    Attributes
    ----------
    mixture : StudentMixture
    spread : array, shape (unknowns,)
        Standard deviations of its draws about the minimum about which they are least.
    """

    mixture: StudentMixture
    spread: Array


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
    mixture, points, log_weights = adapt(
        GuardedLogProb(density), approximate(density, minima, rng).mixture, rng
    )
    count = ensembles * walkers
    if len(points) < count:
        raise ValueError(
            f"Only {len(points)} of the points drawn around the minima are possible; {count} walkers are asked for. "
            "Ask for fewer, or check the priors against the allowed ranges."
        )
    # Gumbel's trick: sampling without replacement in proportion to the weights.
    order = np.argsort(-(log_weights + rng.gumbel(size=len(points))))[:count]
    return points[rng.permutation(order)].reshape(ensembles, walkers, -1), mixture


def approximate(density: Straight, minima: Sequence[Basin], rng: np.random.Generator) -> Approximation:
    """Approximate a posterior about every minimum that matters, all minima with equal weights."""
    parts = [_part(density, b, rng) for b in minima if b.weight >= _LEAST_WEIGHT]
    weights = np.concatenate([p.mixture.weights for p in parts]) / len(parts)
    means = np.concatenate([p.mixture.means for p in parts])
    roots = np.concatenate([p.mixture.roots for p in parts])
    return Approximation(StudentMixture(weights, means, roots), np.min([p.spread for p in parts], axis=0))


def _part(density: Straight, basin: Basin, rng: np.random.Generator) -> Approximation:
    """Approximate about one minimum: a mixture fitted to draws of the linear problem, else one normal component."""
    middle, root = _normal(density, basin)
    draws = middle + rng.standard_normal((_DRAWS, middle.size)) @ root.T
    least = _LEAST_WITHIN * middle.size
    cloud = _linear_draws(density, middle, draws, rng)
    if len(cloud) >= least:
        centres = cloud[rng.choice(len(cloud), _COMPONENTS, replace=False)]
        mixture = fit_mixture(cloud, np.full(len(cloud), 1 / len(cloud)), centres)
        return Approximation(mixture, cloud.std(axis=0))
    within = draws[density.within(draws)]
    spread = (within if len(within) >= least else draws).std(axis=0)
    return Approximation(StudentMixture(np.ones(1), middle[None], root[None]), spread)


def _linear_draws(density: Straight, middle: Array, starts: Array, rng: np.random.Generator) -> Array:
    """Draw points within all ends, everything but the noise linear; none if no noise is unknown."""
    posterior = density.posterior
    if not isinstance(posterior, Posterior):
        return starts[:0]
    problem = LinearProblem(density, posterior, middle)
    if not problem.noise.any():
        return starts[:0]
    theta = _noise_draws(problem, starts[:, problem.noise], rng)
    points = problem.draw(np.repeat(theta, 2, axis=0), rng)
    return points[density.within(points)]


def _noise_draws(problem: LinearProblem, starts: Array, rng: np.random.Generator) -> Array:
    """Draw the noise, everything else linear, by a short chain; shape (draws, noise unknowns)."""
    import emcee
    from emcee.moves import DEMove, StretchMove

    size = starts.shape[1]
    walkers = max(_WALKERS, 4 * size)
    starts = starts[: 10 * walkers]
    order = np.argsort(-(problem(starts) + rng.gumbel(size=len(starts))))
    sampler = emcee.EnsembleSampler(
        walkers, size, problem, vectorize=True, moves=[(DEMove(), 0.6), (StretchMove(), 0.4)]
    )
    stream = np.random.RandomState(np.random.MT19937(rng.integers(2**63))).get_state(legacy=True)
    state = emcee.State(starts[order[:walkers]], random_state=stream)
    sampler.run_mcmc(state, _BURN_IN + _KEPT, skip_initial_state_check=True)
    return np.asarray(sampler.get_chain(discard=_BURN_IN, flat=True))


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
    precision = np.linalg.inv(covariance) + np.diag(np.where(edged, EDGED_PRECISION / slope**2 - 1.0, 0.0))
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
