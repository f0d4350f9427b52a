"""Checks of a model: whitening against a dense Cholesky factor, right noise left alone, wrong noise found."""

import numpy as np
import pytest
from problems import SETUP, bonded, noisy, normal_draws, sampled
from scipy import stats

import inverse as inv
from inverse.inference.checks.drift_ratio import drift_tests
from inverse.inference.checks.model_checks import check_model, ljung_box, noise_warnings
from inverse.inference.checks.residuals import autocorrelation, innovations, replicates
from inverse.inference.problem.noise import Noise

TRUTH = {"Al.thickness": 60.0, "Al.velocity": 6.42, "Al|Si.compliance": 0.02}
UNEVEN = np.concatenate([np.arange(-5, 8, 0.25), np.arange(8, 60, 0.5)])


def problem(noise: str, *, seed: int, drift=(0.0, 5.0), spike: float = 0.0) -> inv.Inversion:
    stack = bonded(thickness=stats.norm(60, 1))
    trace = noisy(stack, TRUTH, 0.01, seed=seed, drift=drift, delay=UNEVEN)
    if spike:
        trace["reflectance_change"][120] += spike * white_level()
    return inv.Inversion(stack, SETUP, trace, time_zero=stats.norm(0, 0.05), noise=noise)


def at_truth(inversion: inv.Inversion, white: float, count: int = 60) -> np.ndarray:
    """The true values, repeated: linear coefficients are drawn, the unknowns are not."""
    known = {**TRUTH, "time_zero": 0.0, "noise.white": white}
    return np.repeat([[known[name] for name in inversion.names]], count, axis=0)


def white_level() -> float:
    """Level of `noisy` at 1 %, which counts in units of the echoes' range."""
    trace = inv.simulate(bonded(), SETUP, UNEVEN, values=TRUTH)["reflectance_change"].values
    return 0.01 * float(np.ptp(trace[UNEVEN > 3]))


def dense(noise: Noise, white: float, size: float, time: float) -> np.ndarray:
    gap = np.abs(noise.delay[:, None] - noise.delay)
    return np.diag((white * noise.relative) ** 2) + size**2 * np.exp(-gap / time)


def test_innovations_are_those_of_the_cholesky_factor() -> None:
    rng = np.random.default_rng(1)
    delay = np.sort(rng.uniform(0, 20, 40))
    noise = Noise("correlated", delay, rng.uniform(0.5, 2, 40))
    residual = rng.standard_normal((2, 40))
    values = {
        "white": np.array([0.7, 0.1]),
        "discrepancy": np.array([1.3, 0.4]),
        "correlation_time": np.array([3.0, 0.2]),
    }
    found = innovations(noise, residual, values)
    for i in range(2):
        covariance = dense(noise, *(values[k][i] for k in ("white", "discrepancy", "correlation_time")))
        expected = np.linalg.solve(np.linalg.cholesky(covariance), residual[i])
        np.testing.assert_allclose(found[i], expected, rtol=1e-9, atol=1e-10)


def test_white_innovations_are_residuals_over_the_noise_of_each_delay() -> None:
    noise = Noise("white", np.arange(3.0), np.array([1.0, 2.0, 4.0]))
    found = innovations(noise, np.ones((1, 3)), {"white": np.array([0.5])})
    np.testing.assert_allclose(found, [[2.0, 1.0, 0.5]])


def test_ljung_box_by_hand() -> None:
    """u = (1, 1, -1, -1): r_1 = 1/4, r_2 = -2/4; Q = 4 x 6 x (1/16/3 + 1/4/2) = 3.5."""
    u = np.array([[1.0, 1.0, -1.0, -1.0]])
    np.testing.assert_allclose(autocorrelation(u, 2), [[0.25, -0.5]])
    np.testing.assert_allclose(ljung_box(u, 2), [3.5])


def test_ljung_box_of_white_noise_has_mean_of_chi_square() -> None:
    q = ljung_box(np.random.default_rng(2).standard_normal((4000, 150)), 20)
    assert abs(q.mean() - 20) < 4 * q.std() / np.sqrt(4000)


@pytest.mark.slow
def test_drift_test_of_white_noise_has_uniform_p_at_its_low_end() -> None:
    """Forty traces without drift: p below 0.2 in a fifth of them, within three binomial deviations."""
    low = 0
    for seed in range(40):
        inversion = problem("white", seed=seed)
        (test,) = drift_tests(inversion, at_truth(inversion, white_level(), 1)[0], seed=seed)
        low += test.p < 0.2
    assert abs(low - 8) < 3 * np.sqrt(40 * 0.2 * 0.8)


def test_drift_test_finds_the_drift() -> None:
    """Twice the white noise over 3 ps, twelve traces: size^2 / time is what a curve that bends leaves to be seen."""
    found = []
    for seed in range(12):
        inversion = problem("white", seed=seed, drift=(0.02, 3.0))
        (test,) = drift_tests(inversion, at_truth(inversion, white_level(), 1)[0], seed=seed)
        found.append((test.p, test.size, test.time))
    p, size, time = np.array(found).T
    assert (p < 0.02).sum() >= 10
    assert 0.5 < np.median(size**2 / time) / (2**2 / 3) < 2


