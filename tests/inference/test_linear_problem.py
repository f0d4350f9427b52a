"""The noise's posterior with all else linear, against dense Gaussian algebra; draws from it, against quadrature."""

import numpy as np
import pytest
from linear import linear_problem
from scipy import stats

from inverse.inference.mcmc.approximation import approximate
from inverse.inference.mcmc.coordinates import straightened
from inverse.inference.mcmc.draws import draw_posterior
from inverse.inference.mcmc.importance import importance_draws, smoothed_weights
from inverse.inference.mcmc.linear_problem import LinearProblem, noise_columns
from inverse.inference.minima.least_squares import Fit, refine

DELAY = np.cumsum(np.random.default_rng(1).uniform(0.5, 1.5, 60))
START, FIRST, SECOND = (
    np.exp(-DELAY / 30),
    np.exp(-DELAY / 8) * np.sin(DELAY / 3),
    np.exp(-DELAY / 20) * np.cos(DELAY / 4),
)
SHAPES = np.stack([START, FIRST, SECOND, np.zeros(DELAY.size)])
WIDTH, OFFSET = 3.0, 1e-9
TRUTH = np.array([0.4, -0.7])
PRIORS = {
    "white": stats.lognorm(np.log(2), scale=0.02),
    "discrepancy": stats.lognorm(np.log(10), scale=0.02),
    "correlation_time": stats.loguniform(2.0, 60.0),
}


def covariance(white, size, time):
    """Of the noise, dense."""
    return white**2 * np.eye(DELAY.size) + size**2 * np.exp(-np.abs(np.subtract.outer(DELAY, DELAY)) / time)


def made(model):
    rng = np.random.default_rng(5)
    noise = rng.multivariate_normal(np.zeros(DELAY.size), covariance(0.02, 0.04, 25.0))
    data = START + TRUTH @ SHAPES[1:3] + noise
    if model == "student":
        data[[7, 31, 50]] += [0.3, -0.2, 0.25]
    return linear_problem(DELAY, SHAPES, data, PRIORS, width=WIDTH, model=model)


def minimum(problem):
    physical = np.array([True, True, False, False, False])
    return refine(problem.posterior, physical, np.array([*TRUTH, 0.0, 0.0, 0.0]))


@pytest.fixture(scope="module")
def problem():
    return made("correlated")


@pytest.fixture(scope="module")
def basin(problem):
    return minimum(problem)


def dense(problem, z):
    """Basis and slopes about a point, as columns, and the noise's values."""
    values = problem.posterior.parameters.to_values(z[None])[0]
    shape = START + values[0] * FIRST + values[1] * SECOND
    basis = np.column_stack([WIDTH * shape, np.full(DELAY.size, OFFSET)])
    return basis, WIDTH * SHAPES[1:3].T, values[2:]


def linear_pieces(problem, z):
    """Basis, and slopes at the coefficients that the posterior expects."""
    basis, slopes, noise = dense(problem, z)
    k = covariance(*noise)
    data = problem.posterior.members[0].model.channels[0].data
    mean = np.linalg.solve(
        np.eye(2) + basis.T @ np.linalg.solve(k, basis), basis.T @ np.linalg.solve(k, data)
    )
    return basis, slopes * mean[0], data


def test_noise_is_told_from_the_other_unknowns(problem):
    np.testing.assert_array_equal(noise_columns(problem.posterior), [False, False, True, True, True])


def test_log_posterior_of_the_noise_is_that_of_dense_algebra(problem, basin):
    density = straightened(problem.posterior)
    point = density.of_z(basin.z)
    line = LinearProblem(density, problem.posterior, point)
    basis, slopes, data = linear_pieces(problem, basin.z)
    z_noise = np.array([[0.0, 0.3, 0.2], [0.4, -0.5, 1.5], [-0.6, 1.2, -1.0], [0.1, 0.2, 0.9]])
    z = np.column_stack([np.repeat(basin.z[None, :2], 4, axis=0), z_noise])
    expected = []
    for row, values in zip(z, problem.posterior.parameters.to_values(z), strict=True):
        whole = covariance(*values[2:]) + basis @ basis.T + slopes @ slopes.T
        fit = stats.multivariate_normal.logpdf(data + slopes @ basin.z[:2], np.zeros(DELAY.size), whole)
        # Flat in the logarithm of the time, so only the other two have a normal prior.
        expected.append(fit + stats.norm.logpdf(row[2:4]).sum())
    found = line(density.of_z(z)[:, 2:])
    np.testing.assert_allclose(found - found[0], np.array(expected) - expected[0], atol=1e-5)


def test_other_unknowns_given_the_noise_are_those_of_dense_algebra(problem, basin):
    density = straightened(problem.posterior)
    line = LinearProblem(density, problem.posterior, density.of_z(basin.z))
    basis, slopes, data = linear_pieces(problem, basin.z)
    z = np.concatenate([basin.z[:2], [0.3, 0.8, 0.6]])
    k = covariance(*problem.posterior.parameters.to_values(z[None])[0, 2:]) + basis @ basis.T
    inverse = np.linalg.inv(np.eye(2) + slopes.T @ np.linalg.solve(k, slopes))
    mean = inverse @ slopes.T @ np.linalg.solve(k, data + slopes @ basin.z[:2])
    theta = np.repeat(density.of_z(z[None])[:, 2:], 40_000, axis=0)
    points = line.draw(theta, np.random.default_rng(3))
    np.testing.assert_array_equal(points[:, 2:], theta)
    sd = np.sqrt(np.diag(inverse))
    assert (np.abs(points[:, :2].mean(axis=0) - mean) < 4 * sd / np.sqrt(40_000)).all()
    np.testing.assert_allclose(np.cov(points[:, :2].T), inverse, atol=0.03 * sd.max() ** 2)


