"""What the data added: shares and bits against closed forms, and stacks whose null directions are known."""

import numpy as np
import pytest
from problems import SETUP, bonded, noisy, normal_draws, sampled
from scipy import stats

import inverse as inv
from inverse.inference.checks.combinations import combinations_of
from inverse.inference.checks.diagnostics import information_bits, normal_bits, what_data_added
from inverse.inference.checks.identifiability import Local, Ridge, local_covariances, ridges

TIME_ZERO = stats.norm(0, 0.05)


@pytest.fixture(scope="module")
def film_fit():
    """Noise of 5 % of the echoes: the echo's arrival is seen, its shape is not."""
    stack = bonded(compliance=0.02)
    trace = noisy(stack, {"Al.thickness": 60.0, "Al.velocity": 6.42}, 0.05, seed=1)
    return inv.Inversion(stack, SETUP, trace, time_zero=TIME_ZERO).least_squares(seed=1, starts=4)


@pytest.fixture(scope="module")
def rich_fit():
    """Noise of 0.1 % and a prior on the velocity three times as wide: everything is measured."""
    stack = bonded(velocity=stats.norm(6.42, 0.3))
    trace = noisy(stack, {"Al.thickness": 60.0, "Al.velocity": 6.42, "Al|Si.compliance": 0.02}, 0.001, seed=1)
    return inv.Inversion(stack, SETUP, trace, time_zero=TIME_ZERO).least_squares(seed=1, starts=4)


def hidden_oxide_fit(relative: float, seed: int):
    """2 nm of SiO2, welded, between film and substrate, fitted as a weak bond."""
    truth = inv.Stack(
        inv.Layer("Al", thickness=60.0, velocity=6.42, density_ratio=1.16),
        inv.Interface(boundary_conductance=100.0),
        inv.Layer("SiO2", thickness=2.0),
        inv.Substrate("Si", orientation="100"),
    )
    model = bonded(boundary_conductance=stats.loguniform(20, 500))
    trace = noisy(truth, {}, relative, seed=seed)
    return inv.Inversion(model, SETUP, trace, time_zero=TIME_ZERO).least_squares(seed=1, starts=4)


def test_information_of_a_normal_closed_form() -> None:
    """Kullback-Leibler divergence of two normals; 1 bit for a shift of sqrt(2 ln 2), 1.78 for a width of 1/6."""
    assert normal_bits(0.0, 1.0) == 0.0
    assert normal_bits(np.sqrt(2 * np.log(2)), 1.0) == pytest.approx(1.0, rel=1e-12)
    assert normal_bits(0.0, 1 / 36) == pytest.approx(np.log2(6) - 35 / 72 / np.log(2), rel=1e-12)


@pytest.mark.parametrize(("mean", "sd"), [(0.0, 1.0), (0.5, 0.3), (-3.0, 0.02)])
def test_information_from_draws_agrees_with_the_closed_form_for_normals(mean: float, sd: float) -> None:
    """Bins lose information: at most 0.06 bits at 64 bins, mostly in the two outer ones."""
    z = mean + sd * np.random.default_rng(5).standard_normal(8000)
    assert information_bits(z, 8000) == pytest.approx(normal_bits(mean, sd**2), abs=0.06)


def test_information_from_draws_of_the_prior_is_nearly_zero_in_the_mean() -> None:
    """400 draws in 20 bins pretend to about 19 / (800 ln 2) = 0.034 bits, taken off; a quarter may remain."""
    draws = np.random.default_rng(7).standard_normal((300, 400))
    found = np.array([information_bits(z, 400) for z in draws])
    assert abs(found.mean()) < 0.034 / 4


def test_information_from_draws_is_that_of_a_cut_prior_where_the_normal_formula_is_wrong() -> None:
    """Half of a prior is worth one bit exactly; the normal formula says another number."""
    z = np.abs(np.random.default_rng(6).standard_normal(8000))
    assert information_bits(z, 8000) == pytest.approx(1.0, abs=0.05)
    assert abs(normal_bits(z.mean(), z.var()) - 1) > 0.05


