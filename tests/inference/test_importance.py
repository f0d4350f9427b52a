"""Weighted draws against densities whose moments are known, and against ArviZ."""

import numpy as np
import pytest
from scipy import stats

from inverse.inference.mcmc.approximation import Approximation
from inverse.inference.mcmc.importance import (
    LARGEST_SHAPE,
    LEAST_SPREAD,
    importance_draws,
    pareto_shape,
    smoothed_weights,
)
from inverse.inference.mcmc.independence import StudentMixture

MEAN = np.array([1.0, -2.0, 0.5])
ROOT = np.array([[1.0, 0.0, 0.0], [0.8, 0.5, 0.0], [-0.3, 0.4, 2.0]])


def log_normal(points):
    white = np.linalg.solve(ROOT, (points - MEAN).T)
    return -0.5 * (white * white).sum(axis=0)


def normal(mean, root):
    """One component, and its deviations."""
    mixture = StudentMixture(np.ones(1), np.asarray(mean)[None], np.asarray(root)[None])
    return Approximation(mixture, np.linalg.norm(root, axis=1))


def mixture(scale=1.0, shift=0.0):
    return normal(MEAN + shift, scale * ROOT)


def test_weighted_draws_have_the_moments_of_a_correlated_normal_density():
    found = importance_draws(log_normal, mixture(1.2, 0.3), np.random.default_rng(2), 500)
    assert found.shape < LARGEST_SHAPE and found.ess >= 500
    assert found.ess == pytest.approx(1 / np.sum(found.weights**2))
    mean = found.weights @ found.points
    centred = found.points - mean
    covariance = (centred.T * found.weights) @ centred
    expected = ROOT @ ROOT.T
    sd = np.sqrt(np.diag(expected))
    # five Monte Carlo errors of a mean and of a covariance (Isserlis: s_ii s_jj + s_ij^2)
    assert (np.abs(mean - MEAN) < 5 * sd / np.sqrt(found.ess)).all()
    error = np.sqrt((np.outer(sd, sd) ** 2 + expected**2) / found.ess)
    assert (np.abs(covariance - expected) < 5 * error).all()


def test_resampled_points_follow_the_weights():
    rng = np.random.default_rng(3)
    found = importance_draws(log_normal, mixture(1.5), rng, 400)
    points = found.resample_evenly(4000, rng)
    for i in range(3):
        scaled = (points[:, i] - MEAN[i]) / np.sqrt((ROOT @ ROOT.T)[i, i])
        assert abs(scaled.mean()) < 5 * np.sqrt(1 / 4000 + 1 / found.ess)
        assert abs(np.mean(scaled < -1.2816) - 0.1) < 5 * np.sqrt(0.09 * (1 / 4000 + 1 / found.ess))


def test_proposal_far_too_narrow_is_found_out():
    # Weights of a standard normal over a normal of deviation s: a Pareto tail of shape 1 - s^2 (closed form).
    x = 0.3 * np.random.default_rng(4).standard_normal(4000)
    weights, shape = smoothed_weights(stats.norm.logpdf(x) - stats.norm.logpdf(x, scale=0.3))
    assert LARGEST_SHAPE < shape < 1.1
    assert weights.sum() == pytest.approx(1.0)


def test_poor_first_guess_is_mended_by_refitting():
    narrow = normal(MEAN + 1.0, 0.4 * ROOT)
    found = importance_draws(log_normal, narrow, np.random.default_rng(4), 500)
    assert found.ess >= 500 and found.shape <= LARGEST_SHAPE
    assert (
        np.abs(found.weights @ found.points - MEAN) < 5 * np.linalg.norm(ROOT, axis=1) / np.sqrt(found.ess)
    ).all()


def test_target_out_of_reach_gives_the_last_round_for_the_caller_to_judge():
    found = importance_draws(log_normal, mixture(), np.random.default_rng(4), 1e6)
    assert found.ess < 1e6 and len(found.points) == 1000


@pytest.mark.parametrize("shape", [-0.3, 0.2, 0.7])
def test_pareto_shape_of_pareto_draws(shape):
    size = 4000
    excess = np.sort(stats.genpareto(shape, scale=2.5).rvs(size, random_state=6))
    found, scale = pareto_shape(excess)
    # asymptotic error of the maximum-likelihood shape: (1 + k) / sqrt(n) (Smith 1987; from memory)
    assert found == pytest.approx((size * shape + 5) / (size + 10), abs=5 * (1 + shape) / np.sqrt(size))
    assert scale == pytest.approx(2.5, rel=0.15)


@pytest.mark.parametrize(("degrees", "scale"), [(3, 1.0), (5, 0.6), (30, 0.5)])
def test_smoothed_weights_agree_with_arviz(degrees, scale):
    arviz = pytest.importorskip("arviz")
    # 3 sqrt(1600) is whole: ArviZ's versions round the tail's size differently
    x = scale * np.random.default_rng(7).standard_t(degrees, 1600)
    log_weights = stats.norm.logpdf(x) - stats.t.logpdf(x, degrees, scale=scale)
    weights, shape = smoothed_weights(log_weights)
    if hasattr(arviz, "psislw"):
        theirs, k = arviz.psislw(log_weights.copy())
    else:
        import xarray as xr

        # from version 1 it is given log likelihoods, the weights' negative
        theirs, k = xr.DataArray(-log_weights, dims="draw").azstats.psislw(dim="draw")
    expected = np.exp(np.asarray(theirs) - np.max(np.asarray(theirs)))
    np.testing.assert_allclose(weights, expected / expected.sum(), rtol=1e-6, atol=1e-12)
    assert shape == pytest.approx(float(k), abs=1e-6)


def test_density_without_a_possible_point_is_an_error():
    with pytest.raises(ValueError, match="is possible; check the priors"):
        importance_draws(lambda p: np.full(len(p), -np.inf), mixture(), np.random.default_rng(1), 100)


def test_a_bent_ridge_that_the_weights_do_not_tell_of_is_found_out_by_its_spread():
    """x normal, y = x^2 to a thousandth: a normal mixture at the mode reaches |x| of some hundredths only."""

    def bent(points):
        x, y = points.T
        return -0.5 * x**2 - 0.5 * ((y - x**2) / 1e-3) ** 2

    at_the_mode = normal(np.zeros(2), np.diag([1.0, 1e-3]))
    found = importance_draws(bent, at_the_mode, np.random.default_rng(6), 50)
    sd = np.sqrt(found.weights @ (found.points[:, 0] - found.weights @ found.points[:, 0]) ** 2)
    assert sd < 0.2 and found.spread == pytest.approx(sd, rel=0.5)
    assert found.spread < LEAST_SPREAD and not found.suffice(1.0)


def test_spread_is_one_where_the_mixture_holds():
    found = importance_draws(log_normal, mixture(), np.random.default_rng(8), 500)
    assert found.spread == pytest.approx(1.0, abs=5 / np.sqrt(2 * found.ess))
