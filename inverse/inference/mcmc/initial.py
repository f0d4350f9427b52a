"""Where ensembles start: walkers, log densities, and a stream of random numbers for each ensemble."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from inverse.description.arguments import checked_seed
from inverse.inference.mcmc.advance import EnsembleState, LogProb, checked_values


def checked_starts(starts: Any, names: Sequence[str]) -> np.ndarray:
    """Check shape, names, number and spread of walkers; a copy, shape (ensembles, walkers, d)."""
    starts = np.array(starts, dtype=float)
    if starts.ndim != 3 or 0 in starts.shape:
        raise ValueError(f"starts must have shape (ensembles, walkers, {len(names)}), not {starts.shape}")
    ensembles, walkers, dimension = starts.shape
    if isinstance(names, str) or len(names) != dimension or len(set(names)) != dimension:
        raise ValueError(
            f"names must be {dimension} different names, one per column of starts, not {names!r}"
        )
    if walkers % 2 or walkers < 2 * dimension:
        raise ValueError(
            f"starts has {walkers} walkers per ensemble; it takes an even number, at least twice the "
            f"{dimension} unknowns: {2 * dimension} or more"
        )
    for index in range(ensembles):
        _check_spread(starts[index], index, names)
    return starts


def _check_spread(walkers: np.ndarray, ensemble: int, names: Sequence[str]) -> None:
    """Refuse walkers that cannot leave a plane: moves combine their differences."""
    if not np.isfinite(walkers).all():
        walker, column = map(int, np.argwhere(~np.isfinite(walkers))[0])
        raise ValueError(
            f"starts: {names[column]} of walker {walker} in ensemble {ensemble} is "
            f"{walkers[walker, column]}; every start must be a finite number"
        )
    centred = walkers - walkers.mean(axis=0)
    spread = centred.std(axis=0)
    still = [names[int(k)] for k in np.flatnonzero(spread <= 1e-14 * np.abs(walkers).max(axis=0))]
    if still or np.linalg.matrix_rank(centred / spread) < len(names):
        what = f"do not differ in {', '.join(still)}" if still else "lie in a plane of fewer dimensions"
        raise ValueError(
            f"starts: the walkers of ensemble {ensemble} {what}, which no move would ever leave; scatter "
            "them in every unknown"
        )


def seed_sequence(seed: int | np.random.SeedSequence) -> np.random.SeedSequence:
    """Make a fresh sequence: spawning from the caller's own would give other streams the second time."""
    if isinstance(seed, np.random.SeedSequence):
        return np.random.SeedSequence(seed.entropy, spawn_key=seed.spawn_key, pool_size=seed.pool_size)
    return np.random.SeedSequence(checked_seed(seed))


def describe_seed(sequence: np.random.SeedSequence) -> str:
    """Write entropy and spawn key."""
    key = "" if not sequence.spawn_key else f" spawned {'.'.join(map(str, sequence.spawn_key))}"
    return f"{sequence.entropy}{key}"


def initial_states(
    log_prob: LogProb, starts: np.ndarray, sequence: np.random.SeedSequence, names: Sequence[str]
) -> tuple[EnsembleState, ...]:
    """Evaluate the starts and give every ensemble a stream spawned from the seed."""
    children = sequence.spawn(len(starts))
    streams = (np.random.RandomState(np.random.MT19937(child)).get_state(legacy=True) for child in children)
    return tuple(map(EnsembleState, starts, start_values(log_prob, starts, names), map(tuple, streams)))


def start_values(log_prob: LogProb, starts: np.ndarray, names: Sequence[str]) -> np.ndarray:
    """Evaluate the starts, shape (ensembles, walkers); each must be finite, and exceptions come through."""
    values = np.stack([checked_values(log_prob(points), points) for points in starts])
    for index, points in enumerate(starts):
        _check_start_values(values[index], points, index, names)
    return values


def _check_start_values(values: np.ndarray, walkers: np.ndarray, ensemble: int, names: Sequence[str]) -> None:
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        where = ", ".join(f"{name} = {value:.6g}" for name, value in zip(names, walkers[bad[0]], strict=True))
        raise ValueError(
            f"starts: the log density of walker {bad[0]} in ensemble {ensemble} is {values[bad[0]]} "
            f"({where}); {bad.size} of {values.size} walkers there are like this; start where the density is "
            "finite"
        )


def check_same_density(log_prob: LogProb, coords: np.ndarray, stored: np.ndarray) -> None:
    """Refuse to go on with a density that has changed: old values would hold the walkers where they are."""
    now = np.stack([checked_values(log_prob(points), points) for points in coords])
    if not np.allclose(now, stored, rtol=1e-6, atol=1e-4):
        raise ValueError(
            "checkpoint: the log density of the stored walkers has changed by up to "
            f"{np.max(np.abs(now - stored)):.3g} since they were stored; the model, data or priors are "
            "others: give another file name"
        )
