"""Several independent ensembles of walkers, run until their draws suffice."""

from __future__ import annotations

import os
import platform
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import Executor
from contextlib import ExitStack
from dataclasses import dataclass
from typing import Any

import numpy as np

from inverse.inference.mcmc.advance import LogProb, checked_moves, describe_moves
from inverse.inference.mcmc.checkpoint import Checkpoint, Identity, read_checkpoint
from inverse.inference.mcmc.convergence import walker_major
from inverse.inference.mcmc.initial import checked_starts, describe_seed, initial_states, seed_sequence
from inverse.inference.mcmc.loop import Sampling, first_snapshot, resumed, stepper
from inverse.inference.mcmc.progress import reporter
from inverse.inference.mcmc.verdict import Ending, Targets

MEGABYTE = 2**20


@dataclass(frozen=True)
class Draws:
    """Draws laid out for ArviZ: one chain per ensemble, walker after walker.

    Attributes
    ----------
    values : dict of str to ndarray, shape (chain, draw)
    log_prob : ndarray, shape (chain, draw)
    walker, step : ndarray of int, shape (draw,)
        Where each draw comes from; the first step of a run is 1.
    """

    values: dict[str, np.ndarray]
    log_prob: np.ndarray
    walker: np.ndarray
    step: np.ndarray


