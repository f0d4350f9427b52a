"""Four independent ensembles of the bundled example in one process, and on two worker processes.

Both make the same steps; the workers are started, and have met the problem, before the clock runs. Times are by the
clock; plain counting in turn with them tells what the machine gives two processes at the moment, and the CPU time of
the main process while the workers work what no core can share.
Run ``python tests/benchmarks/both_cores.py`` for the figures.
"""

import time
from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import dataclass
from statistics import median

import jacobian
import numpy as np
from counting import counts_per_second

from inverse.inference.mcmc.approximation import prepare
from inverse.inference.mcmc.coordinates import straightened
from inverse.inference.mcmc.ensembles import EnsembleRun, run_ensembles
from inverse.inference.mcmc.executor import worker_pool

ENSEMBLES, WALKERS = 4, 28


@dataclass(frozen=True)
class Timing:
    """Seconds by the clock of each repeat; CPU seconds of the main process, alone and beside the workers.

    `counted` is the gain of plain counting.
    """

    alone: list[float]
    pooled: list[float]
    main_alone: float
    main_pooled: float
    counted: float
    same_draws: bool

    @property
    def speed_up(self) -> float:
        """Median of the repeats' ratios."""
        return median(a / p for a, p in zip(self.alone, self.pooled, strict=True))

    @property
    def bound(self) -> float:
        """Speed-up on two cores if nothing but the main process's own work stood in the way."""
        return self.main_alone / (self.main_pooled + (self.main_alone - self.main_pooled) / 2)


def measure(steps: int = 100, repeats: int = 3) -> Timing:
    """Run both ways in turn."""
    inversion = jacobian.example()
    fit = inversion.least_squares(starts=2, seed=1)
    density = straightened(inversion.posterior)
    starts, _ = prepare(density, fit.minima, ENSEMBLES, WALKERS, 1)

    def run(executor: Executor | None, count: int) -> EnsembleRun:
        options = {"ess": 1e9, "max_steps": count, "chunk": 50, "progress": False, "executor": executor}
        return run_ensembles(density, starts, seed=1, names=inversion.names, **options)

    turns, counted = [], []
    with worker_pool(1) as single, worker_pool(2) as pool:
        run(pool, 50)
        counts_per_second(1, single)
        for _ in range(repeats):
            turns.append((_timed(lambda: run(None, steps)), _timed(lambda: run(pool, steps))))
            counted.append(counts_per_second(8, pool) / counts_per_second(4, single))
    same = all(np.array_equal(one.chain, two.chain) for (one, *_), (two, *_) in turns)
    return Timing(
        [t for (_, t, _), _ in turns],
        [t for _, (_, t, _) in turns],
        min(cpu for (_, _, cpu), _ in turns),
        min(cpu for _, (_, _, cpu) in turns),
        median(counted),
        same,
    )


def _timed(call: Callable[[], EnsembleRun]) -> tuple[EnsembleRun, float, float]:
    wall, cpu = time.perf_counter(), time.process_time()
    found = call()
    return found, time.perf_counter() - wall, time.process_time() - cpu


if __name__ == "__main__":
    found = measure(repeats=7)
    print(found)
    print(
        f"{found.speed_up:.2f} times by the clock, {found.bound:.2f} possible beside the main process's own work; "
        f"plain counting gains {found.counted:.2f}"
    )
