"""Where the truth of one problem lies in its posterior."""

from __future__ import annotations

import json
import time
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.inference.mcmc.importance import importance_draws
from inverse.inference.mcmc.sampling import first_mixture, sample_posterior
from inverse.study.coverage.ranks import DRAWS, rank_of
from inverse.study.coverage.replicates import quantities

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["METHODS", "Replicate", "Sampling", "judge"]

Array = NDArray[np.float64]

METHODS = ("mcmc", "importance")

_POOL = 4000
"""Draws taken from weighted points; enough that medians and standard deviations do not feel the resampling."""


@dataclass(frozen=True)
class Sampling:
    """How each posterior is sampled.

    Attributes
    ----------
    method : {"mcmc", "importance"}
    ess : float
        Effective sample size that every unknown must reach.
    max_steps : int
        Most steps of each ensemble.
    """

    method: str = "mcmc"
    ess: float = 200
    max_steps: int = 4000

    def __post_init__(self) -> None:
        """Check the settings."""
        if self.method not in METHODS:
            raise ValueError(f"method={self.method!r} is not known; choose one of {', '.join(METHODS)}.")
        if not self.ess >= DRAWS / 2:
            raise ValueError(
                f"ess={self.ess}; a truth is ranked among {DRAWS} draws, so ask for 100 or more."
            )


@dataclass(frozen=True)
class Replicate:
    """What became of one known truth.

    Attributes
    ----------
    number : int
    status : str
        ``"converged"``, ``"not converged"`` (there are draws, but fewer effective ones than asked for) or
        ``"failed"`` (there are none).
    method : str
        How the draws came about: a replicate of importance sampling may have fallen back on ``"mcmc"``.
    message : str
    truth : dict
        Quantity -> true value.
    ranks : dict
        Quantity -> posterior draws out of 199 below the truth.
    median, sd : dict
        Quantity -> of the posterior.
    seconds : float
        Processor time.
    """

    number: int
    status: str
    method: str
    message: str
    truth: Mapping[str, float]
    ranks: Mapping[str, int]
    median: Mapping[str, float]
    sd: Mapping[str, float]
    seconds: float


@dataclass(frozen=True)
class _Draws:
    """Posterior draws of shape (n, unknowns), and how they came about."""

    values: Array
    method: str
    converged: bool
    message: str


def judge(
    inversion: Inversion,
    truth: Mapping[str, float],
    number: int,
    sampling: Sampling,
    sequence: np.random.SeedSequence,
) -> Replicate:
    """Sample a posterior and rank the truth in it; an error becomes a replicate that failed.

    Parameters
    ----------
    inversion : Inversion
    truth : mapping
        True values of unknowns or derived quantities by name; other names of the problem are not ranked.
    number : int
    sampling : Sampling
    sequence : SeedSequence
    """
    start = time.process_time()
    try:
        found = _draws(inversion, sampling, sequence)
        named = quantities(inversion, found.values)
    except Exception as error:
        message = f"{type(error).__name__}: {error}"
        return Replicate(number, "failed", "", message, truth, {}, {}, {}, time.process_time() - start)
    rng = np.random.default_rng(sequence.spawn(1)[0])
    known = {name: named[name] for name in truth if name in named}
    spaced = np.linspace(0, len(found.values) - 1, DRAWS).round().astype(int)
    return Replicate(
        number=number,
        status="converged" if found.converged else "not converged",
        method=found.method,
        message=found.message,
        truth={name: float(truth[name]) for name in known},
        ranks={name: rank_of(truth[name], draws[spaced], rng) for name, draws in known.items()},
        median={name: float(np.median(draws)) for name, draws in known.items()},
        sd={name: _sd(draws) for name, draws in known.items()},
        seconds=time.process_time() - start,
    )


def _sd(draws: Array) -> float:
    """Half the width of the central 68.27 % interval: finite where a stiffness has no mean."""
    low, high = np.quantile(draws, [0.15865, 0.84135])
    return float(high - low) / 2


def _draws(inversion: Inversion, sampling: Sampling, sequence: np.random.SeedSequence) -> _Draws:
    seed = int(sequence.generate_state(1)[0])
    fit = inversion.least_squares(seed=seed)
    weighted = _weighted(inversion, fit, sampling, seed) if sampling.method == "importance" else None
    return weighted or _walked(inversion, fit, sampling, seed)


def _walked(inversion: Inversion, fit: Any, sampling: Sampling, seed: int) -> _Draws:
    tree = sample_posterior(
        inversion, seed=seed, fit=fit, ess=sampling.ess, max_steps=sampling.max_steps, progress=False
    )
    convergence = json.loads(tree.attrs["inverse"])["convergence"]
    columns = [np.asarray(tree["posterior"][name], dtype=float).ravel() for name in inversion.names]
    return _Draws(np.stack(columns, axis=1), "mcmc", convergence["converged"], convergence["message"])


def _weighted(inversion: Inversion, fit: Any, sampling: Sampling, seed: int) -> _Draws | None:
    """Draw by importance; None where the weights cannot be trusted or are too uneven."""
    rng = np.random.default_rng(np.random.SeedSequence(seed).spawn(3)[2])
    found = importance_draws(inversion.posterior, first_mixture(fit.minima), rng, sampling.ess)
    if not found.suffice(sampling.ess):
        return None
    values = inversion.posterior.parameters.to_values(found.resample(_POOL, rng))
    return _Draws(
        values, "importance", True, f"effective sample size {found.ess:.0f}, Pareto k {found.shape:.2f}"
    )
