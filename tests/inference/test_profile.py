"""Profile likelihood: a linear normal problem with a known answer, bounds, two minima, and the Al/Si film."""

import json
from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
import pytest
from problems import SETUP, bonded, noisy
from scipy import stats

import inverse as inv
from inverse.inference.minima.least_squares import Basin, Fit
from inverse.inference.minima.minimise import Minimum
from inverse.inference.minima.profile import LEVELS, profile
from inverse.inference.problem.parameters import Parameters, parameters

QUIET = Minimum(np.zeros(1), 0.0, np.eye(1), 1.0, np.zeros((0, 1)), 0, True, "")


@dataclass(frozen=True)
class Density:
    """Log likelihood of values plus the priors in z."""

    parameters: Parameters
    log_likelihood: object

    def __call__(self, z: np.ndarray) -> np.ndarray:
        return self.log_likelihood(self.parameters.to_values(z)) - 0.5 * (z * z).sum(axis=1)


def invented(priors: dict, log_likelihood, *minima: tuple[np.ndarray, np.ndarray]) -> Fit:
    """A problem of invented unknowns with minima at given z and covariances."""
    density = Density(parameters(priors), log_likelihood)
    problem = SimpleNamespace(
        names=tuple(priors), priors=priors, units=dict.fromkeys(priors, "nm"), posterior=density
    )
    basins = tuple(
        Basin(z, c, z, np.sqrt(c.diagonal()), c, float(density(z[None])[0]), 1 / len(minima), QUIET)
        for z, c in minima
    )
    return Fit(problem, problem.names, basins, 0)


def test_levels_are_quantiles_of_chi_square() -> None:
    for mass, level in LEVELS.items():
        assert level == pytest.approx(stats.chi2.ppf(mass, 1), rel=1e-5)


@pytest.mark.parametrize("own_prior", [False, True])
def test_profile_of_a_linear_normal_problem_is_the_parabola_of_its_marginal(own_prior: bool) -> None:
    """y = X x + e with normal priors: D = (x - m)^2 / v with v the variance without (or with) the own prior."""
    rng = np.random.default_rng(3)
    design = rng.standard_normal((8, 3))
    means, widths = np.array([1.0, 2.0, 3.0]), np.array([2.0, 0.5, 1.0])
    data = design @ [1.5, 2.2, 2.5] + 0.3 * rng.standard_normal(8)
    priors = {n: stats.norm(m, w) for n, m, w in zip("abc", means, widths, strict=True)}

    def log_likelihood(values):
        return -0.5 * ((data - values @ design.T) ** 2).sum(axis=1) / 0.09

    kept = np.array([1.0 if own_prior else 0.0, 1.0, 1.0])
    precision = design.T @ design / 0.09 + np.diag(kept / widths**2)
    variance = np.linalg.inv(precision)[0, 0]
    centre = np.linalg.solve(precision, design.T @ data / 0.09 + kept * means / widths**2)[0]
    start = np.full(3, 0.1)
    fit = invented(priors, log_likelihood, (start, np.diag([0.01, 0.1, 0.02])))
    found = profile(fit.inversion, "a", fit=fit, own_prior=own_prior)
    x = found["value"].values
    np.testing.assert_allclose(found["deviance"], (x - centre) ** 2 / variance, atol=2e-5)
    assert found.attrs["estimate"] == pytest.approx(centre, abs=1e-4)
    for mass, level in LEVELS.items():
        ((low, high),) = json.loads(found.attrs[f"interval_{100 * mass:.0f}"])
        half = np.sqrt(level * variance)
        np.testing.assert_allclose([low, high], [centre - half, centre + half], atol=0.005 * half)
    assert found.attrs["open"] == ""
    np.testing.assert_allclose(found["best"].sel(unknown="a"), x)


