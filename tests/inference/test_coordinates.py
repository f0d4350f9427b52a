"""Straight coordinates: densities transform as change of variables says, and ridges that end keep their length."""

import pickle
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from scipy import integrate, stats

from inverse.inference.mcmc.approximation import approximate, prepare
from inverse.inference.mcmc.coordinates import straightened
from inverse.inference.mcmc.importance import importance_draws
from inverse.inference.mcmc.sampling import walk
from inverse.inference.minima.least_squares import Basin, Fit, make_basin
from inverse.inference.minima.minimise import minimise
from inverse.inference.problem.parameters import Parameters, parameters

EDGED = {
    "uniform": stats.uniform(40, 40),
    "log-uniform": stats.loguniform(20, 500),
    "cut normal": stats.truncnorm(-1, 3, loc=5, scale=2),
    "beta": stats.beta(2, 3, loc=1, scale=4),
}


@dataclass(frozen=True)
class PriorOnly:
    """Data that say nothing."""

    parameters: Parameters

    def __call__(self, z: Any) -> Any:
        return stats.norm.logpdf(z).sum(axis=1)


@dataclass(frozen=True)
class Ratio:
    """Data that see the ratio of the first two unknowns, and nothing else."""

    parameters: Parameters
    ratio: float
    width: float

    def residuals(self, z: Any) -> Any:
        values = self.parameters.to_values(z)
        return np.column_stack([(values[:, 0] / values[:, 1] - self.ratio) / self.width, z])

    def __call__(self, z: Any) -> Any:
        residuals = self.residuals(z)
        return np.where(np.isfinite(residuals).all(axis=1), -0.5 * (residuals**2).sum(axis=1), -np.inf)


@pytest.mark.parametrize("name", EDGED)
def test_density_in_the_coordinate_is_the_priors(name):
    prior = EDGED[name]
    density = straightened(PriorOnly(parameters({"x": prior})))
    (axis,) = density.edged
    y = np.linspace(*axis.ends, 23)[1:-1]
    value = axis.middle + axis.scale * y
    expected = (
        np.full(y.size, 1 / np.sqrt(12))
        if name in ("uniform", "log-uniform")
        else prior.pdf(value) * axis.scale
    )
    np.testing.assert_allclose(np.exp(density(y[:, None])), expected, rtol=1e-9)
    whole, _ = integrate.quad(lambda t: float(np.exp(density(np.array([[t]])))[0]), *axis.ends)
    assert whole == pytest.approx(1, abs=1e-6)


@pytest.mark.parametrize("name", EDGED)
def test_coordinates_and_normal_variables_are_inverse_and_nothing_lies_beyond_the_ends(name):
    problem = PriorOnly(parameters({"free": stats.norm(3, 1), "x": EDGED[name]}))
    density = straightened(problem)
    z = np.column_stack([np.linspace(-2, 2, 9), np.linspace(-5, 5, 9)])
    y = density.of_z(z)
    np.testing.assert_array_equal(y[:, 0], z[:, 0])
    np.testing.assert_allclose(density.to_z(y)[0], z, atol=1e-7)
    low, high = density.edged[0].ends
    beyond = np.array([[0.0, low - 1e-9], [0.0, high + 1e-9], [0.0, np.nan], [np.nan, 0.0]])
    assert np.isneginf(density(beyond)).all()
    points = y[1:-1]
    values = problem.parameters.to_values(density.to_z(points)[0])
    assert ((values[:, 1] > EDGED[name].support()[0]) & (values[:, 1] < EDGED[name].support()[1])).all()


def test_priors_without_two_ends_keep_their_normal_variables():
    priors = {"a": stats.norm(0, 1), "b": stats.halfcauchy(scale=0.05), "c": stats.lognorm(1.0)}
    density = straightened(PriorOnly(parameters(priors)))
    z = np.random.default_rng(1).standard_normal((5, 3))
    assert density.edged == ()
    np.testing.assert_array_equal(density.of_z(z), z)
    np.testing.assert_allclose(density(z), stats.norm.logpdf(z).sum(axis=1))


def test_a_density_in_straight_coordinates_can_be_pickled():
    density = straightened(PriorOnly(parameters(EDGED)))
    y = np.zeros((1, 4))
    np.testing.assert_array_equal(pickle.loads(pickle.dumps(density))(y), density(y))


def ridge(middle, width):
    """Thickness over velocity known to some parts in a thousand, the prior of the thickness ending at 80."""
    problem = Ratio(parameters({"d": stats.uniform(40, 40), "v": stats.norm(6.42, 0.1)}), middle, width)
    found = minimise(problem.residuals, np.array([1.0, 0.0]), max_evaluations=500)
    return problem, make_basin(problem, found.x, found.covariance, found)


