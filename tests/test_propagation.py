"""Propagation of uncertainty against the worked examples of JCGM 100:2008 and JCGM 101:2008.

Figures of JCGM 100 H.1 and H.2 were read in the documentation of a public metrology package that works them;
those of JCGM 101 are from memory, each re-derived analytically or by 4 million draws.
"""

import numpy as np
import pytest
from scipy import stats

from inverse.report.propagation import (
    MonteCarlo,
    Propagated,
    linear_is_valid,
    propagate,
    propagate_distributions,
)

SQRT3 = np.sqrt(3)


def gauge_block(
    standard, mean_difference, random, systematic, expansion, delta_expansion, delta_t, mean_t, cyclic_t
):
    """JCGM 100, H.1: length of an end gauge compared with a standard, lengths in nm."""
    difference = mean_difference + random + systematic
    return standard + difference - standard * (delta_expansion * (mean_t + cyclic_t) + expansion * delta_t)


H1_ESTIMATES = [50000623, 215, 0, 0, 11.5e-6, 0, 0, -0.1, 0]
H1_UNCERTAINTIES = [25, 5.8, 3.9, 6.7, 2e-6 / SQRT3, 1e-6 / SQRT3, 0.05 / SQRT3, 0.2, 0.5 / np.sqrt(2)]
H1_DEGREES = [18, 24, 5, 8, np.inf, 50, 2, np.inf, np.inf]


@pytest.fixture(scope="module")
def h1() -> Propagated:
    return propagate(gauge_block, H1_ESTIMATES, H1_UNCERTAINTIES, degrees_of_freedom=H1_DEGREES)


@pytest.fixture(scope="module")
def h2() -> Propagated:
    """JCGM 100, H.2: resistance, reactance and impedance from V, I and phase, correlated."""
    spread = np.array([3.2e-3, 9.5e-6, 7.5e-4])
    correlation = np.array([[1, -0.36, 0.86], [-0.36, 1, -0.65], [0.86, -0.65, 1]])
    return propagate(
        lambda v, i, phi: (v / i * np.cos(phi), v / i * np.sin(phi), v / i),
        [4.999, 19.661e-3, 1.04446],
        correlation * np.outer(spread, spread),
    )


def test_h1_value_and_combined_uncertainty(h1):
    # JCGM 100 H.1: l = 50 000 838 nm, u_c = 32 nm (31.664 recomputed from the stated inputs)
    assert round(float(h1.value)) == 50000838
    assert h1.standard_uncertainty == pytest.approx(31.664, abs=5e-4)


def test_h1_budget(h1):
    # JCGM 100 H.1 budget: 25, 16.599 (delta theta), 6.7, 5.8, 3.9, 2.88679 (delta alpha); alpha_s none
    expected = [25, 5.8, 3.9, 6.7, 0, 2.88679, 16.599, 0, 0]
    np.testing.assert_allclose(np.abs(h1.contributions), expected, atol=1e-3)


def test_h1_effective_degrees_of_freedom_and_expanded_uncertainty(h1):
    # JCGM 100 H.1.6: nu_eff = 16.7, cut to 16; t_99 = 2.92; U_99 = 92.5 nm (93 in print, from memory)
    assert h1.degrees_of_freedom == pytest.approx(16.75, abs=0.005)
    assert h1.coverage_factor(0.99) == pytest.approx(2.921, abs=5e-4)
    assert h1.expanded_uncertainty(0.99) == pytest.approx(92.5, abs=0.05)


def test_h1_second_order():
    # JCGM 100 H.1.7: second-order terms raise u_c from 32 nm to 34 nm (33.81 recomputed)
    second = propagate(gauge_block, H1_ESTIMATES, H1_UNCERTAINTIES, order=2)
    assert second.standard_uncertainty == pytest.approx(33.81, abs=5e-3)