def test_shares_of_variance_of_a_linear_problem() -> None:
    """y1 = a + b with noise s, y2 = b with noise t; the posterior mean is differentiated by each prior mean."""
    s, t = 0.3, 2.0
    design = np.array([[1.0, 1.0], [0.0, 1.0]]) / np.array([[s], [t]])
    covariance = np.linalg.inv(design.T @ design + np.eye(2))
    shares = Local(("a", "b"), covariance[None], np.ones((1, 2)), np.ones((1, 2))).prior_shares
    rng = np.random.default_rng(7)
    prior_means, noise = rng.standard_normal((200000, 2)), rng.standard_normal((200000, 2))
    from_priors = prior_means @ covariance.T
    from_noise = noise @ design @ covariance.T
    np.testing.assert_allclose(
        from_noise.var(axis=0), (1 - shares.sum(axis=1)) * covariance.diagonal(), rtol=0.02
    )
    np.testing.assert_allclose(from_priors.var(axis=0), shares.sum(axis=1) * covariance.diagonal(), rtol=0.02)
    assert shares[0, 1] == pytest.approx((covariance[0, 1] ** 2) / covariance[0, 0], rel=1e-12)


def directions(*null: tuple[float, ...], learned: float = 1e-4) -> np.ndarray:
    """Covariance that is 1 along the given directions and small across."""
    size = len(null[0])
    basis = np.linalg.qr(np.array(null).T)[0]
    projector = basis @ basis.T
    return (projector + learned * (np.eye(size) - projector))[None]


def test_ridges_of_given_covariances() -> None:
    assert ridges(directions((0.08, 0.9968, 0.0))) == (Ridge((1,), (0,)),)
    assert ridges(directions((0.6, 0.0, 0.8))) == (Ridge((2,), (0,)),)
    assert ridges(1e-3 * np.eye(3)[None]) == ()


def test_two_unlearned_unknowns_are_no_ridge_however_their_eigenvectors_mix() -> None:
    assert ridges(directions((0.0, 1.0, 0.0), (0.0, 0.0, 1.0))) == ()
    both = directions((0.08, 0.9968, 0.0), (0.0, 0.0, 1.0))
    assert ridges(both) == (Ridge((1,), (0,)),)


def test_three_unknowns_on_one_ridge() -> None:
    """One open direction through three unknowns: one is free and two follow."""
    (ridge,) = ridges(directions((0.05, 0.02, 0.9985)))
    assert ridge == Ridge((2,), (0, 1))


def test_a_ridge_that_bends_is_found_from_its_draws() -> None:
    """a + b = 1 with log-normal priors: the direction in z turns along the ridge."""
    a = np.linspace(0.3, 0.7, 9)
    slope = np.stack([a, 1 - a], axis=1)
    null = np.stack([1 / a, -1 / (1 - a)], axis=1)
    covariance = np.array([directions(tuple(n / np.linalg.norm(n)))[0] for n in null])
    (ridge,) = ridges(covariance)
    local = Local(("A.compliance", "B.compliance"), covariance, slope, slope)
    (found,) = combinations_of(ridge, local, slope, {n: "nm/GPa" for n in local.names})
    assert found.kind == "sum"
    assert found.coefficients[1] == pytest.approx(1.0, abs=0.01)
    assert found.value == pytest.approx(1.0, abs=0.01)


