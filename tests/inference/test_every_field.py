"""Every number of a material and of an interface can be an unknown: bound, felt by the response, inferred."""

import numpy as np
import pytest
from problems import SETUP
from scipy import stats

import inverse as inv
from inverse.description.material.properties import Material

DELAY = np.arange(-5, 60, 0.5)
INDEX = {400: 0.49 + 4.84j, 800: 2.77 + 8.35j}

PLAIN = {
    "velocity": (stats.norm(6.42, 0.1), 6.5),
    "density": (stats.norm(2.70, 0.05), 2.8),
    "density_ratio": (stats.norm(1.16, 0.04), 1.2),
    "thickness": (stats.uniform(40, 40), 61.0),
    "heat_capacity": (stats.norm(2.4, 0.07), 2.5),
    "conductivity": (stats.loguniform(50, 300), 150.0),
    "thermal_stress_coefficient": (stats.norm(0.005, 0.0005), 0.006),
    "expansion": (stats.norm(23e-6, 1e-6), 25e-6),
    "bulk_modulus": (stats.norm(76.0, 2.0), 80.0),
    "electron_heat_capacity": (stats.norm(0.028, 0.003), 0.035),
    "electron_phonon_coupling": (stats.lognorm(0.7, scale=2.45e17), 5e17),
    "electron_gruneisen": (stats.norm(1.4, 0.3), 2.5),
    "lattice_share": (stats.uniform(0.0, 0.5), 0.45),
    "band_gap": (stats.norm(0.67, 0.02), 1.0),
    "deformation_potential": (stats.norm(-4.0, 0.5), -8.0),
    "carrier_diffusivity": (stats.loguniform(10, 200), 150.0),
    "carrier_lifetime": (stats.loguniform(10, 1e4), 15.0),
    "surface_recombination": (stats.loguniform(1e3, 1e6), 1e6),
    "initial_stress": (stats.norm(0.0, 0.5), 1.0),
    "initial_stress_lifetime": (stats.loguniform(1, 100), 3.0),
    "attenuation_time": (stats.halfnorm(scale=0.01), 0.02),
    "attenuation_exponent": (stats.uniform(0.2, 0.7), 0.8),
    "quality_factor": (stats.loguniform(50, 1e4), 60.0),
    "quality_frequency": (stats.loguniform(0.01, 0.5), 0.3),
}
# What a field needs beside it to act.
CARRIERS = {
    "electron_heat_capacity": None,
    "electron_phonon_coupling": None,
    "band_gap": 0.67,
    "deformation_potential": -4.0,
    "carrier_diffusivity": 50.0,
    "carrier_lifetime": 300.0,
}
BESIDE = {
    **{name: CARRIERS for name in (*CARRIERS, "surface_recombination") if not name.startswith("electron")},
    "initial_stress_lifetime": {"initial_stress": 0.5},
    "attenuation_exponent": {"attenuation_time": 0.02},
    "quality_frequency": {"quality_factor": 30.0},
}
PAIRS = {
    "n_real_800": ({"n": {**INDEX, 800: (stats.norm(2.77, 0.1), 8.35)}}, 2.9),
    "n_imag_800": ({"n": {**INDEX, 800: (2.77, stats.norm(8.35, 0.2))}}, 8.8),
    # Under an opaque film it would be a common factor, which no likelihood knows.
    "n_real_400": ({"n": {**INDEX, 400: (stats.norm(0.49, 0.05), 4.84)}, "thickness": 12.0}, 0.6),
    "n_imag_400": ({"n": {**INDEX, 400: (0.49, stats.norm(4.84, 0.2))}}, 5.2),
    "dn_dstrain_real": ({"dn_dstrain": (stats.norm(5, 5), 3.0)}, 12.0),
    "dn_dstrain_imag": ({"dn_dstrain": (5.0, stats.norm(0, 5))}, 8.0),
    "dn_dT_real": ({"dn_dT": (stats.norm(0, 3e-4), 1e-4)}, 5e-4),
    "dn_dN_real": ({**CARRIERS, "dn_dN": (stats.norm(0, 5), 0.0)}, 3.0),
    "dn_dN_imag": ({**CARRIERS, "dn_dN": (0.0, stats.norm(0, 5))}, 3.0),
    "dn_dT_imag": ({"dn_dT": (1e-4, stats.norm(0, 3e-4))}, 5e-4),
}
CASES = {
    name: ({**BESIDE.get(name, {}), name: prior}, value) for name, (prior, value) in PLAIN.items()
} | PAIRS


