"""How often intervals hold truths that others put in: the split traces, the same with white noise, further traces.

The traces come from simulators that share no equation with the library. Tables of the full runs: COVERAGE.md.
"""

import numpy as np
import pytest
from aluminium_on_silicon import (
    AL_HOT,
    NAMES,
    SETUP,
    SI,
    further_trace,
    split_problem,
    split_truth,
    stack,
    white_split,
)
from scipy import stats

import inverse as inv
from inverse.inference.mcmc.executor import worker_pool
from inverse.study.coverage.check import check_known

pytestmark = pytest.mark.slow

SOUGHT = ("Al.thickness", "Al.velocity", "Al.density_ratio", "Al|Si.compliance", "Al|Si.boundary_conductance")
QUANTITIES = (*SOUGHT, "Al.round_trip")
FAILURE = 0.01


def judged(problems, truths):
    with worker_pool() as pool:
        return check_known(problems, truths, seed=1, method="importance", executor=pool, progress=False)


@pytest.fixture(scope="module")
def regenerated():
    """The split traces made again by the library with white noise only."""
    return [white_split(name, seed) for seed, name in enumerate(NAMES)]


@pytest.fixture(scope="module")
def least_widths():
    """Least standard deviations of `SOUGHT` at the truth of each split trace."""
    return np.array([cramer_rao(n) for n in NAMES])


def binomial_band(count):
    """Least and largest count at 90 %, all quantities together left with a probability of `FAILURE`."""
    tail = FAILURE / len(QUANTITIES) / 2
    return stats.binom.ppf(tail, count, 0.9), stats.binom.ppf(1 - tail, count, 0.9)


def cramer_rao(name):
    """Least standard deviations of `SOUGHT` at the truth, the noise known, normal priors and coefficients' counted."""
    problem, truth = split_problem(name, "white"), split_truth(name)
    model = problem.posterior.members[0].model
    physical = [*SOUGHT, "time_zero"]
    level = 0.0015 * np.abs(model.channels[0].data).max()

    def basis(values):
        return model.functions({k: np.array([v]) for k, v in values.items()})["reflectance_change"][0]

    values = {k: truth[k] for k in physical}
    weights = model.eliminated(
        {**{k: np.array([v]) for k, v in values.items()}, "noise.white": np.array([level])}
    ).mean
    slopes = []
    for k in physical:
        step = 1e-4 * max(abs(values[k]), 0.1)
        up, down = (weights[0] @ basis({**values, k: values[k] + s}) for s in (step, -step))
        slopes.append((up - down) / (2 * step))
    rows = np.concatenate([slopes, basis(values)]) / level
    prior = np.ones(len(rows))  # of coefficients in units of their widths
    prior[: len(physical)] = [
        1 / problem.priors[k].var() if problem.priors[k].dist.name == "norm" else 0.0 for k in physical
    ]
    scale = np.sqrt((rows * rows).sum(axis=1) + prior)
    information = (rows @ rows.T + np.diag(prior)) / np.outer(scale, scale)
    return np.sqrt(np.diag(np.linalg.inv(information)))[: len(SOUGHT)] / scale[: len(SOUGHT)]


def test_split_traces_hold_the_truth_with_default_noise():
    found = judged([split_problem(n) for n in NAMES], [split_truth(n) for n in NAMES])
    assert not found.failed
    assert found.share(0.9, SOUGHT) >= 0.83
    for row in found.replicates:
        assert row.median["Al|Si.stiffness"] == pytest.approx(row.truth["Al|Si.stiffness"], rel=0.05)


def test_negative_control_white_noise_on_the_drifting_split_traces_falls_short():
    found = judged([split_problem(n, "white") for n in NAMES], [split_truth(n) for n in NAMES])
    assert found.share(0.9, SOUGHT) < 0.83
    assert found.outside["Al|Si.boundary_conductance"] == "too narrow"


@pytest.mark.parametrize("noise", ["white", "correlated"])
def test_traces_with_white_noise_only_are_held_by_intervals_no_wider_than_needed(
    regenerated, least_widths, noise
):
    problems = [split_problem(n, noise, t) for n, t in zip(NAMES, regenerated, strict=True)]
    found = judged(problems, [split_truth(n) for n in NAMES])
    low, high = binomial_band(len(NAMES))
    column = found.levels.index(0.9)
    for name in QUANTITIES:
        assert low <= found.held[name][column] <= high, found.table()
    widths = np.array([[row.sd[name] for name in SOUGHT] for row in found.replicates])
    ratio = np.median(widths / least_widths, axis=0)
    assert (ratio <= 1.3).all(), dict(zip(SOUGHT, ratio, strict=True))
    assert (ratio >= 0.9).all(), "narrower than Cramer and Rao allow"


def test_further_traces_of_two_temperatures_hold_the_truth():
    count = 16
    with worker_pool() as pool:
        made = list(pool.map(further_trace, range(count)))
    problems = [inv.Inversion(stack(AL_HOT, inv.Substrate(SI)), SETUP, trace) for trace, _ in made]
    found = judged(problems, [truth for _, truth in made])
    low, high = binomial_band(count)
    column = found.levels.index(0.9)
    for name in QUANTITIES:
        assert low <= found.held[name][column] <= high, found.table()
