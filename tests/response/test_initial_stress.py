"""A stress of the user's own: d'Alembert's solution, statics, and profiles in slices."""

import numpy as np
import pytest
from scipy.special import erf

import inverse as inv
from inverse.response.strain_map import strain_map

FIELDS = {
    "n": 1.5,
    "density": 4.0,
    "velocity": 5.0,
    "heat_capacity": 2.0,
    "conductivity": 20.0,
    "thermal_stress_coefficient": 2e-3,
    "dn_dstrain": -0.5 + 0.0j,
}
CLEAR = inv.Material("clear", **FIELDS)
SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3, fluence=3.0)


def buried(**stress):
    return inv.Stack(
        inv.Layer(CLEAR, thickness=200.0), inv.Layer(CLEAR, thickness=60.0, **stress), inv.Substrate(CLEAR)
    )


def box(z, velocity_time, width):
    """Box from 200 to 260 nm, shifted, its edges smeared by the pulse: sigma = v x rms."""
    z = z - velocity_time
    return (erf((z - 200) / (np.sqrt(2) * width)) - erf((z - 260) / (np.sqrt(2) * width))) / 2


def test_a_stressed_slab_sends_half_its_strain_each_way():
    # No light is absorbed, so nothing else launches: strain = (S / c) [box at rest - half going up - half going down]
    depth, time = np.linspace(120.0, 340.0, 221) + 0.013, 8.0
    found = strain_map(buried(initial_stress=0.02), SETUP, [time], depth).strain.values[:, 0]
    still = ((depth > 200) & (depth < 260)).astype(float)
    v = 5.0 * time
    expected = 3.0 * 0.02 / (4.0 * 25.0) * (still - box(depth, v, 1.5) / 2 - box(depth, -v, 1.5) / 2)
    np.testing.assert_allclose(found, expected, atol=2e-4 * np.abs(expected).max())


def test_at_rest_it_bears_no_stress():
    found = strain_map(buried(initial_stress=0.02), SETUP, [120.0], [230.0, 100.0])
    assert found.strain[0, 0] == pytest.approx(3.0 * 0.02 / 100.0, rel=1e-4)
    assert np.abs(found.elastic_strain).max() < 1e-4 * found.strain[0, 0]


def test_a_stress_of_short_life_leaves_nothing_behind():
    found = strain_map(buried(initial_stress=0.02, initial_stress_lifetime=5.0), SETUP, [300.0], [230.0])
    assert abs(found.strain[0, 0]) < 1e-4 * 3.0 * 0.02 / 100.0


def test_a_stress_that_dies_is_a_sum_of_steps():
    # A step less the steps that end it: h_tau = h - (1 / tau) integral of exp(-t' / tau) h(t - t') dt'
    delay = np.arange(-4.0, 70.0, 0.02)
    lasting = inv.simulate(buried(initial_stress=0.02), SETUP, delay).reflectance_change.values
    found = inv.simulate(buried(initial_stress=0.02, initial_stress_lifetime=5.0), SETUP, delay)
    kept = np.exp(-np.arange(0.0, 74.0, 0.02) / 5.0)
    kept[0] /= 2  # trapezoids
    ended = np.convolve(lasting, kept)[: delay.size] * 0.02 / 5.0
    np.testing.assert_allclose(found.reflectance_change, lasting - ended, atol=2e-5 * np.abs(lasting).max())


def test_slices_of_equal_stress_are_one_layer():
    delay = np.arange(-2.0, 80.0, 0.2)
    whole = inv.simulate(buried(initial_stress=0.02), SETUP, delay).reflectance_change
    slices = inv.stressed(CLEAR, 60.0, [0.02] * 6)
    cut = inv.simulate(
        inv.Stack(inv.Layer(CLEAR, thickness=200.0), *slices, inv.Substrate(CLEAR)), SETUP, delay
    )
    assert [part.thickness for part in slices] == [10.0] * 6
    np.testing.assert_allclose(cut.reflectance_change, whole, atol=1e-10 * np.abs(whole).max().item())


def test_no_stress_is_no_trace_and_stress_scales_it():
    delay = np.arange(-2.0, 80.0, 0.2)
    none, one, two = (
        inv.simulate(buried(initial_stress=s), SETUP, delay).reflectance_change.values
        for s in (0.0, 0.01, -0.02)
    )
    assert np.abs(none).max() < 1e-12 * np.abs(one).max()
    np.testing.assert_allclose(two, -2 * one, atol=1e-12 * np.abs(one).max())


def test_an_unknown_stress_goes_by_its_place():
    from scipy import stats

    from inverse.description.sample.places import bind

    stack = inv.Stack(
        inv.Layer(CLEAR, thickness=60.0, initial_stress=stats.norm(0, 0.1)), inv.Substrate(CLEAR)
    )
    assert list(bind(stack, SETUP).priors) == ["clear.initial_stress"]
