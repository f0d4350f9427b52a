"""Budgets: the split known by hand in a linear problem, refits with other constants, and the warnings."""

import numpy as np
import pytest
from linear import linear_problem
from problems import BOND, FILM, SETUP, bonded, noisy
from scipy import stats

import inverse as inv
from inverse.inference.checks.budget import budget, constant_warnings, weigh_constants
from inverse.inference.checks.constants import DEFAULT_RELATIVE_SPREAD, fixed_constants, with_constant
from inverse.inference.checks.linearised import linearise
from inverse.inference.minima.least_squares import refine
from inverse.inference.minima.minimise import minimise
from inverse.inference.minima.projection import Projected

DELAY = np.arange(1.0, 41.0)
SIGMA = 0.05


def orthonormal(seed=3):
    """Four shapes without scalar products among them or with a constant, each of unit length."""
    start = np.column_stack(
        [np.ones(DELAY.size), np.random.default_rng(seed).standard_normal((DELAY.size, 4))]
    )
    return np.linalg.qr(start)[0].T[1:]


def test_split_between_noise_and_prior_is_that_of_a_linear_gaussian_problem():
    # With the other shapes orthogonal, the estimate of a weighs data of variance SIGMA^2 and a prior of variance 1.
    shapes = orthonormal()
    problem = linear_problem(DELAY, shapes, shapes[0], {"white": SIGMA})
    linear = linearise(problem, np.zeros(2))
    share = 1 / (1 + SIGMA**2)  # of the data in the estimate
    scale = float(
        problem.posterior.members[0]
        .model.eliminated(
            {"film.velocity": np.zeros(1), "film.density": np.zeros(1), "noise.white": np.full(1, SIGMA)}
        )
        .mean[0, 0]
        * 100.0
    )
    assert scale == pytest.approx(1.0, abs=1e-6)
    response = linear.covariance[:, 0]
    assert np.sqrt(response @ linear.scores["white noise"] @ response) == pytest.approx(
        SIGMA * share, rel=1e-5
    )
    assert abs(response[0]) == pytest.approx(1 - share, rel=1e-5)  # the prior's own share
    assert response @ linear.scores["priors of the linear coefficients"] @ response < 1e-8


def test_constant_shifts_the_estimate_by_what_its_effect_projects_on_the_unknown():
    shapes = orthonormal()
    shapes[3] = 0.7 * shapes[1] - 0.2 * shapes[2] + shapes[3]
    linear = linearise(linear_problem(DELAY, shapes, shapes[0], {"white": SIGMA}), np.zeros(2))
    share = 1 / (1 + SIGMA**2)
    names = [constant.name for constant in linear.constants]
    np.testing.assert_allclose(
        linear.shifts[:, names.index("film.heat_capacity")], [-0.07 * share, 0.02 * share], rtol=1e-4
    )


def dense_split(shapes, noise, width=100.0):
    """The same split from dense matrices: generalised least squares with every unknown in one design."""
    lag = np.abs(DELAY[:, None] - DELAY)
    white = noise["white"] ** 2 * np.eye(DELAY.size)
    drift = noise["discrepancy"] ** 2 * np.exp(-lag / noise["correlation_time"])
    design = np.column_stack([shapes[1], shapes[2], width * shapes[0]])
    weights = np.linalg.solve(white + drift, design)
    covariance = np.linalg.inv(design.T @ weights + np.eye(3))
    gain = covariance @ weights.T
    return {
        "white noise": np.sqrt((gain @ white @ gain.T)[0, 0]),
        "discrepancy": np.sqrt((gain @ drift @ gain.T)[0, 0]),
        "prior of film.velocity": abs(covariance[0, 0]),
        "prior of film.density": abs(covariance[0, 1]),
        "priors of the linear coefficients": abs(covariance[0, 2]),
    }


def test_split_with_a_discrepancy_agrees_with_dense_matrices():
    shapes = np.exp(-DELAY / np.array([[30.0], [12.0], [5.0], [2.0]]))
    noise = {"white": 0.05, "discrepancy": 0.1, "correlation_time": 6.0}
    # Linearised where the data say c = 1: the coefficient's prior of one standard deviation pulls by 1 - mean.
    problem = linear_problem(DELAY, shapes, shapes[0], noise)
    found = budget(fit_at(problem, np.zeros(2)), quantities=["film.velocity"])["film.velocity"]
    for source, expected in dense_split(shapes, noise).items():
        assert found[source] == pytest.approx(expected, rel=2e-3, abs=1e-7), source


