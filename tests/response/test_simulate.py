"""`simulate` at the public face: units, coefficients, shares, scaling, refusals."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from records import DATA, STACKS
from scipy import stats

from inverse.description.material.properties import Material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.stack import Interface, Layer, Stack, Substrate
from inverse.response.simulate import DEFAULT_HEAT, DEFAULT_STRAIN, simulate

DELAY = np.linspace(-3, 60, 316)
SETUP = PumpProbe(pump=400, probe=800, pulse_rms=0.3)
CHANNELS = ("reflectance_change", "optical_phase")


def metal(**changes):
    fields = {
        "density": 2.7,
        "velocity": 6.42,
        "n": {400: 0.49 + 4.84j, 800: 2.77 + 8.35j},
        "heat_capacity": 2.4,
        "conductivity": 200.0,
        "thermal_stress_coefficient": 5e-3,
        "dn_dstrain": 3.0 - 2.0j,
        "dn_dT": 1e-3 + 4e-4j,
    }
    return Material("film", **{**fields, **changes})


def crystal(**changes):
    fields = {
        "density": 2.33,
        "velocity": 8.43,
        "n": {400: 5.57 + 0.387j, 800: 3.69 + 0.0065j},
        "heat_capacity": 1.66,
        "conductivity": 148.0,
        "thermal_stress_coefficient": 7.6e-4,
        "dn_dstrain": 1.0 + 0.3j,
        "dn_dT": 3e-4 + 1e-5j,
    }
    return Material("base", **{**fields, **changes})


def stacked(film=None, base=None, compliance=0.05, ambient="air", **layer):
    return Stack(
        Layer(film or metal(), **{"thickness": 50.0, **layer}),
        Interface(compliance=compliance, boundary_conductance=100.0),
        Substrate(base or crystal()),
        ambient=ambient,
    )


WATER = Material(
    "water", density=1.0, velocity=1.48, n=1.33, heat_capacity=4.2, conductivity=0.6,
    thermal_stress_coefficient=0.0, dn_dstrain=-0.3, dn_dT=-1e-4,
)  # fmt: skip


def signals(trace):
    return np.stack([trace[c].values for c in CHANNELS])


def relative(found, expected):
    return np.abs(found - expected) / np.abs(expected).max(axis=1, keepdims=True)


def from_record(record):
    """A stack of the public face from a record in coherent units."""
    parts = []
    for row, joint in zip(record["layers"], [*record["interfaces"], None], strict=True):
        g = row["electron_phonon_coupling_GPa_ps_K"]
        material = Material(
            row["material"],
            density=row["density_g_cm3"],
            velocity=row["velocity_nm_ps"],
            n={record["pump_nm"]: complex(*row["n_pump"]), record["probe_nm"]: complex(*row["n_probe"])},
            heat_capacity=row["heat_capacity_GPa_K"] * 1e3,  # 1 GPa/K = 1000 J/cm3/K
            conductivity=row["conductivity_GPa_nm2_ps_K"] * 1e3,  # 1 GPa nm2/ps/K = 1000 W/m/K
            thermal_stress_coefficient=row["thermal_stress_GPa_K"],
            dn_dstrain=complex(*row["dn_dstrain"]),
            dn_dT=complex(*row["dn_dT"]),
            **(
                {
                    "electron_heat_capacity": row["electron_heat_capacity_GPa_K"] * 1e3,
                    "electron_phonon_coupling": g * 1e21,  # 1 GPa/ps/K = 1e21 W/m3/K
                }
                if g
                else {}
            ),
        )
        if joint is None:
            return Stack(*parts, Substrate(material))
        conductance = joint["boundary_conductance_GPa_nm_ps_K"] * 1e6  # 1 GPa nm/ps/K = 1e6 MW/m2/K
        parts.append(Layer(material, thickness=row["thickness_nm"]))
        parts.append(Interface(compliance=joint["compliance_nm_GPa"], boundary_conductance=conductance))


@pytest.mark.parametrize("name", ["al_si_hot", "al_si_weak", "sio2_w_si"])
def test_public_units_reach_the_time_domain_simulator(name):
    record = STACKS[name]
    delay, *expected = np.loadtxt(DATA / f"{name}.csv", delimiter=",", skiprows=1, unpack=True)
    setup = PumpProbe(pump=record["pump_nm"], probe=record["probe_nm"], pulse_rms=record["pulse_rms_ps"])
    error = relative(signals(simulate(from_record(record), setup, delay)), np.stack(expected))
    assert error.max() < 2e-3
    assert error[:, delay > 2].max() < 5e-4


@pytest.mark.parametrize("ambient", ["air", WATER], ids=["air", "water"])
def test_shares_add_up(ambient):
    trace = simulate(stacked(ambient=ambient), SETUP, DELAY, shares=True)
    names = list(trace["part"].values)
    wet = [] if ambient == "air" else ["ambient strain", "ambient heat"]
    solid = ["film strain", "film heat", "base strain", "base heat"]
    assert names == [*wet, *solid, "surface displacement", "film|base displacement"]
    for channel in CHANNELS:
        parts = trace[f"{channel}_share"]
        assert parts.attrs["units"] == trace[channel].attrs["units"]
        peak = np.abs(trace[channel]).max().item()
        np.testing.assert_allclose(parts.sum("part"), trace[channel], rtol=0, atol=1e-12 * peak)


def test_trace_is_linear_in_the_coefficients():
    zero = {"dn_dstrain": 0j, "dn_dT": 0j}
    bare = signals(simulate(stacked(metal(**zero), crystal(**zero)), SETUP, DELAY))
    whole = signals(simulate(stacked(), SETUP, DELAY))
    total = bare.copy()
    for film, base in (
        ({"dn_dstrain": 3.0 - 2.0j, "dn_dT": 0j}, zero),
        ({"dn_dstrain": 0j, "dn_dT": 1e-3 + 4e-4j}, zero),
        (zero, {"dn_dstrain": 1.0 + 0.3j, "dn_dT": 3e-4 + 1e-5j}),
    ):
        total += signals(simulate(stacked(metal(**film), crystal(**base)), SETUP, DELAY)) - bare
    np.testing.assert_array_less(relative(total, whole), 1e-10)
    assert relative(bare, whole).max() > 0.01


def test_coefficients_used_are_told():
    assert (DEFAULT_STRAIN, DEFAULT_HEAT) == (1 + 1j, 1e-4 + 1e-4j)
    told = simulate(stacked(metal(dn_dstrain=None)), SETUP, DELAY).attrs["coefficients"]
    assert "film.dn_dstrain = (1+1j) (default)" in told
    assert "film.dn_dT = (0.001+0.0004j) (given)" in told
    assert "base.dn_dstrain = (1+0.3j) (given)" in told
    wet = simulate(stacked(ambient=WATER), SETUP, DELAY).attrs["coefficients"]
    assert "water.dn_dstrain = (-0.3+0j) (given)" in wet
    default = simulate(stacked(metal(dn_dstrain=None)), SETUP, DELAY)
    given_ = simulate(stacked(metal(dn_dstrain=DEFAULT_STRAIN)), SETUP, DELAY)
    np.testing.assert_array_equal(signals(default), signals(given_))


def test_signal_grows_with_the_fluence():
    strong = PumpProbe(pump=400, probe=800, pulse_rms=0.3, fluence=12.5)
    expected = 12.5 * signals(simulate(stacked(), SETUP, DELAY))
    np.testing.assert_allclose(signals(simulate(stacked(), strong, DELAY)), expected, rtol=1e-12)


def test_bare_crystal_warms_by_the_absorbed_fluence_over_its_heat_capacity():
    # Absolute size: an opaque crystal that hardly conducts warms by F (1 - R) a / C at its surface. With dn/dT
    # alone and an index absorbing far stronger at the probe, dR/R is that of Fresnel's r at n + dn/dT T.
    n_pump, n_probe, q, fluence = 5.0 + 0.05j, 3.0 + 30j, 1e-4 + 2e-4j, 0.8
    base = crystal(
        n={400: n_pump, 800: n_probe},
        conductivity=1e-5,
        dn_dstrain=0j,
        dn_dT=q,
        thermal_stress_coefficient=0.0,
    )
    setup = PumpProbe(pump=400, probe=800, pulse_rms=0.3, fluence=fluence)
    found = signals(simulate(Stack(Substrate(base)), setup, np.array([10.0, 20.0])))
    reflected = abs((1 - n_pump) / (1 + n_pump)) ** 2
    # 1 J/m2 over 1 nm and 1 J/cm3/K is 1000 K
    rise = 1e3 * fluence * (1 - reflected) * 4 * np.pi * n_pump.imag / 400 / 1.66
    relative_change = -2 * q * rise / (1 - n_probe**2)  # d ln r / dn of r = (1 - n) / (1 + n)
    np.testing.assert_allclose(found[0], 2 * relative_change.real, rtol=1e-2)
    np.testing.assert_allclose(found[1], relative_change.imag, rtol=1e-2)


@settings(max_examples=25)
@given(factor=st.floats(0.1, 8.0), compliance=st.floats(0.0, 1.0))
def test_only_density_ratios_matter(factor, compliance):
    # Density, thermal stress and stiffness, all times the same factor, leave the trace as it is
    def heavy(make, density, stress):
        return make(density=density * factor, thermal_stress_coefficient=stress * factor)

    plain = signals(simulate(stacked(compliance=compliance), SETUP, DELAY[::8]))
    scaled = stacked(heavy(metal, 2.7, 5e-3), heavy(crystal, 2.33, 7.6e-4), compliance=compliance / factor)
    np.testing.assert_array_less(relative(signals(simulate(scaled, SETUP, DELAY[::8])), plain), 1e-9)


def test_density_ratio_is_to_the_substrate():
    by_ratio = simulate(stacked(density_ratio=2.7 / 2.33), SETUP, DELAY)
    np.testing.assert_allclose(
        signals(by_ratio), signals(simulate(stacked(), SETUP, DELAY)), rtol=1e-9, atol=0
    )


def test_infinite_coupling_is_one_temperature():
    hot = metal(electron_heat_capacity=0.3, electron_phonon_coupling=np.inf)
    plain = metal(heat_capacity=2.4 + 0.3)
    found, expected = (signals(simulate(stacked(m), SETUP, DELAY)) for m in (hot, plain))
    np.testing.assert_array_less(relative(found, expected), 1e-10)
    slow = metal(electron_heat_capacity=0.3, electron_phonon_coupling=1e17)
    assert relative(signals(simulate(stacked(slow), SETUP, DELAY)), expected).max() > 0.01


def test_quality_factor_and_its_frequency_reach_the_model():
    # Constant Q above f0 raises the modulus by (f / f0)^(2 / pi Q): the lower f0 (THz), the more at 0.1 THz.
    # Below f0 the film has no loss.
    plain = signals(simulate(stacked(), SETUP, DELAY))
    changes = []
    for frequency in (1e-4, 1e-2, 1.0):
        film = metal(quality_factor=200.0, quality_frequency=frequency)
        changes.append(relative(signals(simulate(stacked(film), SETUP, DELAY)), plain).max())
    assert 0.02 < changes[0] < 0.2
    assert changes[2] < 0.1 * changes[1] < 0.1 * changes[0]


def test_distributions_stand_for_their_median_and_values_replace_it():
    stack = stacked(thickness=stats.uniform(40, 20), velocity=stats.norm(6.42, 0.1))
    expected = signals(simulate(stacked(), SETUP, DELAY))
    np.testing.assert_allclose(signals(simulate(stack, SETUP, DELAY)), expected, rtol=1e-12)
    thicker = simulate(stack, SETUP, DELAY, values={"film.thickness": 57.0})
    np.testing.assert_allclose(
        signals(thicker), signals(simulate(stacked(thickness=57.0), SETUP, DELAY)), rtol=1e-12
    )


def test_time_zero_moves_the_trace():
    here = signals(simulate(stacked(), SETUP, DELAY))
    later = signals(simulate(stacked(), SETUP, DELAY + 2.5, time_zero=2.5))
    np.testing.assert_array_less(relative(later, here), 4e-6)


def test_trace_has_units_and_delays():
    trace = simulate(stacked(), SETUP, DELAY)
    np.testing.assert_array_equal(trace["delay"], DELAY)
    assert [trace[c].attrs["units"] for c in CHANNELS] == ["1", "rad"]


@pytest.mark.parametrize(
    ("delay", "message"),
    [
        ([0.0, np.nan, 2.0], "not finite"),
        ([0.0, np.inf], "not finite"),
        ([1.0, 0.0, 2.0], "increasing|sort"),
        ([0.0, 1.0, 1.0], "increasing|repeat"),
    ],
)
def test_delays_that_make_no_trace_are_refused(delay, message):
    with pytest.raises(ValueError, match=message):
        simulate(stacked(), SETUP, delay)


def test_values_that_name_no_unknown_are_refused():
    stack = stacked(thickness=stats.uniform(40, 20))
    with pytest.raises(ValueError, match=r"film\.thicknes; the stack's unknowns are film\.thickness"):
        simulate(stack, SETUP, DELAY, values={"film.thicknes": 50.0})


def test_missing_constant_is_named():
    with pytest.raises(ValueError, match=r"film has no conductivity \(W/m/K\)"):
        simulate(stacked(metal(conductivity=None)), SETUP, DELAY)
