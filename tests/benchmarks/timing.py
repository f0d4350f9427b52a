"""Ratios of times taken side by side: the alternatives take turns, so that whatever else the machine does meets all."""

import time
from collections.abc import Callable, Mapping

from threadpoolctl import threadpool_limits

__all__ = ["fewest_seconds", "one_thread"]


def one_thread() -> None:
    """Keep linear algebra to one core for the rest of the process."""
    threadpool_limits(1)


def fewest_seconds(
    alternatives: Mapping[str, Callable[[], object]],
    rounds: int = 7,
    clock: Callable[[], float] = time.process_time,
) -> dict[str, float]:
    """Call the alternatives in turn, once unmeasured, and return the least time of each in seconds.

    CPU time by default: a process that waits for its turn is not charged for it.
    """
    best = dict.fromkeys(alternatives, float("inf"))
    for call in alternatives.values():
        call()
    for _ in range(rounds):
        for name, call in alternatives.items():
            started = clock()
            call()
            best[name] = min(best[name], clock() - started)
    return best
