"""Interfaces with mass and roughness: limits, the time-domain solver, and the mean over thicknesses."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

import inverse as inv

from . import face
from .samples import Experiment, Joint, Sample
from .time_domain import simulate
from .transfer_matrices import Beam

DELAY = np.arange(-1.5, 40, 0.1)
EXPERIMENT = Experiment(Beam(400.0), Beam(800.0), 0.3)
SETUP = face.setup(EXPERIMENT)


def trace(stack, setup=SETUP, delay=DELAY):
    return inv.simulate(stack, setup, delay)


@pytest.mark.parametrize("compliance", [0.0, 0.05])
def test_mass_at_interfaces(al, si, compliance):
    # 2 mg/m2 under a metal of 2.7 g/cm3: as much as 0.7 nm of it; light passes it by
    sample = Sample(
        (replace(al, thickness=41.0), replace(al, thickness=9.0, density=5.0), si),
        (Joint(compliance=compliance, areal_mass=2.0), Joint(compliance=0.01, areal_mass=6.0)),
    )
    found = trace(face.stack(sample, joints={0: {"areal_mass": 2.0}, 1: {"areal_mass": 6.0}}))
    plain = trace(face.stack(sample))
    solved = simulate(sample, EXPERIMENT, DELAY, 0.01)
    for name, expected in (
        ("reflectance_change", solved.reflectance_change),
        ("optical_phase", solved.phase),
    ):
        scale = np.abs(expected).max()
        assert np.abs(found[name] - expected).max() < 2e-4 * scale
        assert np.abs(found[name] - expected)[DELAY > 2].max() < 6e-5 * scale
        assert np.abs(plain[name] - expected)[DELAY > 2].max() > 1e-3 * scale


def film(base, thickness=80.0, **bond):
    # opaque and insulating, so that a trace knows its thickness by echoes only
    metal = inv.Material(
        "metal",
        density=5.0,
        velocity=5.0,
        n=3.0 + 30.0j,
        heat_capacity=2.5,
        conductivity=1e-3,
        thermal_stress_coefficient=5e-3,
        dn_dstrain=1.0 + 1.0j,
    )
    interface = inv.Interface(boundary_conductance=100.0, **bond)
    return inv.Stack(inv.Layer(metal, thickness=thickness), interface, base)


BASE = inv.Substrate("Si", orientation="100")
SHARP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.15)


def test_a_rough_interface_is_the_mean_over_its_heights_in_the_first_echo():
    # One reflection: normal heights of rms h shift it by 2 dz / v, and their mean is what exp(2 q^2 h^2) says.
    # The mean by Gauss-Hermite nodes over films of other thickness; the second echo differs, by design.
    delay, h = np.arange(20.0, 44.0, 0.05), 0.8
    rough = trace(film(BASE, roughness=h), SHARP, delay).reflectance_change.values
    smooth = trace(film(BASE), SHARP, delay).reflectance_change.values
    nodes, weights = np.polynomial.hermite_e.hermegauss(40)
    each = [trace(film(BASE, 80.0 + h * x), SHARP, delay).reflectance_change.values for x in nodes]
    mean = weights @ np.array(each) / weights.sum()
    echo = np.abs(smooth - np.median(smooth)).max()
    assert np.abs(rough - mean).max() < 1e-6 * echo
    assert np.abs(smooth - mean).max() > 0.1 * echo


def test_a_rough_interface_spreads_what_it_passes():
    # A height dz shifts what passes by dz (1/v - 1/v'). The echo of a smooth interface further down passes the rough
    # one twice, at heights that know nothing of each other: exp((q - q')^2 h^2), as one height of rms h / sqrt(2) does
    delay, h = np.arange(50.0, 80.0, 0.05), 4.0
    fields = {"heat_capacity": 2.5, "conductivity": 1e-3, "thermal_stress_coefficient": 0.0, "n": 3.0 + 30.0j}
    lower = inv.Material("lower", density=3.0, velocity=8.0, **fields)
    heavy = inv.Substrate(inv.Material("heavy", density=19.0, velocity=5.0, **fields))

    def stack(up=0.0, **bond):
        base = film(heavy, 100.0 + up).parts[0]
        return inv.Stack(
            base,
            inv.Interface(boundary_conductance=1.0, **bond),
            inv.Layer(lower, thickness=90.0 - up),
            heavy,
        )

    rough, smooth = (trace(stack(roughness=r), SHARP, delay).reflectance_change.values for r in (h, 0.0))
    nodes, weights = np.polynomial.hermite_e.hermegauss(24)
    each = [trace(stack(h * x / np.sqrt(2)), SHARP, delay).reflectance_change.values for x in nodes]
    mean = weights @ np.array(each) / weights.sum()
    inside = (delay > 58.0) & (delay < 68.0)  # 2 (100 / 5 + 90 / 8) = 62.5 ps
    echo = np.ptp(smooth[inside])
    # impedances of the two media differ little, so what the rough interface itself reflects is weak there
    assert np.abs((rough - mean)[inside] - (rough - mean)[inside].mean()).max() < 0.03 * echo
    assert np.abs((smooth - mean)[inside]).max() > 0.1 * echo


def test_a_rough_interface_spreads_what_comes_up_from_below_it():
    # A stressed slab below sends two steps up; each passes the rough interface once, where a height dz shifts it by
    # dz (1/v - 1/v'). The mean over stacks whose interface lies dz deeper, the slab where it was.
    delay, h = np.arange(18.0, 45.0, 0.05), 4.0
    fields = {"heat_capacity": 2.5, "conductivity": 1e-3, "thermal_stress_coefficient": 0.0, "n": 3.0 + 30.0j}
    upper = inv.Material("upper", density=5.0, velocity=5.0, dn_dstrain=1.0 + 1.0j, **fields)
    lower = inv.Material("lower", density=3.0, velocity=8.0, dn_dT=0j, **fields)

    def signal(up=0.0, **bond):
        stack = inv.Stack(
            inv.Layer(upper, thickness=100.0 + up, dn_dT=0j),
            inv.Interface(boundary_conductance=1.0, **bond),
            inv.Layer(lower, thickness=40.0 - up),
            inv.Layer(lower, thickness=30.0, initial_stress=1.0),
            inv.Substrate(lower),
        )
        return trace(stack, SHARP, delay).reflectance_change.values

    nodes, weights = np.polynomial.hermite_e.hermegauss(24)
    mean = weights @ np.array([signal(h * x) for x in nodes]) / weights.sum()
    rough, smooth = signal(roughness=h), signal()
    # what passes at a given height passes with a phase of its own alone: the two agree to the wrap of the transform
    assert np.abs(rough - mean).max() < 1e-3 * np.ptp(smooth)
    assert np.abs(smooth - mean).max() > 0.1 * np.ptp(smooth)


@pytest.mark.parametrize("compliance", [np.inf, 0.0])
def test_a_rough_surface_is_a_rough_interface_with_what_lies_above(compliance):
    # Under a layer of index 1, which light does not see: across an open gap, or of a liquid too thick to echo. The
    # interface's own factor is the mean over heights above; here the same number must come from the surface's.
    delay, h = np.arange(0.0, 110.0, 0.1), 1.2
    liquid = {"density": 1.0, "velocity": 1.5, "heat_capacity": 4.0, "conductivity": 0.6, "n": 1.0}
    above = inv.Material("above", **liquid, thermal_stress_coefficient=0.0, dn_dstrain=0j, dn_dT=0j)
    is_open = compliance == np.inf
    bond = {"compliance": compliance, "boundary_conductance": 0.0 if is_open else np.inf}

    metal, bottom, base = film(BASE, 50.0).parts
    deep = inv.Layer(metal.material, thickness=30.0, initial_stress=0.2)  # sound that comes up from within

    def strain(roughness, ambient="air", *top):
        surface = 0.0 if top else roughness
        stack = inv.Stack(*top, metal, deep, bottom, base, ambient=ambient, surface_roughness=surface)
        shares = inv.simulate(stack, SHARP, delay, shares=True).reflectance_change_share
        return shares.sel(part="metal strain").values

    covered = strain(h, "air", inv.Layer(above, thickness=2000.0), inv.Interface(roughness=h, **bond))
    rough, smooth = (strain(r, "air" if is_open else above) for r in (h, 0.0))
    echo = np.abs(smooth[delay > 20]).max()
    assert np.abs(rough - covered).max() < 1e-6 * echo
    assert np.abs(rough - smooth).max() > 1e-2 * echo


def test_a_vanishing_roughness_of_the_surface_is_a_smooth_one():
    parts = film(BASE).parts
    plain, small = trace(inv.Stack(*parts)), trace(inv.Stack(*parts, surface_roughness=1e-6))
    for name in ("reflectance_change", "optical_phase"):
        scale = np.abs(plain[name]).max()
        np.testing.assert_allclose(small[name] / scale, plain[name] / scale, atol=1e-10)


def test_the_roughness_of_a_surface_is_found_by_its_name():
    delay = np.arange(-3.0, 80.0, 0.2)
    parts = film(BASE).parts
    rough = trace(inv.Stack(*parts, surface_roughness=1.5), SETUP, delay).reflectance_change
    noise = 2e-4 * float(np.abs(rough).max()) * np.random.default_rng(1).standard_normal(delay.size)
    measured = inv.make_trace(delay, reflectance_change=rough.values + noise)
    sought = inv.Stack(*parts, surface_roughness=stats.uniform(0.0, 4.0))
    fit = inv.Inversion(sought, SETUP, measured, time_zero=0.0, noise="white").least_squares(seed=1, starts=3)
    assert fit.names[0] == "surface.roughness"
    assert fit.values[0] == pytest.approx(1.5, abs=4 * fit.sd[0])
    assert fit.sd[0] < 0.3


@pytest.mark.parametrize("field", ["roughness", "areal_mass"])
def test_a_vanishing_flaw_is_the_plain_interface(field):
    bond = {"compliance": 0.03}
    plain = trace(film(BASE, **bond))
    small = trace(film(BASE, **bond, **{field: 1e-6 if field == "roughness" else 1e-12}))
    for name in ("reflectance_change", "optical_phase"):
        scale = np.abs(plain[name]).max()
        np.testing.assert_allclose(small[name] / scale, plain[name] / scale, atol=1e-10)


def test_an_open_gap_with_mass_rings_like_a_loaded_membrane(al, si):
    sample = Sample(
        (replace(al, thickness=30.0), si), (Joint(compliance=1e8, areal_mass=10.0, conductance=1e-9),)
    )
    found = trace(face.stack(sample, joints={0: {"areal_mass": 10.0}}))
    solved = simulate(sample, EXPERIMENT, DELAY, 0.01)
    scale = np.abs(solved.reflectance_change).max()
    assert np.abs(found.reflectance_change - solved.reflectance_change).max() < 2e-4 * scale


def test_what_is_not_modelled_is_refused():
    with pytest.raises(ValueError, match=r"Interface\.areal_mass = -1 is outside"):
        inv.Interface(boundary_conductance=1.0, areal_mass=-1.0)
    with pytest.raises(ValueError, match=r"surface\.roughness = -1 is outside"):
        inv.Stack(*film(BASE).parts, surface_roughness=-1.0)