def test_gauge_block_by_monte_carlo():
    # JCGM 101 9.5, inputs and result from memory: u = 36 nm where the linear law gives 32 nm.
    def model(standard, difference, random, systematic, expansion, mean_t, cyclic_t, u1, u2, u3, u4):
        delta_expansion = (
            1e-6 + 0.1e-6 * u1
        ) * u2  # curvilinear trapezoid: a rectangle of uncertain half-width
        delta_t = (0.050 + 0.025 * u3) * u4
        return gauge_block(
            standard, difference, random, systematic, expansion, delta_expansion, delta_t, mean_t, cyclic_t
        )

    inputs = [
        stats.t(18, 50000623, 25),
        stats.t(24, 215, 6),
        stats.t(5, 0, 4),
        stats.t(8, 0, 7),
        stats.uniform(9.5e-6, 4e-6),
        stats.norm(-0.1, 0.2),
        stats.arcsine(-0.5, 1.0),
        *[stats.uniform(-1, 2)] * 4,
    ]
    trials = propagate_distributions(model, inputs, seed=5, draws=200_000)
    assert round(float(trials.value)) == pytest.approx(50000838, abs=1)
    assert round(float(trials.standard_uncertainty)) == 36


def test_h2_values_and_uncertainties(h2):
    # JCGM 100 H.2: R = 127.732(70), X = 219.85(30), Z = 254.26(24) ohm
    np.testing.assert_allclose(h2.value, [127.732, 219.847, 254.260], atol=6e-4)
    np.testing.assert_allclose(h2.standard_uncertainty, [0.070, 0.30, 0.24], rtol=0.02)


def test_h2_correlations(h2):
    # JCGM 100 H.2: r(R, X) = -0.59, r(R, Z) = -0.49, r(X, Z) = +0.99
    r = h2.correlation
    np.testing.assert_allclose([r[0, 1], r[0, 2], r[1, 2]], [-0.59, -0.49, 0.99], atol=0.006)


@pytest.fixture(scope="module")
def four_normals() -> tuple[Propagated, MonteCarlo]:
    def total(*x):
        return sum(x)

    trials = propagate_distributions(total, [stats.norm()] * 4, seed=1)
    return propagate(total, np.zeros(4), np.ones(4)), trials


def test_additive_model_normal_inputs(four_normals):
    # JCGM 101 9.2.2: u = 2.00, 95 % interval +/- 3.92
    linear, trials = four_normals
    assert linear.standard_uncertainty == pytest.approx(2.0, abs=1e-9)
    assert linear.expanded_uncertainty() == pytest.approx(3.92, abs=5e-4)
    assert trials.standard_uncertainty == pytest.approx(2.0, abs=6e-3)
    np.testing.assert_allclose(trials.interval(), [-3.92, 3.92], atol=0.02)
    np.testing.assert_allclose(trials.interval(kind="shortest"), [-3.92, 3.92], atol=0.08)
    assert linear_is_valid(linear, trials)


def test_additive_model_rectangular_inputs():
    # JCGM 101 9.2.3: u = 2.00, 95 % interval +/- 3.88; exactly 2 sqrt(3) (2 - 0.6^(1/4)) = 3.879407
    trials = propagate_distributions(lambda *x: sum(x), [stats.uniform(-SQRT3, 2 * SQRT3)] * 4, seed=2)
    assert trials.standard_uncertainty == pytest.approx(2.0, abs=6e-3)
    # Density there is 0.1 / (4 sqrt(3) - 3.879): the end-point of 10^6 draws has a standard error of 0.0048.
    np.testing.assert_allclose(trials.interval(), [-3.879407, 3.879407], atol=4 * 0.0048)


def test_additive_model_one_dominant_input():
    # JCGM 101 9.2.4: u = 10.1; Monte Carlo +/- 17.0 where the linear law gives +/- 19.9
    wide = stats.uniform(-10 * SQRT3, 20 * SQRT3)
    trials = propagate_distributions(
        lambda *x: sum(x), [*[stats.uniform(-SQRT3, 2 * SQRT3)] * 3, wide], seed=3
    )
    linear = propagate(lambda *x: sum(x), np.zeros(4), [1, 1, 1, 10])
    assert linear.expanded_uncertainty() == pytest.approx(19.9, abs=0.05)
    assert linear.standard_uncertainty == pytest.approx(np.sqrt(103), rel=1e-9)
    assert trials.standard_uncertainty == pytest.approx(10.147, abs=0.02)
    np.testing.assert_allclose(trials.interval(), [-17.0, 17.0], atol=0.06)
    assert not linear_is_valid(linear, trials)


def mass_difference(reference, extra, air, weight, standard):
    """JCGM 101 9.3: conventional mass by comparison in air, mg, minus 100 g."""
    return (reference + extra) * (1 + (air - 1.2) * (1 / weight - 1 / standard)) - 100_000