def test_drift_test_is_left_out_under_correlated_noise() -> None:
    inversion = problem("correlated", seed=1)
    assert drift_tests(inversion, inversion.posterior.parameters.to_values(np.zeros((1, 7)))[0]) == (None,)


def test_a_drift_that_the_curve_has_bent_towards_is_still_seen(splits) -> None:
    """C21 of the splits, drift of a third of its white noise: the innovations of the fit look nearly white."""
    trace = inv.read_trace(splits / "C21.csv")
    film = {"velocity": stats.norm(6.42, 0.1), "density_ratio": 2.7 / 2.33}
    stack = bonded(**film, boundary_conductance=stats.loguniform(20, 500))
    (test,) = drift_tests(*_fitted_white(stack, trace))
    assert test.p < 0.01


def _fitted_white(stack, trace):
    fit = inv.Inversion(stack, SETUP, trace, noise="white").least_squares(seed=1, starts=3)
    return fit.inversion, fit.values


@pytest.mark.slow
def test_right_noise_gives_no_warning_and_uniform_p() -> None:
    """Forty traces with white noise: p of single draws is uniform, and none of the mean p is small."""
    single, warned = [], 0
    for seed in range(40):
        inversion = problem("white", seed=seed)
        values = at_truth(inversion, white_level())
        warned += len(
            noise_warnings(inversion, values, seed=seed)
        )  # each of two tests fails one trace in fifty
        (r,) = replicates(inversion, values[:1], seed)
        single.append(float(stats.chi2.sf((r.innovation**2).sum(), r.delay.size)))
    assert warned <= 4
    assert stats.kstest(single, "uniform").pvalue > 0.01


def test_drift_under_white_noise_is_warned_of_in_plain_words() -> None:
    """Negative control: white noise on a drifting trace."""
    inversion = problem("white", seed=3, drift=(0.02, 4.0))
    fit = inversion.least_squares(seed=1, starts=2)
    check = check_model(fit)
    assert not check.describes
    assert check.verdict.startswith("The model does not describe the trace: residuals are correlated over")
    assert 'use noise="correlated"' in check.verdict
    (channel,) = check.channels
    assert channel.p_drift < 0.02
    assert 0.3 < channel.size**2 / channel.time / (2**2 / 4) < 3
    assert channel.autocorrelation[0] > 0.3
    (warning,) = noise_warnings(inversion, np.repeat(fit.values[None], 30, axis=0))
    assert warning.startswith("reflectance_change: residuals are correlated over")


def test_the_same_drift_under_correlated_noise_is_described() -> None:
    fit = problem("correlated", seed=3, drift=(0.02, 4.0)).least_squares(seed=1, starts=2)
    check = check_model(fit)
    assert check["reflectance_change"].p_correlation > 0.05
    assert "Ljung-Box" in str(check)


def test_a_discrepancy_above_the_noise_is_told_although_the_intervals_allow_for_it() -> None:
    inversion = problem("correlated", seed=4, drift=(0.1, 4.0))
    check = check_model(inversion.least_squares(seed=1, starts=2))
    assert not check.describes
    assert "times the noise; the discrepancy term carries them" in check.verdict


def test_an_outlier_is_named() -> None:
    inversion = problem("white", seed=5, spike=8.0)
    check = check_model(inversion.least_squares(seed=1, starts=2))
    (channel,) = check.channels
    assert channel.outliers.tolist() == [UNEVEN[120]]
    assert "too large for normal noise" in check.verdict


def test_an_outlier_under_students_t_noise_is_no_fault_of_the_model() -> None:
    check = check_model(problem("student", seed=5, spike=8.0).least_squares(seed=1, starts=2))
    (channel,) = check.channels
    assert check.describes
    assert np.isnan(channel.p_largest)
    assert channel.outliers.tolist() == [UNEVEN[120]]


def test_bands_hold_what_they_say() -> None:
    """The data of a right model: within three binomial deviations of 68 and 95 %."""
    inversion = problem("white", seed=6)
    fit = inversion.least_squares(seed=1, starts=2)
    check = check_model(sampled(inversion, normal_draws(fit, seed=7)))
    (channel,) = check.channels
    for share, mass in zip(channel.inside, (0.68, 0.95), strict=True):
        assert abs(share - mass) < 3 * np.sqrt(mass * (1 - mass) / channel.delay.size)
    assert channel.p_chi_square > 0.01
    assert check.describes
    assert channel.problems == ()


def test_equal_seeds_give_equal_checks_and_leave_the_global_state_alone() -> None:
    inversion = problem("white", seed=6)
    values = at_truth(inversion, white_level(), 5)
    before = np.random.get_state()[1].copy()
    first, second = (replicates(inversion, values, 9)[0].innovation for _ in range(2))
    np.testing.assert_array_equal(first, second)
    np.testing.assert_array_equal(before, np.random.get_state()[1])
    assert not np.array_equal(first, replicates(inversion, values, 10)[0].innovation)


def test_wrong_arguments_are_refused() -> None:
    with pytest.raises(ValueError, match="Got str instead of a result"):
        check_model("fit")
    with pytest.raises(ValueError, match="draws must be a whole number, 1 or more, not 0"):
        check_model("fit", draws=0)
    fit = problem("white", seed=6).least_squares(seed=1, starts=1)
    with pytest.raises(ValueError, match="There is no channel 'optical_phase'; there are reflectance_change"):
        check_model(fit)["optical_phase"]