@pytest.mark.parametrize("exponent", [1.0, -2.0, 0.5])
def test_the_exponent_of_a_product_is_read_from_the_ridge(exponent: float) -> None:
    """x = c y^p: along the ridge d ln x = p d ln y, so that x / y^p is what is measured."""
    y = np.linspace(6.0, 7.0, 9)
    x = 3 * y**exponent
    sd = 0.015
    null = np.stack([sd * exponent / 0.2 * np.ones(9), sd / sd * np.ones(9)], axis=1)
    covariance = np.array([directions(tuple(n / np.linalg.norm(n)), learned=1e-8)[0] for n in null])
    slope = np.stack([0.2 * x, sd * y], axis=1)
    # Null direction in z: (d ln x / 0.2, d ln y / sd) with d ln x = p d ln y.
    local = Local(("A.thickness", "A.velocity"), covariance, slope, np.stack([x, y], axis=1))
    (found,) = combinations_of(Ridge((1,), (0,)), local, local.values, {"A.thickness": "nm"})
    assert found.kind == "product"
    assert found.coefficients == (1.0, -exponent)


def test_an_opaque_film_measures_only_thickness_over_velocity(film_fit) -> None:
    """The echo comes after 2 d / v; the split of d and v is the prior's on v (closed form)."""
    added = what_data_added(film_fit)
    (found,) = added.combinations
    assert found.text == "Al.thickness/Al.velocity"
    assert "Al.thickness/Al.velocity is measured" in str(added)
    assert "the split comes from the prior on Al.velocity" in str(added)
    assert found.value == pytest.approx(60 / 6.42, rel=3 * found.width)
    assert found.alone[0] == pytest.approx(0.10 / 6.42, rel=0.1)
    assert found.width < 0.4 * found.alone[0]
    assert "prior only" in added["Al.velocity"].flags
    assert dict(added["Al.thickness"].prior_shares)["Al.velocity"] > 0.75
    assert added["Al.thickness"].correlations[0][0] == "Al.velocity"
    assert added.eigenvalues[0] < 1e-3 and added.eigenvalues[-1] > 0.8


def test_draws_say_the_same_as_least_squares(film_fit) -> None:
    inversion = film_fit.inversion
    added = what_data_added(sampled(inversion, normal_draws(film_fit, seed=2)))
    assert [c.text for c in added.combinations] == ["Al.thickness/Al.velocity"]
    for name in inversion.names[:2]:
        assert added[name].bits == pytest.approx(what_data_added(film_fit)[name].bits, abs=0.15)


def test_a_soft_interlayer_and_a_compliance_are_inseparable_in_the_known_proportion() -> None:
    """d (1 - Z^2 / (Z1 Z2)) / c33 + 1/K is what the reflection shows (closed form of the thin layer)."""
    soft = inv.Material(
        "polymer",
        density=1.1,
        velocity=2.4,
        n=1.5 + 0j,
        heat_capacity=1.5,
        conductivity=0.2,
        thermal_stress_coefficient=1e-3,
    )
    stack = inv.Stack(
        inv.Layer("Al", thickness=stats.uniform(40, 40), velocity=6.42, density_ratio=1.16),
        inv.Interface(
            compliance=stats.halfcauchy(scale=0.05), boundary_conductance=stats.loguniform(20, 500)
        ),
        inv.Layer(soft, thickness=stats.uniform(0.1, 1.0)),
        inv.Substrate("Si", orientation="100"),
    )
    truth = {
        "Al.thickness": 60.0,
        "Al|polymer.boundary_conductance": 100.0,
        "Al|polymer.compliance": 0.05,
        "polymer.thickness": 0.3,
    }
    trace = noisy(stack, truth, 0.03, seed=1)
    fit = inv.Inversion(stack, SETUP, trace, time_zero=TIME_ZERO).least_squares(seed=1, starts=4)
    (found,) = what_data_added(fit).combinations
    assert set(found.names) == {"Al|polymer.compliance", "polymer.thickness"}
    assert found.kind == "sum"
    density = 2.329  # Si, g/cm3
    thin = (1 - (1.1 * 2.4) ** 2 / ((1.16 * density * 6.42) * (density * 8.433))) / (1.1 * 2.4**2)
    factor = thin if found.names[0].endswith("compliance") else 1 / thin
    assert found.coefficients[1] == pytest.approx(factor, rel=0.05)
    total = (0.05 + 0.3 * thin) * (1 if found.names[0].endswith("compliance") else 1 / thin)
    assert abs(found.value - total) < 3 * found.width
    assert found.width < 0.4 * found.alone[0]


