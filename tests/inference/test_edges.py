"""A truth beyond the end of a prior: the result and least squares say what is pressed against it."""

import numpy as np
import pytest
from problems import SETUP, noisy
from scipy import stats

import inverse as inv
from inverse.inference.checks.edges import edge_warnings

DELAY = np.arange(-5.0, 60.0, 0.4)


def stack(thickness):
    bond = inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0)
    return inv.Stack(inv.Layer("Al", thickness=thickness), bond, inv.Substrate("Si", orientation="100"))


@pytest.fixture(scope="module")
def trace():
    """A film of 60 nm on a bond of 0.03 nm/GPa, noise of a hundredth of the signal."""
    values = {"Al.thickness": 60.0, "Al|Si.compliance": 0.03}
    return noisy(stack(stats.uniform(40, 40)), values, 0.01, seed=1, delay=DELAY)


def sampled(trace, thickness):
    problem = inv.Inversion(stack(thickness), SETUP, trace, time_zero=0.0, noise="white")
    fit = problem.least_squares(seed=1, starts=4)
    return fit, problem.sample_posterior(seed=1, fit=fit, ess=300, ensembles=2, progress=False)


@pytest.mark.parametrize(("start", "word", "end"), [(62.0, "lower", "62"), (38.0, "upper", "58")])
def test_a_thickness_beyond_the_end_of_its_prior_is_said(trace, start, word, end):
    fit, result = sampled(trace, stats.uniform(start, 20))
    said = str(inv.table(result))
    assert f"Al.thickness is pressed against the {word} end of its prior, {end} nm" in said.replace("\n", " ")
    row = next(r for r in inv.table(fit).rows if r.name == "Al.thickness")
    assert "prior edge" in row.flags and "prior only" not in row.flags
    assert all(start <= low < high <= start + 20 for low, high in row.intervals)


def test_a_thickness_well_within_its_prior_is_not(trace):
    fit, result = sampled(trace, stats.uniform(50, 20))
    assert "pressed" not in str(inv.table(result))
    assert "prior edge" not in next(r for r in inv.table(fit).rows if r.name == "Al.thickness").flags


def test_ends_set_by_nature_and_priors_that_the_data_leave_wide_are_passed_over(trace):
    problem = inv.Inversion(stack(stats.uniform(40, 40)), SETUP, trace, time_zero=0.0, noise="white")
    rng = np.random.default_rng(2)
    values = problem.posterior.parameters.to_values(rng.standard_normal((4000, len(problem.names))))
    assert edge_warnings(problem, values) == []
    bond = problem.names.index("Al|Si.compliance")
    values[:, bond] = 1e-4 * np.abs(rng.standard_normal(4000))
    assert edge_warnings(problem, values) == []
