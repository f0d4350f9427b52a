"""Least squares with the projection's exact derivative against finite differences of its residuals."""

import jacobian
import numpy as np
import pytest

pytestmark = [pytest.mark.slow, pytest.mark.benchmark]


@pytest.fixture(scope="module")
def problem():
    return jacobian.problem()


def test_the_exact_projection_reaches_the_minimum_sooner(problem):
    seconds = jacobian.seconds(*problem)
    print(f"\n{seconds}")
    assert seconds["projection"] < seconds["central differences"]
    assert seconds["projection"] < 0.6 * seconds["forward differences"]


def test_all_ways_agree(problem):
    projected, starts = problem
    # Central differences in double precision are good to about 1e-10 of the residuals' curvature.
    assert jacobian.disagreement(projected, starts) < 1e-6
    ends = jacobian.minima(projected, starts)
    # In standard deviations of the priors. One-sided differences stop earlier: their slope is good to 1e-8.
    np.testing.assert_allclose(ends["projection"], ends["central differences"], rtol=0, atol=1e-3)
    np.testing.assert_allclose(ends["projection"], ends["forward differences"], rtol=0, atol=2e-2)
