"""One ensemble, advanced by some steps: the guarded log density, the moves, and the state handed on."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from copy import deepcopy
from dataclasses import dataclass
from typing import Any

import numpy as np

LogProb = Callable[[np.ndarray], np.ndarray]
Moves = list[tuple[Any, float]]
LAST_WRONG_SNOOKER = (3, 1, 6)


@dataclass(frozen=True)
class EnsembleState:
    """Where an ensemble stands.

    Attributes
    ----------
    coords : ndarray, shape (walkers, d)
    log_prob : ndarray, shape (walkers,)
    random_state : tuple
        State of a legacy Mersenne Twister, the only form that emcee does not ignore.
    """

    coords: np.ndarray
    log_prob: np.ndarray
    random_state: tuple[Any, ...]


@dataclass(frozen=True)
class Segment:
    """Steps that one ensemble has made.

    Attributes
    ----------
    state : EnsembleState
        After the last step.
    chain : ndarray, shape (steps, walkers, d)
    log_prob : ndarray, shape (steps, walkers)
    accepted : int
        Accepted proposals of all walkers.
    evaluations, rejected : int
        Evaluations of the log density, and those among them that were NaN or failed.
    reason : str
        What the first rejected evaluation said; "" if none was.
    """

    state: EnsembleState
    chain: np.ndarray
    log_prob: np.ndarray
    accepted: int
    evaluations: int
    rejected: int
    reason: str


class GuardedLogProb:
    """A log density for which NaN and exceptions count as impossible (-inf), and are counted.

    Parameters
    ----------
    log_prob : callable
        Takes (n, d), gives (n,).
    """

    def __init__(self, log_prob: LogProb) -> None:
        self.log_prob = log_prob
        self.evaluations = 0
        self.rejected = 0
        self.reason = ""

    def __call__(self, points: np.ndarray) -> np.ndarray:
        """Evaluate a batch; refuse +inf and a wrong shape."""
        values = checked_values(self._evaluate(points), points)
        failed = np.isnan(values)
        self.evaluations += len(points)
        if failed.any():
            self.rejected += int(failed.sum())
            self.reason = self.reason or "the log density was NaN"
            values = np.where(failed, -np.inf, values)
        return values

    def _evaluate(self, points: np.ndarray) -> Any:
        try:
            return self.log_prob(points)
        except Exception:
            return np.array([self._evaluate_one(point) for point in points])

    def _evaluate_one(self, point: np.ndarray) -> float:
        """Evaluate one point of a batch that failed, so that its neighbours do not fail with it."""
        try:
            return float(checked_values(self.log_prob(point[np.newaxis]), point[np.newaxis])[0])
        except Exception as error:
            self.reason = self.reason or f"{type(error).__name__}: {error}"
            return np.nan


def checked_values(values: Any, points: np.ndarray) -> np.ndarray:
    """Check what a log density returned: one number per point, none of them +inf."""
    values = np.asarray(values, dtype=float)
    if values.shape != (len(points),):
        raise ValueError(
            f"log_prob returned shape {values.shape} for points of shape {points.shape}; it must return one "
            f"value per point, shape ({len(points)},)"
        )
    if np.isposinf(values).any():
        where = points[np.isposinf(values)][0].tolist()
        raise ValueError(
            f"log_prob is +inf at {where}: every walker would stay there for ever; make the density finite "
            "(a division by zero, a width of zero?)"
        )
    return values


def default_moves() -> Moves:
    """Differential evolution four times in five, else the stretch move."""
    from emcee.moves import DEMove, StretchMove

    return [(DEMove(), 0.8), (StretchMove(), 0.2)]


def checked_moves(moves: Any) -> Moves:
    """Bring moves into the form of (move, weight) pairs and refuse a snooker move that is wrong.

    Parameters
    ----------
    moves : None, emcee move, or sequence of moves or of (move, weight)

    Raises
    ------
    ValueError
        For something that is no move, weights that are not positive, or the snooker move of emcee up to
        3.1.6.
    """
    from emcee.moves import DESnookerMove

    if moves is None:
        return default_moves()
    entries = list(moves) if isinstance(moves, Sequence) else [moves]
    pairs = [entry if isinstance(entry, tuple) and len(entry) == 2 else (entry, 1.0) for entry in entries]
    for move, weight in pairs:
        if (
            not callable(getattr(move, "propose", None))
            or not isinstance(weight, int | float)
            or not weight > 0
        ):
            raise ValueError(
                f"moves must be emcee moves or (move, positive weight) pairs, not {(move, weight)!r}; leave "
                "moves out for differential evolution with stretch moves"
            )
        if isinstance(move, DESnookerMove):
            _refuse_wrong_snooker()
    if not pairs:
        raise ValueError("moves is empty: give at least one emcee move, or leave moves out for the default")
    return [(move, float(weight)) for move, weight in pairs]


def _refuse_wrong_snooker() -> None:
    import emcee

    version = tuple(int(part) for part in emcee.__version__.split(".")[:3] if part.isdigit())
    if version <= LAST_WRONG_SNOOKER:
        raise ValueError(
            f"DESnookerMove of emcee {emcee.__version__} samples the wrong distribution: its projection is "
            "not along a unit vector and its exponent is (d - 1) / 2 in place of d - 1, so that intervals "
            "come out too narrow (standard deviations 6 % short in ten dimensions at a weight of 0.2). "
            "Leave it out: DEMove with StretchMove, the default, mixes faster"
        )


def describe_moves(moves: Moves) -> str:
    """Name moves, their settings and weights, for telling two runs apart."""
    parts = []
    for move, weight in moves:
        # Objects are left out: their repr may hold an address, which differs from one process to the next.
        plain = {
            key: value for key, value in sorted(vars(move).items()) if np.isscalar(value) or value is None
        }
        settings = ", ".join(f"{key}={value!r}" for key, value in plain.items())
        parts.append(f"{weight:g} {type(move).__name__}({settings})")
    return " + ".join(parts)


def advance(problem: tuple[LogProb, Moves], state: EnsembleState, steps: int) -> Segment:
    """Advance one ensemble.

    Parameters
    ----------
    problem : tuple
        The log density and the moves. The moves are copied, since a move may keep a state of its own.
    state : EnsembleState
    steps : int

    Returns
    -------
    Segment
        The same whatever process it runs in and however the steps are divided over calls.
    """
    from emcee import EnsembleSampler, State

    guarded = GuardedLogProb(problem[0])
    walkers, dimension = state.coords.shape
    sampler = EnsembleSampler(walkers, dimension, None, moves=deepcopy(problem[1]), vectorize=True)
    # Set afterwards: emcee's own wrapper would print a traceback to stdout when log_prob is refused.
    sampler.log_prob_fn = guarded
    start = State(state.coords, log_prob=state.log_prob, random_state=state.random_state)
    end = sampler.run_mcmc(start, steps, skip_initial_state_check=True)
    return Segment(
        EnsembleState(end.coords, end.log_prob, end.random_state),
        sampler.backend.chain,
        sampler.backend.log_prob,
        int(sampler.backend.accepted.sum()),
        guarded.evaluations,
        guarded.rejected,
        guarded.reason,
    )