@dataclass(frozen=True)
class EnsembleRun:
    """What a run has given.

    Attributes
    ----------
    chain : ndarray, shape (ensembles, kept, walkers, d)
        Kept steps, after burn-in.
    log_prob : ndarray, shape (ensembles, kept, walkers)
    names : tuple of str
    burn_in : int
        Steps dropped at the start.
    steps_total : int
        Steps made by each ensemble.
    thin : int
        Every `thin`-th step was stored.
    acceptance : ndarray, shape (ensembles,)
        Accepted share of all proposals.
    autocorrelation_time : ndarray, shape (d,)
        In steps, from the second half of the run.
    ess, ess_tail : ndarray, shape (d,)
        Bulk and tail effective sample size of the kept steps.
    rhat : ndarray, shape (d,)
        Rank-normalised split R-hat between ensembles.
    drift : ndarray, shape (d,)
        Last minus first third of the kept steps, in Monte Carlo deviations.
    converged, interrupted : bool
    message : str
        How the run ended, what is missing, what looks wrong.
    evaluations, rejected_evaluations : int
        Evaluations of the log density, and those among them that were NaN or failed and counted as
        impossible.
    seed : str
        Entropy and spawn key of the seed.
    versions : mapping of str to str
    """

    chain: np.ndarray
    log_prob: np.ndarray
    names: tuple[str, ...]
    burn_in: int
    steps_total: int
    thin: int
    acceptance: np.ndarray
    autocorrelation_time: np.ndarray
    ess: np.ndarray
    ess_tail: np.ndarray
    rhat: np.ndarray
    drift: np.ndarray
    converged: bool
    interrupted: bool
    message: str
    evaluations: int
    rejected_evaluations: int
    seed: str
    versions: Mapping[str, str]

    def walker_major(self) -> Draws:
        """Lay the draws out with a chain per ensemble, walker after walker."""
        _, kept, walkers, dimension = self.chain.shape
        steps = self.thin * (self.burn_in // self.thin + 1 + np.arange(kept))
        return Draws(
            {self.names[k]: walker_major(self.chain[..., k]) for k in range(dimension)},
            walker_major(self.log_prob),
            np.repeat(np.arange(walkers), kept),
            np.tile(steps, walkers),
        )


def run_ensembles(
    log_prob: LogProb,
    starts: np.ndarray,
    *,
    seed: int | np.random.SeedSequence,
    names: Sequence[str],
    ess: float = 1000,
    rhat: float = 1.01,
    max_steps: int = 20000,
    chunk: int = 200,
    moves: Any = None,
    checkpoint: str | os.PathLike[str] | None = None,
    problem_hash: str = "",
    progress: bool | Callable[[dict[str, Any]], object] = True,
    executor: Executor | None = None,
    memory: float = 512.0,
) -> EnsembleRun:
    """Sample a density with several independent ensembles until the draws suffice.

    Burn-in is the larger of five autocorrelation times and twice the step at which the log density has
    settled; it must be over by half of the run. The run stops when every name has the effective sample size
    wanted, in bulk and tail, split R-hat between ensembles is low enough for every name, and neither a name
    nor the log density drifts by more than 3.5 Monte Carlo deviations from the first to the last third of the
    kept steps.

    Parameters
    ----------
    log_prob : callable
        Takes points of shape (n, d), gives log densities of shape (n,). NaN and exceptions count as
        impossible and are counted, except at the starts. To be picklable if the executor's workers are
        processes.
    starts : ndarray, shape (ensembles, walkers, d)
        Walkers even in number and at least 2 d; every one where the density is finite.
    seed : int or SeedSequence
        Every ensemble has a stream of its own from it. The draws depend neither on the executor nor on
        interruptions.
    names : sequence of str, length d
    ess : float
        Effective sample size wanted.
    rhat : float
        Largest R-hat allowed.
    max_steps : int
        Most steps of each ensemble, earlier ones of a resumed run included.
    chunk : int
        Steps between two checks of convergence.
    moves : emcee moves, optional
        Differential evolution (0.8) with stretch moves (0.2) if left out.
    checkpoint : path, optional
        File to write to; if it exists, the run goes on from it.
    problem_hash : str
        Of data, model and priors; a checkpoint with another one is refused.
    progress : bool or callable
        See `progress.reporter`.
    executor : concurrent.futures.Executor, optional
        Ensembles run side by side on it; one after the other if left out.
    memory : float
        Megabytes that the stored steps may take. When they would take more, every second one is dropped.

    Returns
    -------
    EnsembleRun
        With `converged` False and the reason in `message` if the steps ran out, `interrupted` True after
        Ctrl-C.

    Raises
    ------
    ValueError
        For starts, names, moves, targets or a checkpoint that will not do, or a density of +inf.
    KeyboardInterrupt
        After Ctrl-C before the first steps were made.

    References
    ----------
    Goodman and Weare, Comm. Appl. Math. Comp. Sci. 5 (2010) 65; Foreman-Mackey, Hogg, Lang and Goodman, PASP
    125 (2013) 306; ter Braak, Statistics and Computing 16 (2006) 239. From memory.
    """
    targets = Targets(ess, rhat, max_steps, chunk)
    if not memory > 0:
        raise ValueError(f"memory must be a positive number of megabytes, not {memory!r}")
    starts = checked_starts(starts, names)
    moves = checked_moves(moves)
    sequence = seed_sequence(seed)
    display = reporter(progress)
    identity = Identity(
        problem_hash,
        describe_seed(sequence),
        tuple(names),
        len(starts),
        starts.shape[1],
        describe_moves(moves),
    )
    states = initial_states(log_prob, starts, sequence, names)
    snapshot = first_snapshot(states, int(memory * MEGABYTE))
    journal = None
    if checkpoint is not None:
        journal = Checkpoint(checkpoint, identity, starts, snapshot.commit(), 10 * chunk)
        snapshot = resumed(log_prob, snapshot, read_checkpoint(checkpoint), names)
    with ExitStack() as stack:
        stack.callback(display.close)
        step_all = stepper(log_prob, moves, executor, stack)
        sampling = Sampling(snapshot, targets, display, step_all, journal)
        interrupted = sampling.run()
    return _result(sampling, identity, interrupted)


def _result(sampling: Sampling, identity: Identity, interrupted: bool) -> EnsembleRun:
    history, convergence = sampling.snapshot.history, sampling.assessed()
    chain = history.kept_chain[:, convergence.burn_in :]
    ending = _ending(sampling, identity, chain, interrupted)
    return EnsembleRun(
        chain=chain,
        log_prob=history.kept_log_prob[:, convergence.burn_in :],
        names=identity.names,
        burn_in=convergence.burn_in * history.thin,
        steps_total=history.steps,
        thin=history.thin,
        acceptance=ending.acceptance,
        autocorrelation_time=convergence.autocorrelation_time * history.thin,
        ess=convergence.ess,
        ess_tail=convergence.ess_tail,
        rhat=convergence.rhat,
        drift=convergence.drift,
        converged=ending.converged,
        interrupted=interrupted,
        message=ending.remarks(),
        evaluations=ending.evaluations,
        rejected_evaluations=ending.rejected,
        seed=identity.seed,
        versions=_versions(),
    )


def _ending(sampling: Sampling, identity: Identity, chain: np.ndarray, interrupted: bool) -> Ending:
    snapshot, history = sampling.snapshot, sampling.snapshot.history
    return Ending(
        convergence=sampling.assessed(),
        targets=sampling.targets,
        names=identity.names,
        means=chain.mean(axis=(1, 2)),
        acceptance=snapshot.accepted / (history.steps * identity.walkers),
        steps=history.steps,
        kept=chain.shape[1],
        thin=history.thin,
        evaluations=int(snapshot.evaluations.sum()),
        rejected=int(snapshot.rejected.sum()),
        reason=snapshot.reason,
        interrupted=interrupted,
    )


def _versions() -> dict[str, str]:
    import emcee

    return {"emcee": emcee.__version__, "numpy": np.__version__, "python": platform.python_version()}