MASS_ESTIMATES = [100_000, 1.234, 1.2, 8000, 8000]
MASS_UNCERTAINTIES = [0.050, 0.020, 0.1 / SQRT3, 1000 / SQRT3, 50 / SQRT3]


@pytest.mark.parametrize(
    ("order", "uncertainty", "interval"),
    [(1, 0.05385, [1.1285, 1.3395]), (2, 0.07496, [1.0871, 1.3809])],
)
def test_mass_calibration_by_derivatives(order, uncertainty, interval):
    # JCGM 101 9.3: 1.2340 mg, u = 0.0539 and [1.1285, 1.3395]; with second order 0.0750, [1.0870, 1.3810]
    result = propagate(mass_difference, MASS_ESTIMATES, MASS_UNCERTAINTIES, order=order)
    assert result.value == pytest.approx(1.2340, abs=5e-5)
    assert result.standard_uncertainty == pytest.approx(uncertainty, abs=1e-5)
    np.testing.assert_allclose(result.interval(), interval, atol=1.5e-4)


def test_mass_calibration_by_monte_carlo():
    # JCGM 101 9.3: u = 0.0754, shortest 95 % interval [1.0834, 1.3825]; flat, so end-points to 0.003
    inputs = [
        stats.norm(100_000, 0.050),
        stats.norm(1.234, 0.020),
        stats.uniform(1.10, 0.20),
        stats.uniform(7000, 2000),
        stats.uniform(7950, 100),
    ]
    trials = propagate_distributions(mass_difference, inputs, seed=4)
    shortest = trials.interval(kind="shortest")
    assert trials.value == pytest.approx(1.2340, abs=5 * float(trials.standard_error))
    assert trials.standard_uncertainty == pytest.approx(0.0755, abs=2e-4)
    np.testing.assert_allclose(shortest, [1.0834, 1.3825], atol=3e-3)
    assert np.diff(shortest) == pytest.approx(0.299, abs=1e-3)
    assert not linear_is_valid(propagate(mass_difference, MASS_ESTIMATES, MASS_UNCERTAINTIES), trials)


def test_second_order_of_closed_forms():
    # Independent normals: x1 x2 has variance a2^2 u1^2 + a1^2 u2^2 + u1^2 u2^2 exactly;
    # x^2 has 4 a^2 u^2 + 2 u^4, and its expectation is shifted by u^2.
    product = propagate(lambda a, b: a * b, [3.0, 2.0], [0.5, 0.4], order=2)
    assert float(product.covariance) == pytest.approx(4 * 0.25 + 9 * 0.16 + 0.25 * 0.16, rel=1e-9)
    square = propagate(lambda a: a**2, [1.5], [0.5], order=2)
    assert float(square.covariance) == pytest.approx(4 * 2.25 * 0.25 + 2 * 0.0625, rel=1e-9)
    assert float(square.shift) == pytest.approx(0.25, rel=1e-9)


def test_second_order_third_derivative_term():
    # JCGM 100 5.1.2 note for f = x^3 at a: (3a^2)^2 u^2 + [ (6a)^2 / 2 + 3a^2 x 6 ] u^4
    a, u = 1.2, 0.3
    cube = propagate(lambda x: x**3, [a], [u], order=2)
    assert float(cube.covariance) == pytest.approx(9 * a**4 * u**2 + (18 * a**2 + 18 * a**2) * u**4, rel=1e-8)


def test_second_order_of_correlated_inputs():
    # For jointly normal inputs the variance of x1 x2 is a2^2 u1^2 + a1^2 u2^2 + 2 a1 a2 c + u1^2 u2^2 + c^2.
    c = 0.6 * 0.5 * 0.4
    matrix = [[0.25, c], [c, 0.16]]
    result = propagate(lambda a, b: (a * b, a + b), [3.0, 2.0], matrix, order=2)
    assert result.covariance[0, 0] == pytest.approx(
        4 * 0.25 + 9 * 0.16 + 12 * c + 0.25 * 0.16 + c**2, rel=1e-9
    )
    assert result.covariance[1, 1] == pytest.approx(0.25 + 0.16 + 2 * c, rel=1e-9)
    assert result.covariance[0, 1] == pytest.approx(2 * 0.25 + 3 * 0.16 + 5 * c, rel=1e-9)


