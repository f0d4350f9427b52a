"""Ranks of known truths among posterior draws, and what they may look like if the intervals are right.

If truths are drawn from the prior and data from the model, the rank of the truth among L independent posterior draws
is uniform on 0 ... L (Cook, Gelman and Rubin 2006; Talts et al. 2018). The share of ranks below every level, and the
share of truths inside every central interval, are binomial; what the most extreme of them all may be is found by
simulation (Säilynoja, Bürkner and Vehtari, Statistics and Computing 32 (2022) 32). All from memory.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import bdtr, bdtrc

__all__ = [
    "CELLS",
    "DRAWS",
    "Bands",
    "checked_levels",
    "counts",
    "rank_of",
    "simultaneous_bands",
    "tail_probability",
]

Array = NDArray[np.float64]
Counts = NDArray[np.int64]

DRAWS = 199
"""Posterior draws a truth is ranked among: with 200 possible ranks every whole per cent is an exact interval."""

CELLS = DRAWS + 1

_LEAST_IN_TAIL = 100
_BLOCK = 5000
_SEED = 20180418


@dataclass(frozen=True)
class Bands:
    """Counts that are admitted everywhere at once, out of `replicates`.

    Attributes
    ----------
    replicates : int
    levels : tuple of float
    failure : float
        Probability that a correct quantity leaves the bands anywhere.
    pointwise : float
        The two-sided tail probability at each place that gives it.
    below : array, shape (DRAWS, 2)
        Least and largest number of ranks below 1, 2, ... DRAWS.
    inside : array, shape (levels, 2)
        Least and largest number of truths inside each central interval.
    """

    replicates: int
    levels: tuple[float, ...]
    failure: float
    pointwise: float
    below: Counts
    inside: Counts

    def admits(self, ranks: Counts) -> bool:
        """Say whether ranks of one quantity stay inside all bands."""
        found = counts(_histogram(ranks)[None], self.levels)[0]
        limits = np.concatenate([self.below, self.inside])
        return bool(((found >= limits[:, 0]) & (found <= limits[:, 1])).all())


def checked_levels(levels: Sequence[float]) -> tuple[float, ...]:
    """Return levels in increasing order; each must be a whole per cent.

    Raises
    ------
    ValueError
        If one is not 0.01, 0.02, ... 0.99 or there is none.
    """
    found = tuple(sorted(float(level) for level in levels))
    if not found or any(not 0 < p < 1 or abs(100 * p - round(100 * p)) > 1e-9 for p in found):
        raise ValueError(
            f"levels={tuple(levels)!r}; give whole per cents between 0.01 and 0.99, such as (0.5, 0.9)."
        )
    return found


def rank_of(truth: float, draws: Array, rng: np.random.Generator) -> int:
    """Count the draws below a truth; ties are broken at random."""
    below, equal = int((draws < truth).sum()), int((draws == truth).sum())
    return below + int(rng.integers(equal + 1))


def counts(histogram: Counts, levels: Sequence[float]) -> Counts:
    """Count ranks below 1 ... DRAWS, and truths inside central intervals.

    Parameters
    ----------
    histogram : array of int, shape (n, CELLS)
        How often each rank occurred.
    levels : sequence of float

    Returns
    -------
    array of int, shape (n, DRAWS + levels)
    """
    below = np.cumsum(histogram, axis=1)[:, :-1]
    edges = [_edge(level) for level in levels]
    inside = [below[:, CELLS - k - 1] - below[:, k - 1] for k in edges]
    return np.concatenate([below, np.stack(inside, axis=1)], axis=1)


def tail_probability(found: Counts, replicates: int, probability: Array) -> Array:
    """Return the two-sided binomial tail probability of counts, at most 1."""
    low = bdtr(found, replicates, probability)
    high = np.where(found > 0, bdtrc(np.maximum(found - 1, 0), replicates, probability), 1.0)
    return np.asarray(np.minimum(1.0, 2 * np.minimum(low, high)))


def simultaneous_bands(replicates: int, levels: Sequence[float], failure: float) -> Bands:
    """Find bands that a correct quantity leaves anywhere with at most a given probability.

    Parameters
    ----------
    replicates : int
    levels : sequence of float
    failure : float
        For one quantity; divide a budget by their number.

    Raises
    ------
    ValueError
        If `replicates` is below 1, or `failure` is not between 0 and 1.
    """
    if replicates < 1 or not 0 < failure < 1:
        raise ValueError(f"replicates={replicates}, failure={failure}; give 1 or more, and a probability.")
    probability = np.concatenate([np.arange(1, CELLS) / CELLS, levels])
    table = tail_probability(np.arange(replicates + 1)[:, None], replicates, probability)
    pointwise = _smallest_tails(table, replicates, levels, failure)
    # A count as unlikely as the bound itself is admitted.
    admitted = table >= pointwise
    limits = np.stack([admitted.argmax(axis=0), replicates - admitted[::-1].argmax(axis=0)], axis=1)
    return Bands(replicates, tuple(levels), failure, pointwise, limits[:DRAWS], limits[DRAWS:])


def _smallest_tails(table: Array, replicates: int, levels: Sequence[float], failure: float) -> float:
    """Simulate correct ranks; return the bound that the smallest tail probability falls below that rarely."""
    rng = np.random.default_rng(_SEED)
    total = max(2 * _BLOCK, int(np.ceil(_LEAST_IN_TAIL / failure)))
    places = np.arange(table.shape[1])
    smallest = []
    for start in range(0, total, _BLOCK):
        size = min(_BLOCK, total - start)
        histogram = rng.multinomial(replicates, np.full(CELLS, 1 / CELLS), size=size)
        smallest.append(table[counts(histogram, levels), places].min(axis=1))
    ordered = np.sort(np.concatenate(smallest))
    return float(ordered[int(failure * total)])


def _histogram(ranks: Counts) -> Counts:
    return np.bincount(ranks, minlength=CELLS)


def _edge(level: float) -> int:
    """Ranks left out on either side of a central interval."""
    return round(CELLS * (1 - level) / 2)
