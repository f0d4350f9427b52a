"""Where the truth of one problem lies in its posterior."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from inverse.inference.mcmc.draws import METHODS, draw_posterior
from inverse.study.coverage.ranks import DRAWS, rank_of
from inverse.study.coverage.replicates import quantities

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["Replicate", "Sampling", "judge"]

Array = NDArray[np.float64]


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
        seed = int(sequence.generate_state(1)[0])
        found = draw_posterior(
            inversion,
            inversion.least_squares(seed=seed),
            seed=seed,
            ess=sampling.ess,
            method=sampling.method,
            max_steps=sampling.max_steps,
        )
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