def test_degrees_of_freedom_of_two_equal_contributions_add():
    result = propagate(lambda a, b: a + b, [0, 0], [1, 1], degrees_of_freedom=[5, 5])
    assert result.degrees_of_freedom == pytest.approx(10)


def test_multivariate_input_feeds_several_arguments():
    joint = stats.multivariate_normal([1, 2], [[1, 0.8], [0.8, 1]])
    trials = propagate_distributions(lambda a, b, c: (a - b, a + b + c), [joint, 3.0], seed=1, draws=200_000)
    np.testing.assert_allclose(trials.value, [-1, 6], atol=0.03)
    np.testing.assert_allclose(trials.covariance, [[0.4, 0], [0, 3.6]], atol=0.05)
    assert trials.interval(kind="shortest").shape == (2, 2)


def test_shortest_interval_of_exponential_starts_at_zero():
    trials = propagate_distributions(lambda x: x, [stats.expon()], seed=8, draws=200_000)
    np.testing.assert_allclose(trials.interval(kind="shortest"), [0, -np.log(0.05)], atol=0.06)
    np.testing.assert_allclose(trials.interval(), -np.log([0.975, 0.025]), atol=0.06)


def test_standard_uncertainty_of_few_draws_is_that_of_a_sample():
    # JCGM 101 7.6: divisor M - 1
    trials = MonteCarlo(np.array([1.0, 2.0, 3.0, 4.0]))
    assert trials.standard_uncertainty == pytest.approx(np.sqrt(5 / 3))
    assert trials.standard_error == pytest.approx(np.sqrt(5 / 12))


def test_seed_fixes_draws_and_streams_stay_apart():
    before = np.random.get_state()[1].copy()
    one = propagate_distributions(lambda a, b: a, [stats.norm(), 2.0], seed=7, draws=1000)
    two = propagate_distributions(lambda a, b: a, [stats.norm(), stats.norm()], seed=7, draws=1000)
    np.testing.assert_array_equal(one.draws, two.draws)
    np.testing.assert_array_equal(before, np.random.get_state()[1])
    assert not np.array_equal(
        one.draws, propagate_distributions(lambda a, b: a, [stats.norm(), 2.0], seed=8, draws=1000).draws
    )


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"covariance": [1, 1, 1]}, r"shape \(2,\) and covariance of shape \(3,\)"),
        ({"covariance": [-1, 1]}, "hold a negative number"),
        ({"covariance": [[1, 0.5], [0.4, 1]]}, "not a finite symmetric matrix"),
        ({"covariance": [[1, 2], [2, 1]]}, "negative eigenvalue"),
        ({"order": 3}, "expected 1 .linear. or 2"),
        ({"degrees_of_freedom": [5]}, "expected 2 positive numbers"),
        ({"covariance": [[1, 0.5], [0.5, 1]], "degrees_of_freedom": [5, 5]}, "holds for independent inputs"),
        ({"estimates": [0.0, 0.0], "function": lambda a, b: np.nan}, "expected a finite number"),
    ],
)
def test_propagate_refuses(arguments, message):
    given = {"function": lambda a, b: a + b, "estimates": [1.0, 2.0], "covariance": [1.0, 1.0], **arguments}
    with pytest.raises(ValueError, match=message):
        propagate(given.pop("function"), given.pop("estimates"), given.pop("covariance"), **given)


@pytest.mark.parametrize(
    ("inputs", "draws", "message"),
    [
        ([stats.norm()], 10, "draws must be a whole number, 1000 or more, not 10"),
        (["1.0"], 1000, "Input 1 is '1.0'"),
        ([-1.0], 1000, "1000 values that are not finite"),
    ],
)
def test_propagate_distributions_refuses(inputs, draws, message):
    with np.errstate(invalid="ignore"), pytest.raises(ValueError, match=message):
        propagate_distributions(np.sqrt, inputs, seed=1, draws=draws)


@pytest.mark.parametrize(
    ("keywords", "message"), [({"kind": "highest"}, "expected 'symmetric'"), ({"mass": 95}, "0.95")]
)
def test_interval_refuses(four_normals, keywords, message):
    with pytest.raises(ValueError, match=message):
        four_normals[1].interval(**keywords)
