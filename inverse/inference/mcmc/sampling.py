"""Sample the posterior: ensembles started in every minimum that matters, run until the draws suffice."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_seed, whole_number
from inverse.description.unknowns import describe_prior
from inverse.inference.mcmc.approximation import prepare
from inverse.inference.mcmc.coordinates import straightened
from inverse.inference.mcmc.ensembles import EnsembleRun, run_ensembles
from inverse.inference.mcmc.independence import IndependenceMove, StudentMixture
from inverse.inference.mcmc.verdict import Targets
from inverse.inference.minima.least_squares import Density, Fit
from inverse.inference.result import problem_record

if TYPE_CHECKING:
    import xarray as xr

    from inverse.inference.inversion import Inversion

__all__ = ["problem_hash", "sample_posterior", "walk"]

Array = NDArray[np.float64]

_CHUNK = 50


class Problem(Protocol):
    """What can be sampled: named unknowns, a density, minima to start from, and a result to fill."""

    @property
    def names(self) -> tuple[str, ...]: ...

    @property
    def posterior(self) -> Density: ...

    def least_squares(self, *, seed: int) -> Fit: ...

    def fingerprint(self) -> str: ...

    def result(self, run: EnsembleRun, seed: int, fit: Fit, *, checks: bool) -> xr.DataTree: ...


def sample_posterior(
    inversion: Problem,
    *,
    seed: int,
    fit: Fit | None = None,
    ess: float = 1000,
    rhat: float = 1.01,
    ensembles: int = 4,
    walkers: int | None = None,
    max_steps: int = 20000,
    checkpoint: str | os.PathLike[str] | None = None,
    executor: Executor | None = None,
    moves: Any = None,
    checks: bool = True,
    progress: bool | Callable[[dict[str, Any]], object] = True,
) -> xr.DataTree:
    """Sample the posterior of a problem.

    Parameters
    ----------
    inversion : Inversion or ConstantsInversion
    seed : int
        Equal seeds give equal draws, whatever the executor.
    fit : Fit, optional
        Minima to start from; least squares is run first if left out.
    ess : float
        Effective sample size that every unknown must reach.
    rhat : float
        Largest split R-hat between ensembles allowed.
    ensembles : int
        Independent ensembles; each is a chain of the result.
    walkers : int, optional
        Per ensemble; by default the larger of 24 and three per unknown, made even.
    max_steps : int
        Most steps per ensemble; the result says if they did not suffice.
    checkpoint : path, optional
        File from which a killed run goes on to the same draws.
    executor : concurrent.futures.Executor, optional
        Runs the ensembles side by side.
    moves : emcee moves, optional
        By default seven steps in ten offer fresh draws from an approximation of the posterior that was fixed before
        the run, the others are differential evolution and stretch moves. They move in the coordinates of
        `inverse.inference.mcmc.coordinates`.
    checks : bool
        Look for what speaks against the model and write it into the result as warnings; takes some seconds.
    progress : bool or callable
        Bar, nothing, or a function that is given the state.

    Returns
    -------
    xarray.DataTree
        ArviZ's schema: posterior (unknowns and derived quantities, units in attrs), sample_stats, prior,
        observed_data, constant_data, posterior_predictive.

    Raises
    ------
    ValueError
        For arguments that will not do or a checkpoint of another problem.
    """
    seed, ensembles = checked_seed(seed), whole_number("ensembles", ensembles, 1)
    if ensembles < 2:
        raise ValueError(f"ensembles={ensembles}; two or more are needed to see whether they agree.")
    # What will not do is said before the search, not after it: targets, and priors that no file could rebuild.
    Targets(ess, rhat, max_steps, _CHUNK)
    if walkers is not None:
        walkers = whole_number("walkers", walkers, 2 * len(inversion.names))
    fingerprint = inversion.fingerprint()
    fit = inversion.least_squares(seed=seed) if fit is None else _checked_fit(fit, inversion.names)
    run = walk(
        inversion,
        fit,
        seed,
        ensembles,
        walkers,
        ess=ess,
        rhat=rhat,
        max_steps=max_steps,
        moves=moves,
        checkpoint=checkpoint,
        problem_hash=fingerprint,
        progress=progress,
        executor=executor,
    )
    return inversion.result(run, seed, fit, checks=checks)


def walk(
    inversion: Problem,
    fit: Fit,
    seed: int,
    ensembles: int = 4,
    walkers: int | None = None,
    *,
    moves: Any = None,
    **settings: Any,
) -> EnsembleRun:
    """Run chains from the minima of a fit; they are of standard normal variables.

    Arguments as for `sample_posterior`, whose checks are not repeated; `settings` go to `run_ensembles`.
    """
    size = len(inversion.names)
    count = max(24, 3 * size) if walkers is None else walkers
    density = straightened(inversion.posterior)
    starts, mixture = prepare(density, fit.minima, ensembles, count + count % 2, seed)
    moves = _moves(mixture) if moves is None else moves
    run = run_ensembles(
        density, starts, seed=seed, names=inversion.names, chunk=_CHUNK, moves=moves, **settings
    )
    z, stretch = density.to_z(run.chain)
    return replace(run, chain=z, log_prob=run.log_prob - stretch)


def _checked_fit(fit: Any, names: tuple[str, ...]) -> Fit:
    if not isinstance(fit, Fit):
        raise ValueError(f"fit is a {type(fit).__name__}; give what least_squares returned, or leave it out.")
    if fit.names != names:
        raise ValueError(
            f"fit is one of {', '.join(fit.names)}, but the unknowns here are {', '.join(names)}; give a fit of this "
            "problem."
        )
    return fit


def _moves(mixture: StudentMixture) -> list[tuple[Any, float]]:
    from emcee.moves import DEMove, StretchMove

    return [(IndependenceMove(mixture), 0.7), (DEMove(), 0.25), (StretchMove(), 0.05)]


def problem_hash(inversion: Inversion) -> str:
    """Return a hash of data, model and priors, for checkpoints.

    Beside what was given go in what the defaults made of it: priors, constants and the widths of the coefficients, to
    nine digits, as a fit of time zero on another machine may differ in the last ones.
    """
    models = [member.model for member in inversion.posterior.members]
    used = {
        "priors": {name: describe_prior(prior) for name, prior in inversion.priors.items()},
        "constants": [[c["place"], c["field"], c["value"]] for m in models for c in m.bound.constants],
        "widths": [m.coefficient_widths.tolist() for m in models],
    }
    record = {"given": problem_record(inversion), "used": _rounded(used)}
    digest = hashlib.sha256(json.dumps(record, sort_keys=True).encode())
    for member in inversion.posterior.members:
        for array in (member.model.delay, *(c.data for c in member.model.channels)):
            digest.update(np.ascontiguousarray(array).tobytes())
    return digest.hexdigest()


def _rounded(value: Any) -> Any:
    """Round every number in plain data to nine digits."""
    if isinstance(value, dict):
        return {key: _rounded(v) for key, v in value.items()}
    if isinstance(value, list):
        return [_rounded(v) for v in value]
    return float(f"{value:.8e}") if isinstance(value, float) else value