def test_contributions_without_constants_add_up_to_the_covariance():
    shapes = np.exp(-DELAY / np.array([[30.0], [12.0], [5.0], [2.0]]))
    noise = {"white": 0.05, "discrepancy": 0.1, "correlation_time": 6.0}
    problem = linear_problem(DELAY, shapes, shapes[0], noise, width=3.0)
    linear = linearise(problem, np.zeros(2))
    found = budget(fit_at(problem, np.zeros(2)))
    for i, name in enumerate(problem.names):
        parts = [u for source, u in found[name].items() if not source.startswith("constant")]
        assert np.hypot.reduce(parts) == pytest.approx(np.sqrt(linear.covariance[i, i]), rel=1e-9)


def fit_at(problem, z):
    """What `budget` reads of a least-squares result."""
    from types import SimpleNamespace

    return SimpleNamespace(inversion=problem, best=SimpleNamespace(z=z))


@pytest.fixture(scope="module")
def fitted():
    """An Al film on Si, fitted with its electron-phonon coupling fixed."""
    stack = bonded(density_ratio=stats.norm(1.16, 0.04), boundary_conductance=stats.loguniform(20, 500))
    trace = noisy(stack, {**FILM, **BOND}, 0.01, seed=1, drift=(0.01, 5.0))
    return inv.Inversion(stack, SETUP, trace).least_squares(starts=4, seed=1)


@pytest.fixture(scope="module")
def found(fitted):
    """Its budget."""
    return budget(fitted)


def test_combined_uncertainty_without_constants_is_that_of_the_fit(fitted, found):
    for name, sd in zip(fitted.names, fitted.sd, strict=True):
        if name not in fitted.inversion.noise_names:
            parts = [u for source, u in found[name].items() if not source.startswith("constant")]
            # The fit's covariance keeps a term of the size of the residuals that the linear split leaves out.
            assert np.hypot.reduce(parts) == pytest.approx(sd, rel=0.05), name


@pytest.mark.parametrize(
    ("name", "change"),
    [
        (
            "Al.n_imag_800",
            lambda film, v: {"n": {400: film.index_at(400), 800: complex(film.index_at(800).real, v)}},
        ),
        ("Al.conductivity", lambda film, v: {"conductivity": v}),
        ("Al.heat_capacity", lambda film, v: {"heat_capacity": v}),
    ],
)
def test_shifts_by_constants_agree_with_refits_of_a_changed_problem(fitted, name, change):
    problem, z = fitted.inversion, fitted.best.z
    constant = next(c for c in fixed_constants(problem) if c.name == name)
    physical = np.array([n not in problem.noise_names for n in problem.names])

    def refit(sign):
        # A tenth of the spread, so that what is compared with a derivative is nearly straight.
        film, value = problem.stack.media[0], constant.value + sign * constant.spread / 10
        layer = inv.Layer(
            "Al",
            thickness=film.thickness,
            velocity=film.material.velocity,
            density_ratio=film.density_ratio,
            **change(inv.material("Al"), value),
        )
        other = inv.Stack(layer, *problem.stack.parts[1:])
        changed = inv.Inversion(other, SETUP, problem.trace, time_zero=problem.priors["time_zero"])
        found = minimise(Projected(held(changed, problem), physical, z), z[physical], max_evaluations=200)
        return found.x

    shift = 5 * (refit(1) - refit(-1))
    linear = linearise(problem, z, refit=False)
    column, own = linear.shifts[:, linear.constants.index(constant)], np.sqrt(linear.covariance.diagonal())
    # Gauss and Newton's approximation leaves out terms of the size of the residuals: an eighth of the largest shift.
    np.testing.assert_allclose(column / own, shift / own, atol=np.abs(shift / own).max() / 8)


def held(changed, problem):
    """A problem's posterior with the prior widths of another's coefficients."""
    from dataclasses import replace

    (member,), (other,) = changed.posterior.members, problem.posterior.members
    return replace(
        changed.posterior, members=(replace(member, model=replace(member.model, widths=other.model.widths)),)
    )


def test_constants_that_outweigh_an_interval_are_named_with_their_size(fitted):
    texts = constant_warnings(fitted.inversion, fitted)
    assert any("Al.electron_phonon_coupling" in t and "times its standard deviation" in t for t in texts)
    assert not any("e+0" in t.partition(" moves ")[2] for t in texts)
    assert not any("Si.conductivity" in t for t in texts)


