"""Which pairs differ, deciding several at once: a step-down rule on two-sided tail probabilities."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

__all__ = ["decided", "levels", "most_equal_pairs", "pairs_of", "tail_probability"]

Array = NDArray[np.float64]


def pairs_of(count: int) -> list[tuple[int, int]]:
    """Return all pairs of places, (0, 1) first."""
    return list(combinations(range(count), 2))


def tail_probability(difference: Array) -> float:
    """Return twice the smaller posterior probability of the two signs.

    Parameters
    ----------
    difference : array, shape (draws,)

    Notes
    -----
    One draw is added to either side, so that no finite number of draws makes a certainty.
    """
    below = float((difference < 0).sum()) + 0.5 * float((difference == 0).sum())
    return float(2 * (min(below, difference.size - below) + 1) / (difference.size + 2))


@cache
def _equal_counts(count: int) -> frozenset[int]:
    """Numbers of pairs that can be equal at once among `count` splits."""
    if count <= 1:
        return frozenset({0})
    return frozenset(
        size * (size - 1) // 2 + rest for size in range(1, count + 1) for rest in _equal_counts(count - size)
    )


def most_equal_pairs(count: int, differing: int) -> int:
    """Return how many pairs of `count` splits can be equal when at least `differing` pairs are not."""
    total = count * (count - 1) // 2
    return max((n for n in _equal_counts(count) if n <= total - differing), default=0)


def levels(count: int, level: float) -> list[float]:
    """Return the level at which each pair is judged, the most significant first.

    Parameters
    ----------
    count : int
        Splits, two or more.
    level : float
        Probability, when nothing differs or only some pairs do, of calling any equal pair different.

    Notes
    -----
    Holm's procedure, with Shaffer's count of the pairs that can still be equal: once k pairs are known to differ, the
    other tests share the level between as many as can be equal at once. For three splits the levels are level/3, level,
    level. Shaffer, J. Am. Stat. Assoc. 81 (1986) 826 (from memory).
    """
    total = count * (count - 1) // 2
    return [level / max(most_equal_pairs(count, done), 1) for done in range(total)]


def decided(tails: Sequence[float], count: int, level: float) -> list[bool]:
    """Tell which pairs differ.

    Parameters
    ----------
    tails : sequence of float
        Two-sided tail probability of each pair, in the order of `pairs_of`.
    count : int
        Splits.
    level : float
        Familywise error.
    """
    order = np.argsort(np.asarray(tails), kind="stable")
    out = [False] * len(tails)
    for place, allowed in zip(order, levels(count, level), strict=True):
        if tails[place] > allowed:
            break
        out[place] = True
    return out
