"""The loop of a run: all ensembles make steps, which are stored and now and then judged."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from concurrent.futures import Executor
from contextlib import ExitStack
from dataclasses import dataclass

import numpy as np

from inverse.inference.mcmc.advance import EnsembleState, LogProb, Moves, Segment, advance
from inverse.inference.mcmc.checkpoint import Checkpoint, Commit, StoredRun
from inverse.inference.mcmc.convergence import (
    BurnIn,
    Convergence,
    assess,
    find_burn_in,
    rough_ess,
    rough_rhat,
)
from inverse.inference.mcmc.executor import Shared, checked_executor, run_tasks
from inverse.inference.mcmc.history import History
from inverse.inference.mcmc.initial import check_same_density, start_values
from inverse.inference.mcmc.progress import Progress, Silent
from inverse.inference.mcmc.verdict import Targets

SECONDS_BETWEEN_NEWS = 1.0
FEWEST_STEPS_AT_ONCE = 10
FAR_OFF = 0.5


@dataclass(frozen=True)
class Snapshot:
    """All that changes while sampling; replaced as a whole, so that an interrupt never finds half of it."""

    states: tuple[EnsembleState, ...]
    history: History
    accepted: np.ndarray
    evaluations: np.ndarray
    rejected: np.ndarray
    reason: str = ""

    def after(self, segments: Sequence[Segment]) -> Snapshot:
        """Add the segments, one per ensemble."""

        def total(name: str) -> np.ndarray:
            return getattr(self, name) + np.array([getattr(segment, name) for segment in segments])

        reasons = (segment.reason for segment in segments if segment.reason)
        return Snapshot(
            tuple(segment.state for segment in segments),
            self.history.extended(*_stacked(segments)),
            total("accepted"),
            total("evaluations"),
            total("rejected"),
            self.reason or next(reasons, ""),
        )

    def commit(self) -> Commit:
        """Say what a checkpoint must hold beside the steps."""
        random_states = tuple(state.random_state for state in self.states)
        return Commit(self.history.steps, random_states, self.accepted, self.evaluations, self.rejected)


def _stacked(segments: Sequence[Segment]) -> tuple[np.ndarray, np.ndarray]:
    chain = np.stack([segment.chain for segment in segments])
    return chain, np.stack([segment.log_prob for segment in segments])


class Sampling:
    """A run in progress."""

    def __init__(
        self,
        snapshot: Snapshot,
        targets: Targets,
        display: Silent,
        step_all: Callable[[Sequence[EnsembleState], int], list[Segment]],
        checkpoint: Checkpoint | None,
    ) -> None:
        self.snapshot = snapshot
        self.targets = targets
        self.display = display
        self.step_all = step_all
        self.checkpoint = checkpoint
        self.burn_in: BurnIn | None = None
        self.convergence: Convergence | None = None
        self.shown = (np.nan, np.nan)
        self.checked_at = 0
        self.seconds_per_step: float | None = None

    def run(self) -> bool:
        """Sample until the targets are met or the steps are used up; tell whether it was interrupted."""
        try:
            while not self._is_done():
                self._make_steps()
        except KeyboardInterrupt:
            if self.snapshot.history.stored < 1:
                raise
            return True
        return False

    def _is_done(self) -> bool:
        steps = self.snapshot.history.steps
        if not self.targets.is_check(steps):
            return False
        if steps < self.targets.max_steps and self._is_far_off():
            return False
        convergence = self.assessed()
        self._show(convergence.least_ess, convergence.largest_rhat)
        return steps >= self.targets.max_steps or self.targets.met_by(convergence, steps)

    def _is_far_off(self) -> bool:
        """Spare the ranks, which cost as much as many steps, while there are far too few draws."""
        chain = self.snapshot.history.kept_chain
        burn_in = self._burn_in()
        ess = rough_ess(chain, burn_in)
        if ess >= FAR_OFF * self.targets.ess:
            return False
        self._show(ess, rough_rhat(chain, burn_in))
        return True

    def _burn_in(self) -> BurnIn:
        history = self.snapshot.history
        if self.burn_in is None or self.checked_at != history.steps:
            self.burn_in = find_burn_in(history.kept_chain, history.kept_log_prob)
            self.convergence = None
            self.checked_at = history.steps
        return self.burn_in

    def assessed(self) -> Convergence:
        """Assess the steps made so far, once."""
        burn_in = self._burn_in()
        if self.convergence is None:
            history = self.snapshot.history
            self.convergence = assess(history.kept_chain, history.kept_log_prob, burn_in)
        return self.convergence

    def _make_steps(self) -> None:
        """Make about a second's worth of steps, within the chunk. How many does not change the draws."""
        before = time.perf_counter()
        count = self._steps_at_once()
        segments = self.step_all(self.snapshot.states, count)
        after = self.snapshot.after(segments)
        if self.checkpoint is not None:
            self.checkpoint.append(*_stacked(segments), after.commit())
        self.snapshot = after
        self.seconds_per_step = (time.perf_counter() - before) / count
        if not self.targets.is_check(after.history.steps):
            self._show(*self.shown)

    def _steps_at_once(self) -> int:
        left = self.targets.until_chunk(self.snapshot.history.steps)
        if self.seconds_per_step is None:
            return min(left, FEWEST_STEPS_AT_ONCE)
        return min(left, max(FEWEST_STEPS_AT_ONCE, int(SECONDS_BETWEEN_NEWS / self.seconds_per_step)))

    def _show(self, ess: float, rhat: float) -> None:
        self.shown = (ess, rhat)
        targets = self.targets
        steps = self.snapshot.history.steps
        numbers = (ess, targets.ess, rhat, targets.rhat)
        self.display.show(Progress(steps, targets.max_steps, *numbers, self.checked_at))


def first_snapshot(states: tuple[EnsembleState, ...], budget: int) -> Snapshot:
    """Stand at the starts, with `budget` bytes for the steps to come."""
    walkers, dimension = states[0].coords.shape
    none = np.zeros(len(states), dtype=int)
    return Snapshot(
        states, History.empty(len(states), walkers, dimension, budget), none, none + walkers, none
    )


def resumed(log_prob: LogProb, fresh: Snapshot, stored: StoredRun, names: Sequence[str]) -> Snapshot:
    """Take up a stored run; without steps, from its own starts, which may differ from ours by rounding."""
    commit = stored.commit
    if commit.steps:
        coords, values = stored.chain[:, -1], stored.log_prob[:, -1]
        check_same_density(log_prob, coords, values)
    else:
        coords = stored.starts
        values = start_values(log_prob, coords, names)
    return Snapshot(
        tuple(map(EnsembleState, coords, values, commit.random_states)),
        fresh.history.extended(stored.chain, stored.log_prob),
        commit.accepted,
        commit.evaluations,
        commit.rejected,
    )


def stepper(
    log_prob: LogProb, moves: Moves, executor: Executor | None, stack: ExitStack
) -> Callable[[Sequence[EnsembleState], int], list[Segment]]:
    """Make the function that advances all ensembles, on the executor or one after the other."""
    problem = (log_prob, moves)
    if executor is None:
        return lambda states, steps: [advance(problem, state, steps) for state in states]
    checked_executor(executor)
    shared = stack.enter_context(Shared(problem))
    return lambda states, steps: run_tasks(executor, shared, advance, [(state, steps) for state in states])
