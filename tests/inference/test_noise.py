"""Noise against its dense covariance matrix, written out from its definition."""

import numpy as np
import pytest

from inverse.inference.problem.noise import Noise, noise_priors

RNG = np.random.default_rng(8)
DELAY = np.sort(RNG.uniform(0, 40, 60))
RELATIVE = RNG.uniform(0.5, 2.0, 60)
ROWS = RNG.normal(size=(2, 4, 60))
VALUES = {
    "white": np.array([0.3, 1.2]),
    "discrepancy": np.array([0.8, 0.05]),
    "correlation_time": np.array([3.0, 15.0]),
}


def one_set(b):
    return {name: float(v[b]) for name, v in VALUES.items()}


def kernel(values):
    gap = np.abs(DELAY[:, None] - DELAY)
    return values["discrepancy"] ** 2 * np.exp(-gap / values["correlation_time"])


def covariance(model, values):
    white = np.diag((values["white"] * RELATIVE) ** 2)
    return white if model == "white" else white + kernel(values)


@pytest.mark.parametrize("model", ["white", "correlated"])
def test_scalar_products_and_determinant_are_the_dense_ones(model):
    gram, log_det = Noise(model, DELAY, RELATIVE).gram(ROWS, VALUES)
    for b in range(2):
        k = covariance(model, one_set(b))
        np.testing.assert_allclose(gram[b], ROWS[b] @ np.linalg.solve(k, ROWS[b].T), rtol=1e-9, atol=1e-9)
        assert log_det[b] == pytest.approx(np.linalg.slogdet(k)[1], rel=1e-11)


@pytest.mark.parametrize("model", ["white", "correlated"])
def test_whitened_rows_have_the_same_scalar_products(model):
    noise = Noise(model, DELAY, RELATIVE)
    gram, _ = noise.gram(ROWS, VALUES)
    for b in range(2):
        white = noise.whiten(ROWS[b], one_set(b))
        np.testing.assert_allclose(white @ white.T, gram[b], rtol=1e-9, atol=1e-9)


def test_discrepancy_is_the_conditional_mean():
    # f given r = f + e: K_f (K_f + K_e)^-1 r
    noise = Noise("correlated", DELAY, RELATIVE)
    for b in range(2):
        values = one_set(b)
        expected = kernel(values) @ np.linalg.solve(covariance("correlated", values), ROWS[b].T)
        np.testing.assert_allclose(noise.discrepancy(ROWS[b], values), expected.T, rtol=1e-8, atol=1e-9)
    assert not Noise("white", DELAY, RELATIVE).discrepancy(ROWS[0], one_set(0)).any()


def test_discrepancy_of_nothing_is_white_noise():
    vanishing = {**VALUES, "discrepancy": np.full(2, 1e-9)}
    found = Noise("correlated", DELAY, RELATIVE).gram(ROWS, vanishing)
    for got, expected in zip(found, Noise("white", DELAY, RELATIVE).gram(ROWS, VALUES), strict=True):
        np.testing.assert_allclose(got, expected, rtol=1e-6)


@pytest.mark.parametrize("model", ["white", "correlated"])
def test_draws_have_the_covariance(model):
    noise, values, rng = Noise(model, DELAY[::12], RELATIVE[::12]), one_set(0), np.random.default_rng(1)
    draws = np.stack([noise.draw(rng, values) for _ in range(20_000)])
    k = covariance(model, values)[::12, ::12]
    # Standard error of a covariance of n draws: sqrt((k_ii k_jj + k_ij^2) / n)
    error = np.sqrt((np.outer(k.diagonal(), k.diagonal()) + k**2) / len(draws))
    assert np.abs((draws.T @ draws / len(draws) - k) / error).max() < 4.5


def test_uncorrelated_part_can_be_drawn_alone():
    noise, rng = Noise("correlated", DELAY, RELATIVE), np.random.default_rng(2)
    draws = np.stack([noise.draw(rng, one_set(0), correlated=False) for _ in range(4000)])
    np.testing.assert_allclose(draws.std(axis=0), 0.3 * RELATIVE, rtol=0.06)


def test_priors_are_weak_and_where_they_say():
    priors = noise_priors("correlated", 2e-6, np.arange(0, 50, 0.2))
    # a factor of two, and of ten, at one standard deviation
    np.testing.assert_allclose(priors["white"].ppf([0.158655, 0.5, 0.841345]), [1e-6, 2e-6, 4e-6], rtol=1e-5)
    found = priors["discrepancy"].ppf([0.158655, 0.5, 0.841345])
    np.testing.assert_allclose(found, [2e-7, 2e-6, 2e-5], rtol=1e-4)
    assert priors["correlation_time"].support() == pytest.approx((0.6, 49.8))
    assert set(noise_priors("white", 1.0, DELAY)) == {"white"}


@pytest.mark.parametrize(
    ("model", "level", "message"),
    [("pink", 1.0, "choose one of correlated, white"), ("white", 0.0, "must be positive")],
)
def test_other_models_and_levels_are_refused(model, level, message):
    with pytest.raises(ValueError, match=message):
        noise_priors(model, level, DELAY)
