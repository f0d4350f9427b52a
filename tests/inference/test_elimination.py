"""Elimination of linear coefficients against the dense multivariate normal distribution."""

import numpy as np
import pytest
from scipy import stats

from inverse.inference.problem.elimination import eliminate

RNG = np.random.default_rng(5)
DATA, COEFFICIENTS = 12, 3


def problem(seed):
    rng = np.random.default_rng(seed)
    x, root = rng.normal(size=(COEFFICIENTS, DATA)), rng.normal(size=(DATA, DATA))
    return x, rng.normal(size=DATA), root @ root.T + np.eye(DATA)


def gram_of(x, y, k):
    rows = np.vstack([x, y])
    return rows @ np.linalg.solve(k, rows.T), np.linalg.slogdet(k)[1]


def batch(seeds):
    grams, dets = zip(*(gram_of(*problem(seed)) for seed in seeds), strict=True)
    return np.stack(grams), np.array(dets)


def test_marginal_likelihood_is_the_dense_normals():
    # y = X c + e with c ~ N(0, 1), e ~ N(0, K): y ~ N(0, X' X + K)
    found = eliminate(*batch(range(4)), DATA)
    for seed in range(4):
        x, y, k = problem(seed)
        expected = stats.multivariate_normal(np.zeros(DATA), x.T @ x + k).logpdf(y)
        assert found.log_likelihood[seed] == pytest.approx(expected, rel=1e-11)


def test_coefficients_are_the_conditional_normals():
    # c given y: mean X (X' X + K)^-1 y, covariance 1 - X (X' X + K)^-1 X'
    found = eliminate(*batch(range(4)), DATA)
    for seed in range(4):
        x, y, k = problem(seed)
        total = x.T @ x + k
        np.testing.assert_allclose(found.mean[seed], x @ np.linalg.solve(total, y), rtol=1e-9)
        a = found.factor[seed] @ found.factor[seed].T
        expected = np.eye(COEFFICIENTS) - x @ np.linalg.solve(total, x.T)
        np.testing.assert_allclose(np.linalg.inv(a), expected, rtol=1e-9)


def test_draws_have_mean_and_covariance():
    grams, dets = batch([0])
    found = eliminate(np.repeat(grams, 20_000, axis=0), np.repeat(dets, 20_000), DATA)
    draws = found.draw(np.random.default_rng(3))
    covariance = np.linalg.inv(found.factor[0] @ found.factor[0].T)
    error = np.sqrt(covariance.diagonal() / len(draws))
    assert np.abs((draws.mean(axis=0) - found.mean[0]) / error).max() < 4
    size = np.outer(covariance.diagonal(), covariance.diagonal())
    spread = np.sqrt((size + covariance**2) / len(draws))
    assert np.abs((np.cov(draws.T) - covariance) / spread).max() < 4


def test_what_is_not_finite_is_impossible_and_leaves_the_rest():
    grams, dets = batch(range(3))
    expected = eliminate(grams, dets, DATA).log_likelihood
    grams[1, 0, 0] = np.nan
    found = eliminate(grams, dets, DATA).log_likelihood
    assert found[1] == -np.inf
    np.testing.assert_array_equal(found[[0, 2]], expected[[0, 2]])
