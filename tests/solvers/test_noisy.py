"""The noise that calibration traces carry has the statistics it claims."""

import numpy as np
import pytest

from .noisy import Disturbance, disturb, ornstein_uhlenbeck, uneven_delays

CLEAN_DELAY = np.arange(-10, 60, 0.05)
CLEAN = 1e-4 * np.exp(-((CLEAN_DELAY - 5) ** 2) / 8)


def test_drift_has_the_covariance_of_an_ornstein_uhlenbeck_process():
    # Cov = rms^2 exp(-lag / time); 4000 draws, failure budget: 5 standard errors of a sample covariance
    delay = np.array([0.0, 0.3, 1.0, 4.0, 4.5])
    seeds = np.random.SeedSequence(3).spawn(4000)
    drifts = np.array([ornstein_uhlenbeck(delay, 2.0, 1.5, seed) for seed in seeds])
    expected = 4 * np.exp(-np.abs(delay[:, None] - delay) / 1.5)
    error = np.sqrt((16 + expected**2) / len(drifts))
    assert np.all(np.abs(drifts.T @ drifts / len(drifts) - expected) < 5 * error)


def test_white_noise_is_a_fraction_of_full_scale():
    delay = np.arange(-5, 55, 0.01)
    noise = disturb(CLEAN_DELAY, CLEAN, delay, Disturbance(scale=-3, white=0.02), 5)
    noise -= disturb(CLEAN_DELAY, CLEAN, delay, Disturbance(scale=-3), 5)
    # 6000 draws: 5 standard errors of a standard deviation are 4.6 %; neighbours are uncorrelated
    assert noise.std() == pytest.approx(0.02 * 3e-4, rel=5 / np.sqrt(2 * 6000))
    assert abs(np.corrcoef(noise[1:], noise[:-1])[0, 1]) < 5 / np.sqrt(6000)


def test_time_zero_moves_the_trace_later():
    delay = np.arange(-5, 50, 0.1)
    moved = disturb(CLEAN_DELAY, CLEAN, delay, Disturbance(time_zero=0.37, scale=2, baseline=0.1), 1)
    expected = 2 * 1e-4 * (np.exp(-((delay - 5.37) ** 2) / 8) + 0.1)
    np.testing.assert_allclose(moved, expected, atol=2e-4 * 1e-6)


def test_uneven_delays_keep_their_order_and_spacing():
    delays = uneven_delays(np.array([-5.0, 3.0, 60.0]), np.array([0.2, 0.5]), 0.4, 2)
    assert len(delays) == 40 + 114
    assert np.all(np.diff(delays) > 0)
    assert np.diff(delays[:40]).mean() == pytest.approx(0.2, abs=0.004)
    assert np.diff(delays).std() > 0.1


def test_equal_seeds_give_equal_noise_and_leave_the_global_state_alone():
    before = np.random.get_state()[1].copy()
    noise = Disturbance(white=0.01, drift=0.01)
    first, second = (disturb(CLEAN_DELAY, CLEAN, CLEAN_DELAY[50:-50], noise, 7) for _ in range(2))
    np.testing.assert_array_equal(first, second)
    np.testing.assert_array_equal(before, np.random.get_state()[1])


def test_nothing_is_extrapolated():
    with pytest.raises(ValueError, match="simulate a longer one"):
        disturb(CLEAN_DELAY, CLEAN, CLEAN_DELAY, Disturbance(time_zero=-0.1), 1)


def test_jitter_that_would_reorder_is_refused():
    with pytest.raises(ValueError, match="would reorder delays"):
        uneven_delays(np.array([0.0, 1.0]), np.array([0.1]), 0.6, 1)