def exact(problem):
    """Mean and deviation of the velocity: the thickness is integrated in closed form, as width and ends leave it."""

    def mass(v):
        at = np.array([80.0, 40.0]) / v
        inside = np.diff(stats.norm.cdf(at[::-1], problem.ratio, problem.width))[0]
        return stats.norm.pdf(v, 6.42, 0.1) * v * inside

    moments = [integrate.quad(lambda v, k=k: v**k * mass(v), 5.6, 7.3, limit=400)[0] for k in (0, 1, 2)]
    mean = moments[1] / moments[0]
    return mean, np.sqrt(moments[2] / moments[0] - mean**2)


def test_the_first_approximation_has_the_whole_length_of_a_ridge_near_an_end():
    """But for the end the velocity is as its prior says; the normal variables' approximation is narrower."""
    problem, basin = ridge(12.5, 0.01)
    mixture = approximate(straightened(problem), [basin], np.random.default_rng(1)).mixture
    thickness, velocity = np.linalg.norm(mixture.roots[0], axis=1)
    assert velocity == pytest.approx(1.0, rel=0.03)
    assert thickness == pytest.approx(12.5 * 0.1 / (40 / np.sqrt(12)), rel=0.03)
    assert np.sqrt(basin.covariance_z[1, 1]) < 0.9


@pytest.mark.parametrize("z", [-9.0, -6.0, 0.0, 6.0, 9.0])
def test_an_approximation_at_the_very_end_of_a_prior_can_be_drawn_from(z):
    problem, basin = ridge(12.4, 1e-5)
    density = straightened(problem)
    mixture = approximate(density, [replace(basin, z=np.array([z, 0.0]))], np.random.default_rng(1)).mixture
    assert np.isfinite(density(mixture.draw(np.random.default_rng(2), 1000))).mean() > 0.05


@pytest.mark.parametrize("ratio", [6.3, 12.2, 12.4, 12.5, 12.7])
def test_a_ridge_that_ends_at_its_prior_keeps_its_length(ratio):
    """The posterior of the velocity is that by quadrature, far from the prior's edge, at it and cut by it."""
    problem, basin = ridge(ratio, 0.01)
    density = straightened(problem)
    rng = np.random.default_rng(3)
    found = importance_draws(density, approximate(density, [basin], rng), rng, 400)
    assert found.suffice(400)
    velocity = problem.parameters.to_values(density.to_z(found.points)[0])[:, 1]
    mean = found.weights @ velocity
    deviation = np.sqrt(found.weights @ (velocity - mean) ** 2)
    expected, width = exact(problem)
    assert mean == pytest.approx(expected, abs=4 * width / np.sqrt(found.ess))
    assert deviation == pytest.approx(width, rel=4 / np.sqrt(found.ess))


@dataclass(frozen=True)
class Problem:
    """What chains need of a problem."""

    posterior: Ratio
    basin: Basin

    @property
    def names(self) -> tuple[str, ...]:
        return self.posterior.parameters.names

    def fingerprint(self) -> str:
        return "ratio"

    def least_squares(self, *, seed: int) -> Fit:
        return Fit(self, self.names, (self.basin,), seed)


def test_chains_of_a_cut_ridge_are_of_normal_variables_again():
    problem, basin = ridge(12.5, 0.01)
    made = Problem(problem, basin)
    run = walk(made, made.least_squares(seed=1), 1, ess=1000, progress=False)
    assert run.converged
    z = run.chain.reshape(-1, 2)
    np.testing.assert_allclose(run.log_prob.ravel(), problem(z), rtol=1e-9, atol=1e-6)
    velocity = problem.parameters.to_values(z)[:, 1]
    expected, width = exact(problem)
    assert velocity.mean() == pytest.approx(expected, abs=4 * width / np.sqrt(run.ess[1]))
    assert velocity.std() == pytest.approx(width, rel=4 / np.sqrt(run.ess[1]))


def test_starts_lie_within_the_priors_and_differ():
    problem, basin = ridge(12.4, 0.01)
    density = straightened(problem)
    starts, _ = prepare(density, [basin], 4, 24, 1)
    flat = starts.reshape(-1, 2)
    assert np.isfinite(density(flat)).all() and len(np.unique(flat, axis=0)) == 96


def test_the_middle_of_a_cut_ridge_is_where_the_density_is_high():
    """The minimum of normal variables is held back from the end; the approximation's middle is not."""
    problem, basin = ridge(12.5, 0.01)
    density = straightened(problem)
    mixture = approximate(density, [basin], np.random.default_rng(1)).mixture
    assert density(mixture.means)[0] > density(density.of_z(basin.z)[None])[0]
