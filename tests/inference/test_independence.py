"""Independence proposals: the target survives a poor proposal, and adaptation finds the modes."""

import numpy as np
import pytest
from scipy.stats import multivariate_t

from inverse.inference.mcmc.ensembles import run_ensembles
from inverse.inference.mcmc.independence import DEGREES, IndependenceMove, StudentMixture, adapt, fit_mixture

SCALE = np.array([1.0, 0.5, 2.0, 1.0])
CORRELATION = 0.7 * np.ones((4, 4)) + 0.3 * np.eye(4)
COVARIANCE = CORRELATION * np.outer(SCALE, SCALE)
PRECISION = np.linalg.inv(COVARIANCE)


def correlated_gaussian(x):
    return -0.5 * np.einsum("ni,ij,nj->n", x, PRECISION, x)


def two_modes(x):
    """Two unit Gaussians eight deviations apart, three parts in four in the first."""
    near, far = -0.5 * (x**2).sum(axis=1), -0.5 * ((x - np.array([8.0, 0.0])) ** 2).sum(axis=1)
    return np.logaddexp(np.log(0.75) + near, np.log(0.25) + far)


def test_density_is_that_of_the_multivariate_t():
    root = np.linalg.cholesky(COVARIANCE)
    mixture = StudentMixture(np.ones(1), np.ones((1, 4)), root[None])
    points = np.random.default_rng(3).normal(size=(20, 4))
    expected = multivariate_t(np.ones(4), COVARIANCE, df=DEGREES).logpdf(points)
    np.testing.assert_allclose(mixture.log_density(points), expected, rtol=1e-12)


def test_draws_follow_the_density():
    """Covariance of a t distribution is its scale matrix times nu / (nu - 2)."""
    mixture = StudentMixture(np.ones(1), np.zeros((1, 4)), np.linalg.cholesky(COVARIANCE)[None])
    draws = mixture.draw(np.random.default_rng(5), 200_000)
    np.testing.assert_allclose(np.cov(draws.T), COVARIANCE * DEGREES / (DEGREES - 2), rtol=0.03)


@pytest.mark.parametrize("width", [0.6, 1.0, 2.0])
def test_the_target_is_kept_by_a_wrong_proposal(width):
    """Too narrow, right or too wide, displaced: variances stay those of the target within 3 Monte Carlo errors."""
    mixture = StudentMixture(np.ones(1), np.full((1, 4), 0.3), width * np.linalg.cholesky(COVARIANCE)[None])
    starts = np.random.default_rng(1).multivariate_normal(np.zeros(4), COVARIANCE, size=(4, 20))
    run = run_ensembles(
        correlated_gaussian, starts, seed=2, names=list("abcd"), ess=4000, moves=[(IndependenceMove(mixture), 1.0)],
        progress=False,
    )  # fmt: skip
    draws = run.chain.reshape(-1, 4)
    error = np.sqrt(2 / run.ess) * SCALE**2
    assert np.all(np.abs(draws.var(axis=0) - SCALE**2) < 3 * error)
    assert np.all(np.abs(draws.mean(axis=0)) < 3 * SCALE / np.sqrt(run.ess))


def test_adaptation_reaches_a_correlated_gaussian_from_afar():
    first = StudentMixture(np.ones(1), np.full((1, 4), 0.5), 0.5 * np.eye(4)[None])
    mixture, points, log_weights = adapt(correlated_gaussian, first, np.random.default_rng(7))
    share = np.exp(log_weights - log_weights.max())
    size = share.sum() ** 2 / (share**2).sum()
    assert size > 0.6 * len(points)
    middle = share @ points / share.sum()
    assert np.all(np.abs(middle) < 4 * SCALE / np.sqrt(size))
    assert mixture.weights.sum() == pytest.approx(1)


def test_both_modes_keep_their_share():
    first = StudentMixture(
        np.array([0.5, 0.5]), np.array([[0.3, 0.0], [7.8, 0.2]]), np.repeat(0.8 * np.eye(2)[None], 2, 0)
    )
    mixture, _, _ = adapt(two_modes, first, np.random.default_rng(11))
    starts = mixture.draw(np.random.default_rng(1), 80).reshape(4, 20, 2)
    run = run_ensembles(
        two_modes,
        starts,
        seed=4,
        names=["x", "y"],
        ess=3000,
        moves=[(IndependenceMove(mixture), 1.0)],
        progress=False,
    )
    far = (run.chain[..., 0] > 4).mean()
    assert far == pytest.approx(0.25, abs=3 * np.sqrt(0.25 * 0.75 / run.ess.min()))


def test_weighted_points_give_their_moments():
    rng = np.random.default_rng(9)
    points = rng.normal(size=(5000, 2)) * 3
    share = np.exp(-0.5 * (points**2).sum(axis=1) * (1 - 1 / 9))
    mixture = fit_mixture(points, share / share.sum(), np.zeros((1, 2)))
    np.testing.assert_allclose(mixture.roots[0] @ mixture.roots[0].T, np.eye(2), atol=0.15)
