"""Draws of a posterior: by importance where the weights can be trusted, else by Markov chains."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.inference.mcmc.advance import GuardedLogProb
from inverse.inference.mcmc.approximation import approximate
from inverse.inference.mcmc.coordinates import straightened
from inverse.inference.mcmc.importance import importance_draws
from inverse.inference.mcmc.sampling import Problem, walk
from inverse.inference.minima.least_squares import Fit

__all__ = ["METHODS", "PosteriorSample", "draw_posterior", "weighted_sample"]

Array = NDArray[np.float64]

METHODS = ("importance", "mcmc")

_POOL = 4000
"""Draws taken from weighted points; enough that medians and standard deviations do not feel the resampling."""


@dataclass(frozen=True)
class PosteriorSample:
    """Draws of a posterior.

    Attributes
    ----------
    values : array, shape (draws, unknowns)
    method : str
        How they came about.
    converged : bool
    message : str
        Of the sampler.
    """

    values: Array
    method: str
    converged: bool
    message: str


def draw_posterior(
    inversion: Problem,
    fit: Fit,
    *,
    seed: int,
    ess: float,
    method: str = "importance",
    max_steps: int = 20000,
) -> PosteriorSample:
    """Sample a posterior from its minima.

    Parameters
    ----------
    inversion : Inversion
    fit : Fit
        Its minima.
    seed : int
    ess : float
        Effective sample size that every unknown must reach.
    method : {"importance", "mcmc"}
        The first falls back on the second where the weights cannot be trusted or are too uneven.
    max_steps : int
        Of the chains.
    """
    found = weighted_sample(inversion, fit, seed=seed, ess=ess) if method == "importance" else None
    return found or _walked(inversion, fit, seed, ess, max_steps)


def weighted_sample(
    inversion: Problem, fit: Fit, *, seed: int, ess: float, check: Callable[[], None] | None = None
) -> PosteriorSample | None:
    """Sample a posterior by importance; None where the weights cannot be trusted or are too uneven.

    Arguments as for `draw_posterior`; `check` is called now and then and may raise to end the work.
    """
    rng = np.random.default_rng(np.random.SeedSequence(seed).spawn(3)[2])
    straight = straightened(inversion.posterior)
    guarded = GuardedLogProb(straight)

    def density(points: Array) -> Array:
        if check is not None:
            check()
        return guarded(points)

    found = importance_draws(density, approximate(straight, fit.minima, rng), rng, ess)
    if not found.suffice(ess):
        return None
    z, _ = straight.to_z(found.resample_evenly(_POOL, rng))
    message = f"effective sample size {found.ess:.0f}, Pareto k {found.shape:.2f}"
    return PosteriorSample(inversion.posterior.parameters.to_values(z), "importance", True, message)


def _walked(inversion: Problem, fit: Fit, seed: int, ess: float, max_steps: int) -> PosteriorSample:
    run = walk(inversion, fit, seed, ess=ess, max_steps=max_steps, progress=False)
    values = inversion.posterior.parameters.to_values(run.chain.reshape(-1, len(inversion.names)))
    return PosteriorSample(values, "mcmc", run.converged, run.message)