def test_noise_beyond_the_end_of_a_prior_is_impossible(problem, basin):
    density = straightened(problem.posterior)
    line = LinearProblem(density, problem.posterior, density.of_z(basin.z))
    end = density.edged[0].ends[1]
    assert np.isneginf(line(np.array([[0.0, 0.0, end + 0.01], [np.nan, 0.0, 0.0]]))).all()


def test_noise_so_small_that_rounding_wins_spoils_no_other(problem, basin):
    density = straightened(problem.posterior)
    line = LinearProblem(density, problem.posterior, density.of_z(basin.z))
    theta = np.array([[0.0, 0.0, 0.0], [-60.0, -30.0, 0.0], [0.2, 0.1, 0.3]])
    found = line(theta)
    np.testing.assert_allclose(found[[0, 2]], line(theta[[0, 2]]), rtol=1e-12)
    assert not found[1] > found[0]


def grid_quantiles(problem, basin, probabilities):
    """Quantiles of the noise's values on a grid, the others integrated densely about the minimum."""
    basis, slopes, data = linear_pieces(problem, basin.z)
    axes = (np.linspace(-2.5, 2.5, 17), np.linspace(-3, 3, 25), np.linspace(-1.7, 1.7, 21))
    z = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    values = np.column_stack(
        [PRIORS["white"].ppf(stats.norm.cdf(z[:, 0])), PRIORS["discrepancy"].ppf(stats.norm.cdf(z[:, 1]))]
    )
    log_time = np.log(np.sqrt(2.0 * 60.0)) + z[:, 2] * np.log(60.0 / 2.0) / np.sqrt(12)
    extra = basis @ basis.T + slopes @ slopes.T
    residual = data + slopes @ basin.z[:2]
    log_density = np.array(
        [
            stats.multivariate_normal.logpdf(residual, np.zeros(DELAY.size), covariance(*v, t) + extra)
            for v, t in zip(values, np.exp(log_time), strict=True)
        ]
    ) + stats.norm.logpdf(z[:, :2]).sum(axis=1)
    mass = np.exp(log_density - log_density.max()).reshape([len(a) for a in axes])
    out = []
    for axis, points in enumerate(axes):
        share = mass.sum(axis=tuple(i for i in range(3) if i != axis))
        # Each point stands for the cell about it.
        edges = np.concatenate([[points[0]], (points[1:] + points[:-1]) / 2, [points[-1]]])
        out.append(np.interp(probabilities, np.concatenate([[0], np.cumsum(share) / share.sum()]), edges))
    return np.array(out)


def test_weighted_draws_reach_the_long_tail_of_a_slow_discrepancy(problem, basin):
    """Where amplitude and time lie on a long ridge, its far end has the probability that quadrature gives it."""
    density = straightened(problem.posterior)
    rng = np.random.default_rng(4)
    found = importance_draws(density, approximate(density, [basin], rng), rng, 400)
    assert found.suffice(400)
    probabilities = np.array([0.05, 0.25, 0.5, 0.75, 0.95])
    edges = grid_quantiles(problem, basin, probabilities)
    for axis in range(3):
        below = (found.weights[:, None] * (found.points[:, [2 + axis]] < edges[axis])).sum(axis=0)
        allowed = 4 * np.sqrt(probabilities * (1 - probabilities) / found.ess) + 0.01
        assert (np.abs(below - probabilities) < allowed).all(), (axis, below)


@pytest.mark.parametrize("model", ["correlated", "student"])
def test_both_ways_of_drawing_agree(model):
    problem = made(model)
    problem.fingerprint = lambda: model
    fit = Fit(problem, problem.names, (minimum(problem),), 1)
    weighted, walked = (
        draw_posterior(problem, fit, seed=2, ess=400, method=method) for method in ("importance", "mcmc")
    )
    assert (weighted.method, walked.method) == ("importance", "mcmc")
    assert weighted.converged and walked.converged
    for column in range(5):
        edges = np.quantile(walked.values[:, column], [0.1, 0.5, 0.9])
        share = (weighted.values[:, [column]] < edges).mean(axis=0)
        assert (np.abs(share - [0.1, 0.5, 0.9]) < 4 * np.sqrt(2 * 0.25 / 400)).all()


def test_the_first_mixture_is_near_enough_with_outliers_too():
    """At once, without refitting: a third of the draws count."""
    problem = made("student")
    density = straightened(problem.posterior)
    rng = np.random.default_rng(6)
    mixture = approximate(density, [minimum(problem)], rng).mixture
    points = mixture.draw(rng, 1000)
    log_weights = density(points) - mixture.log_density(points)
    weights, shape = smoothed_weights(log_weights[np.isfinite(log_weights)])
    assert shape < 0.7 and 1 / (weights @ weights) > 300