def test_a_rich_trace_leaves_nothing_inseparable(rich_fit) -> None:
    added = what_data_added(rich_fit)
    assert added.combinations == ()
    assert added.sentences == ()
    assert str(added).endswith("The data separate all unknowns.")
    assert all(added[name].data_share > 0.9 for name in added.names)
    assert added.eigenvalues.max() < 0.05


def test_a_hidden_oxide_taken_for_a_weak_bond_is_flagged_as_inseparable() -> None:
    """A negative control: the model is wrong and the trace cannot say so; the layer is 2 nm."""
    added = what_data_added(hidden_oxide_fit(0.01, seed=2))
    (layer,) = added.interlayers
    assert layer.verdict == "inseparable"
    assert abs(layer.thickness - 2.0) < 3 * layer.sd
    assert layer.sd < 0.5
    assert "may as well be an interlayer of" in str(added)


def test_a_hidden_oxide_is_preferred_where_the_trace_tells() -> None:
    added = what_data_added(hidden_oxide_fit(0.002, seed=2))
    (layer,) = added.interlayers
    assert layer.verdict == "layer"
    assert layer.difference < -9
    assert "more likely an interlayer" in str(added)


def test_a_spring_is_preferred_where_it_is_one(rich_fit) -> None:
    (layer,) = what_data_added(rich_fit).interlayers
    assert layer.verdict == "bond"
    assert "is not an interlayer of SiO2" in layer.sentence


def test_curvature_agrees_with_the_fit_and_does_not_depend_on_the_noise_unknowns_order(rich_fit) -> None:
    local = local_covariances(rich_fit.inversion, rich_fit.best.z[None])
    np.testing.assert_allclose(local.covariance[0], rich_fit.best.covariance_z[:4, :4], rtol=0.02, atol=1e-12)


def test_limits_are_flagged_at_bounds() -> None:
    """A perfect bond: the compliance touches zero, which nature sets; the thickness leans on its prior's edge."""
    stack = bonded(thickness=stats.uniform(60.2, 5), velocity=6.42)
    trace = noisy(stack, {"Al.thickness": 60.2, "Al|Si.compliance": 0.0}, 0.02, seed=3)
    inversion = inv.Inversion(stack, SETUP, trace, time_zero=stats.norm(0, 0.3))
    rng = np.random.default_rng(4)
    shape = (2, 50, 10)
    values = np.stack(
        [
            60.2 + 0.1 * np.abs(rng.standard_normal(shape)),
            1e-3 * np.abs(rng.standard_normal(shape)),
            0.01 * rng.standard_normal(shape),
            *(np.full(shape, inversion.priors[n].median()) for n in inversion.noise_names),
        ],
        axis=-1,
    )
    values[..., 3:] *= np.exp(0.05 * rng.standard_normal((*shape, 3)))
    z = inversion.posterior.parameters.to_z(values.reshape(-1, 6)).reshape(values.shape)
    added = what_data_added(sampled(inversion, z))
    assert added["Al|Si.compliance"].flags == ("upper limit",)
    assert added["Al.thickness"].flags == ("upper limit", "prior edge")
    assert added["time_zero"].flags == ()


def test_other_objects_and_materials_are_refused(film_fit) -> None:
    with pytest.raises(ValueError, match="Got int instead of a result; give what sample_posterior"):
        what_data_added(3)
    with pytest.raises(ValueError, match="unobtainium"):
        what_data_added(film_fit, interlayer="unobtainium")
    with pytest.raises(ValueError, match=r"There is no unknown 'Cu\.thickness'"):
        what_data_added(film_fit)["Cu.thickness"]