def stack(**film):
    given = {"thickness": 60.0, "n": INDEX, **film}
    return inv.Stack(
        inv.Layer("Al", **given),
        inv.Interface(compliance=0.02, boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )


@pytest.fixture(scope="module")
def trace():
    clean = inv.simulate(stack(), SETUP, DELAY)["reflectance_change"].values
    rng = np.random.default_rng(1)
    return inv.make_trace(
        DELAY, reflectance_change=clean + 0.01 * np.ptp(clean[20:]) * rng.standard_normal(DELAY.size)
    )


@pytest.mark.parametrize("field", CASES)
def test_field_as_an_unknown_of_its_own_name_changes_the_response_and_the_density(trace, field):
    film, other = CASES[field]
    problem = inv.Inversion(stack(**film), SETUP, trace, time_zero=0.0)
    name = f"Al.{field}"
    assert problem.names[0] == name
    values = problem.posterior.parameters.to_values(np.zeros((2, len(problem.names))))
    values[1, 0] = other
    density = problem.log_prob(values)
    assert np.isfinite(density).all()
    likelihood = problem.posterior.log_likelihood(values)
    assert abs(likelihood[1] - likelihood[0]) > 1e-3
    (member,) = problem.posterior.members
    functions = member.model.functions(member.local(problem.posterior.parameters.named(values)))
    rows = functions["reflectance_change"]
    assert np.abs(rows[1] - rows[0]).max() > 1e-6 * np.abs(rows).max()


def test_every_field_of_a_material_is_among_these():
    from dataclasses import fields

    tried = {key.rsplit("_", 1)[0] if key in PAIRS else key for key in CASES}
    tried = {name.removesuffix("_real").removesuffix("_imag") for name in tried}
    # What only acts in a crystal known by its constants or cut askew is tested with anisotropic layers.
    apart = {"name", "sources", "spread", "stiffness", "orientation"}
    apart |= {f"{kind}_{plane}" for kind in ("photoelastic", "thermal_stress") for plane in ("xz", "yz")}
    missing = {f.name for f in fields(Material)} - tried - apart
    assert not missing


def test_expansion_and_bulk_modulus_act_through_their_product(trace):
    by_parts = inv.Inversion(
        stack(expansion=stats.norm(23e-6, 1e-6), bulk_modulus=76.0), SETUP, trace, time_zero=0.0
    )
    whole = inv.Inversion(
        stack(thermal_stress_coefficient=stats.norm(0.005, 0.0005)), SETUP, trace, time_zero=0.0
    )
    densities = []
    for problem, value in ((by_parts, 24e-6), (whole, 3 * 24e-6 * 76.0)):
        values = problem.posterior.parameters.to_values(np.zeros((1, len(problem.names))))
        values[0, 0] = value
        (member,) = problem.posterior.members
        local = member.local(problem.posterior.parameters.named(values))
        rows = member.model.functions(local)["reflectance_change"]
        densities.append(rows / member.model.coefficient_scales(local)[:, :, None])
    np.testing.assert_allclose(densities[0], densities[1], rtol=1e-9, atol=1e-12 * np.abs(densities[1]).max())


def test_a_known_coefficient_ratio_makes_one_function_whose_weights_are_those_of_simulate(trace):
    # With P, Q and N of both media as unknowns at what simulate takes, the trace is that function times the fluence.
    film = {"dn_dstrain": (stats.norm(4, 5), 2.0), "dn_dT": (stats.norm(1e-4, 3e-4), 2e-4)}
    film |= {**CARRIERS, "dn_dN": (stats.norm(0, 5), 0.5)}
    silicon = {"dn_dstrain": (stats.norm(-3, 5), 0.5), "dn_dT": (stats.norm(2e-4, 3e-4), 1e-5)}
    numbers = [
        {"dn_dstrain": 6 + 2j, "dn_dT": 3e-4 + 2e-4j, "dn_dN": 4 + 0.5j, **CARRIERS},
        {"dn_dstrain": -2 + 0.5j, "dn_dT": 1e-4 + 1e-5j},
    ]

    def two(top, bottom):
        return inv.Stack(
            inv.Layer("Al", thickness=60.0, **top),
            inv.Interface(compliance=0.02, boundary_conductance=100.0),
            inv.Substrate("Si", orientation="100", **bottom),
        )

    problem = inv.Inversion(two(film, silicon), SETUP, trace, time_zero=0.0, mask=None)
    chosen = {
        "Al.dn_dstrain_real": 6.0,
        "Al.dn_dT_real": 3e-4,
        "Al.dn_dN_real": 4.0,
        "Si.dn_dstrain_real": -2.0,
        "Si.dn_dT_real": 1e-4,
    }
    values = problem.posterior.parameters.to_values(np.zeros((1, len(problem.names))))
    for name, value in chosen.items():
        values[0, problem.names.index(name)] = value
    (member,) = problem.posterior.members
    local = member.local(problem.posterior.parameters.named(values))
    rows = member.model.functions(local)["reflectance_change"][0]
    assert np.abs(rows[:-2]).max() == 0.0
    one = rows[-2] / member.model.coefficient_scales(local)[0, -2]
    expected = inv.simulate(two(*numbers), SETUP, DELAY)["reflectance_change"].values
    np.testing.assert_allclose(one, expected, atol=1e-9 * np.abs(expected).max())


def test_simulate_asks_for_numbers_where_a_coefficient_is_unknown():
    with pytest.raises(ValueError, match="simulate takes complex numbers for dn_dstrain and dn_dT"):
        inv.simulate(stack(dn_dstrain=(stats.norm(5, 5), 3.0)), SETUP, DELAY)


@pytest.mark.parametrize(
    ("field", "prior", "value"),
    [
        ("compliance", stats.halfcauchy(scale=0.05), 0.1),
        ("boundary_conductance", stats.loguniform(20, 500), 200.0),
    ],
)
def test_field_of_an_interface_as_an_unknown(trace, field, prior, value):
    bond = {"compliance": 0.02, "boundary_conductance": 100.0, field: prior}
    bonded = inv.Stack(
        inv.Layer("Al", thickness=60.0), inv.Interface(**bond), inv.Substrate("Si", orientation="100")
    )
    problem = inv.Inversion(bonded, SETUP, trace, time_zero=0.0)
    assert problem.names[0] == f"Al|Si.{field}"
    values = problem.posterior.parameters.to_values(np.zeros((2, len(problem.names))))
    values[1, 0] = value
    likelihood = problem.posterior.log_likelihood(values)
    assert np.isfinite(likelihood).all()
    assert abs(likelihood[1] - likelihood[0]) > 1e-3