def test_shares_of_the_constants_are_those_of_the_budget(fitted):
    split = budget(fitted, refit=False)
    shares = weigh_constants(fitted.inversion, fitted, refit=False)[1]
    assert set(shares) == set(split)
    for name, sources in split.items():
        parts = [u for source, u in sources.items() if source.startswith("constant ")]
        assert shares[name] == pytest.approx(np.linalg.norm(parts))


def test_a_heavy_constant_is_taken_from_refits_one_spread_up_and_down(fitted):
    problem, z = fitted.inversion, fitted.best.z
    physical = np.array([n not in problem.noise_names for n in problem.names])
    name = "Al.electron_phonon_coupling"
    linear = linearise(problem, z)
    column = linear.shifts[:, [c.name for c in linear.constants].index(name)]
    ends = [refine(with_constant(problem.posterior, name, s), physical, z).z[physical] for s in (1, -1)]
    rms = np.sqrt(((ends[0] - z[physical]) ** 2 + (ends[1] - z[physical]) ** 2) / 2)
    assert rms.max() > 1
    np.testing.assert_allclose(np.abs(column), rms, rtol=1e-6)


def test_a_constant_known_to_a_factor_is_moved_by_that_factor(fitted):
    (member,) = with_constant(fitted.inversion.posterior, "Al.electron_phonon_coupling", 1.0).members
    coupling = inv.material("Al").electron_phonon_coupling
    assert member.fixed["Al.electron_phonon_coupling"] == pytest.approx(2 * coupling)


def test_derived_quantities_have_budgets_in_which_constants_act_directly(fitted, found):
    # c33 = ratio x density of Si x v^2: 0.2 % of density is 0.2 % of c33, besides what the fit moves.
    c33 = 1.16 * 2.329 * 6.4**2
    silicon = next(c for c in fixed_constants(fitted.inversion) if c.name == "Si.density")
    expected = c33 * silicon.spread / silicon.value
    assert found["Al.c33"]["constant Si.density"] == pytest.approx(expected, rel=0.1)


def test_numbers_without_a_spread_take_the_stated_default():
    stack = bonded(boundary_conductance=100.0, compliance=0.0)
    trace = noisy(stack, {"Al.thickness": 60.0, "Al.velocity": 6.42}, 0.01, seed=1)
    found = {c.name: c for c in fixed_constants(inv.Inversion(stack, SETUP, trace, time_zero=0.0))}
    assert (
        found["Al|Si.boundary_conductance"].spread == 100.0 * DEFAULT_RELATIVE_SPREAD["boundary_conductance"]
    )
    assert not found["Al|Si.boundary_conductance"].stated
    assert found["Al.heat_capacity"].stated
    assert "Al|Si.compliance" not in found  # a perfect bond is a model, not a number
    assert found["time_zero"].spread == pytest.approx(0.03)  # a tenth of the pulse's rms width
    assert found["pulse_rms"].spread == pytest.approx(0.015)


def test_budget_refuses_what_is_no_result_and_names_no_quantity(fitted):
    with pytest.raises(ValueError, match="budget got dict; give the result of"):
        budget({})
    with pytest.raises(ValueError, match=r"No budget for Al.colour; there is one for Al.thickness"):
        budget(fitted, quantities=["Al.colour"])


def test_budget_of_a_posterior_is_that_of_the_minimum_its_best_draw_belongs_to(fitted, found):
    import json

    import xarray as xr

    from inverse.inference.result import problem_record

    sd = np.where(np.array(fitted.names) == "Al|Si.compliance", 0.3, 0.1) * fitted.sd
    draws = fitted.values + sd * np.array([[[3.0], [1.0], [2.0]]])
    lp = fitted.inversion.log_prob(draws[0])[None]
    assert lp.argmax() == 1
    tree = xr.DataTree.from_dict(
        {
            "posterior": xr.Dataset(
                {name: (("chain", "draw"), draws[..., i]) for i, name in enumerate(fitted.names)}
            ),
            "sample_stats": xr.Dataset({"lp": (("chain", "draw"), lp)}),
            "observed_data": fitted.inversion.trace,
        }
    )
    tree.attrs["inverse"] = json.dumps({"record": problem_record(fitted.inversion)})
    names = ["Al.thickness", "Al|Si.compliance"]
    of_tree = budget(tree, quantities=names)
    for name in names:
        assert of_tree[name] == pytest.approx(found[name], rel=0.05, abs=0.01 * max(found[name].values())), (
            name
        )