def test_an_unknown_without_lower_limit_has_an_open_end_at_its_priors_bound() -> None:
    """log L = -x^2 / 2 s^2 for a compliance: the interval begins at zero; upper end s sqrt(level)."""
    priors = {"A|B.compliance": stats.halfcauchy(scale=0.05)}
    fit = invented(
        priors,
        lambda v: -0.5 * (v[:, 0] / 0.01) ** 2,
        (np.array([-1.5]), np.array([[0.5]])),
    )
    found = profile(fit.inversion, "A|B.compliance", fit=fit, points=41)
    ((low, high),) = json.loads(found.attrs["interval_95"])
    assert low == 0.0
    assert high == pytest.approx(0.01 * np.sqrt(LEVELS[0.95]), rel=0.01)
    assert found.attrs["open"] == "low"


def test_two_minima_give_two_intervals() -> None:
    """Two equal wells at -2 and 2, each a parabola of deviation 0.2; the second unknown differs between them."""
    priors = {"a": stats.norm(0, 10), "b": stats.norm(0, 1)}

    def log_likelihood(v):
        a, b = v[:, 0], v[:, 1]
        wells = [-0.5 * ((a - s) / 0.2) ** 2 - 0.5 * ((b - s / 4) / 0.1) ** 2 for s in (-2, 2)]
        return np.logaddexp(*wells)

    scale = np.diag([4e-4, 1e-2])
    minima = [(np.array([s / 10, s / 4]), scale) for s in (-2, 2)]
    fit = invented(priors, log_likelihood, *minima)
    found = profile(fit.inversion, "a", fit=fit, points=61)
    segments = json.loads(found.attrs["interval_95"])
    assert len(segments) == 2
    half = 0.2 * np.sqrt(LEVELS[0.95])
    np.testing.assert_allclose(segments, [[-2 - half, -2 + half], [2 - half, 2 + half]], atol=0.02)


def test_a_minimum_far_below_the_best_leaves_the_points_where_the_interval_is() -> None:
    """Wells at 0 and, 50 lower in log likelihood, at 20, each a parabola of deviation 0.2."""
    priors = {"a": stats.norm(0, 10)}

    def log_likelihood(v):
        return np.logaddexp(-0.5 * (v[:, 0] / 0.2) ** 2, -0.5 * ((v[:, 0] - 20) / 0.2) ** 2 - 50)

    minima = [(np.array([s / 10]), np.array([[4e-4]])) for s in (0, 20)]
    found = profile((fit := invented(priors, log_likelihood, *minima)).inversion, "a", fit=fit, points=15)
    assert np.abs(found["value"]).max() < 1.0
    ((low, high),) = json.loads(found.attrs["interval_68"])
    half = 0.2 * np.sqrt(LEVELS[0.68])
    np.testing.assert_allclose([low, high], [-half, half], atol=0.01 * half)


def test_profile_agrees_with_the_normal_approximation_on_a_well_determined_film() -> None:
    """Al on Si, 0.2 % noise: half the 68 % interval is 0.994 deviations (3 % for what is not quadratic)."""
    stack = bonded()
    trace = noisy(stack, {"Al.thickness": 60.0, "Al.velocity": 6.42, "Al|Si.compliance": 0.02}, 0.002, seed=3)
    fit = inv.Inversion(stack, SETUP, trace, noise="white").least_squares(seed=1, starts=2)
    for name in ("Al|Si.compliance", "noise.white"):
        found = profile(fit.inversion, name, fit=fit, points=9, own_prior=True)
        ((low, high),) = json.loads(found.attrs["interval_68"])
        i = fit.names.index(name)
        assert (high - low) / 2 == pytest.approx(np.sqrt(LEVELS[0.68]) * fit.sd[i], rel=0.03)
        assert abs(found.attrs["estimate"] - fit.values[i]) < 0.3 * fit.sd[i]
        assert found["deviance"].values.min() == 0.0


def test_wrong_arguments_are_refused() -> None:
    fit = invented({"a": stats.norm(0, 1)}, lambda v: -(v[:, 0] ** 2), (np.zeros(1), np.eye(1)))
    with pytest.raises(ValueError, match="There is no unknown 'b'; there are a"):
        profile(fit.inversion, "b", fit=fit)
    with pytest.raises(ValueError, match="points must be a whole number, 7 or more, not 3"):
        profile(fit.inversion, "a", points=3, fit=fit)
