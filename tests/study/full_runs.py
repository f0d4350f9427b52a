"""The full coverage runs, whose tables are kept in COVERAGE.md.

From the top of the repository: ``PYTHONPATH=.:tests python tests/study/full_runs.py NAME [STORE]``, NAME one of the
functions below. With a STORE a calibration that was interrupted goes on.
"""

import sys

from aluminium_on_silicon import (
    AL_HOT,
    NAMES,
    SETUP,
    SI,
    FromModel,
    further_trace,
    split_problem,
    split_trace,
    split_truth,
    stack,
    white_split,
)

import inverse as inv
from inverse.inference.mcmc.executor import worker_pool
from inverse.study.coverage.check import check_coverage, check_known

RUN = {"method": "importance", "progress": True}


def calibration(pool, store):
    """Simulation-based calibration, default noise."""
    return check_coverage(split_problem("A11"), seed=1, replicates=200, executor=pool, store=store, **RUN)


def calibration_by_mcmc(pool, store):
    """Simulation-based calibration of the path that users take, other truths."""
    problem = split_problem("A11")
    return check_coverage(problem, seed=12, replicates=100, executor=pool, store=store, method="mcmc")


def calibration_student(pool, store):
    """Simulation-based calibration, noise with outliers: white noise of Student's t distribution."""
    problem = split_problem("A11", "student")
    return check_coverage(problem, seed=4, replicates=20, executor=pool, store=store, **RUN)


def white_on_drifting(pool, store):
    """Negative control: white noise on traces whose drift is a third of their white noise."""
    problem = split_problem("A11", "white")
    level = problem.priors["noise.white"].median()
    drift = (("noise.discrepancy", level / 3), ("noise.correlation_time", 10.0))
    drifting = FromModel(split_problem("A11"), drift)
    return check_coverage(
        problem, seed=2, replicates=100, simulate_trace=drifting, executor=pool, store=store, **RUN
    )


def one_temperature(pool, store):
    """Negative control: one temperature on traces of two."""
    hot = FromModel(inv.Inversion(stack(AL_HOT, inv.Substrate(SI)), SETUP, split_trace("A11")))
    problem = split_problem("A11")
    return check_coverage(
        problem, seed=3, replicates=30, simulate_trace=hot, executor=pool, store=store, **RUN
    )


def splits(pool, store):
    """The 24 split traces, default noise."""
    return known([split_problem(n) for n in NAMES], [split_truth(n) for n in NAMES], pool)


def splits_white(pool, store):
    """The 24 split traces as if their noise were white."""
    return known([split_problem(n, "white") for n in NAMES], [split_truth(n) for n in NAMES], pool)


def regenerated(pool, store):
    """The 24 traces made again with white noise only, default noise model."""
    problems = [split_problem(n, trace=white_split(n, i)) for i, n in enumerate(NAMES)]
    return known(problems, [split_truth(n) for n in NAMES], pool)


def regenerated_white(pool, store):
    """The 24 traces made again with white noise only, white noise model."""
    problems = [split_problem(n, "white", white_split(n, i)) for i, n in enumerate(NAMES)]
    return known(problems, [split_truth(n) for n in NAMES], pool)


def further(pool, store):
    """Fifty traces of the time-domain solver, two temperatures, default noise."""
    made = list(pool.map(further_trace, range(50)))
    problems = [inv.Inversion(stack(AL_HOT, inv.Substrate(SI)), SETUP, trace) for trace, _ in made]
    return known(problems, [truth for _, truth in made], pool)


def known(problems, truths, pool):
    return check_known(problems, truths, seed=1, executor=pool, **RUN)


def main(name, store=None):
    with worker_pool() as pool:
        found = globals()[name](pool, store)
    print(found)
    methods = [r.method for r in found.replicates]
    print("\nsampled by: " + ", ".join(f"{m or 'none'} {methods.count(m)}" for m in sorted(set(methods))))
    print(f"processor time: {sum(r.seconds for r in found.replicates):.0f} s")
    stiffness = [r.median["Al|Si.stiffness"] / r.truth["Al|Si.stiffness"] - 1 for r in found.ranked]
    print(f"largest error of the median stiffness: {100 * max(map(abs, stiffness)):.1f} %")


if __name__ == "__main__":
    main(*sys.argv[1:])
