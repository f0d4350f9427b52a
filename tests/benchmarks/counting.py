"""Plain counting, which needs a core and nothing else: what two processes gain of it is what the machine can give."""

import time
from concurrent.futures import Executor


def count(number: int) -> int:
    """Keep a core busy for some tenths of a second."""
    total = 0
    for k in range(5_000_000):
        total += k ^ number
    return total


def counts_per_second(times: int, pool: Executor) -> float:
    """Rate of counting in a pool, by the clock."""
    started = time.perf_counter()
    list(pool.map(count, range(times)))
    return times / (time.perf_counter() - started)
