"""Arrivals by rays, against hand-made echo series and the exact recursion."""

import numpy as np
import pytest

import inverse as inv
from inverse.response.rays import arrivals
from inverse.response.recursion import ascend

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
FIELDS = {"n": 2.0 + 2.0j, "heat_capacity": 2.0, "conductivity": 20.0, "thermal_stress_coefficient": 2e-3}


def solid(name, density, velocity, **more):
    return inv.Material(name, density=density, velocity=velocity, **FIELDS, **more)


SOFT, HARD, BASE = solid("soft", 2.7, 6.0), solid("hard", 19.0, 5.0), solid("base", 2.33, 8.4)


def test_one_layer_rings_down_by_its_own_reflection():
    found = arrivals(
        inv.Stack(inv.Layer(SOFT, thickness=60.0), inv.Substrate(HARD)), SETUP, 90.0, smallest=1e-6
    )
    r = (2.7 * 6 - 19 * 5) / (2.7 * 6 + 19 * 5)
    assert [a.time for a in found] == pytest.approx([20.0, 40.0, 60.0, 80.0])
    assert [a.amplitude for a in found] == pytest.approx([r, r**2, r**3, r**4])
    assert [a.label for a in found] == ["soft", "2 soft", "3 soft", "4 soft"]
    assert found[1].times == pytest.approx((0, 10, 20, 30, 40)) and found[1].depths == (0, 60, 0, 60, 0)


def test_a_membrane_keeps_all_and_a_liquid_takes_its_share():
    free = inv.Stack(inv.Layer(SOFT, thickness=60.0), inv.Substrate("vacuum"))
    assert [a.amplitude for a in arrivals(free, SETUP, 50.0, source=0)] == pytest.approx([1.0, 1.0])
    water = inv.Material("water", density=1.0, velocity=1.5, **FIELDS)
    wet = inv.Stack(inv.Layer(SOFT, thickness=60.0), inv.Substrate(HARD), ambient=water)
    one, two = (a.amplitude for a in arrivals(wet, SETUP, 50.0))
    assert two / one**2 == pytest.approx((16.2 - 1.5) / (16.2 + 1.5))


def stacked(compliance=0.0, **loss):
    lower = solid("hard", 19.0, 5.0, **loss)
    return inv.Stack(
        inv.Layer(SOFT, thickness=31.0),
        inv.Interface(compliance=compliance, boundary_conductance=100.0),
        inv.Layer(lower, thickness=23.0),
        inv.Layer(SOFT, thickness=17.0),
        inv.Substrate(BASE),
    )


@pytest.mark.parametrize("compliance", [0.0, 0.08])
def test_all_rays_together_are_the_recursion(compliance):
    # gamma = B E / A below the surface; a free surface adds gamma + gamma^2 + ...; rays weigh exp(-s t)
    s, frequency = 0.15 + 2j * np.pi * 0.05, 0.05
    found = arrivals(stacked(compliance), SETUP, 250.0, smallest=1e-9, frequency=frequency)
    z = np.array([2.7 * 6, 19 * 5, 2.7 * 6, 2.33 * 8.4])
    time = np.array([31 / 6, 23 / 5, 17 / 6])
    # The spring's s is that of the rays, i w: take it into the compliance
    spring = compliance * (2j * np.pi * frequency) / s
    below = ascend(
        [np.array([[s * zj]]) for zj in z],
        [np.exp(-s * t).reshape(1, 1) for t in time],
        [np.array([[c]]) for c in (spring, 0.0, 0.0)],
    )
    gamma = below.gamma[0].item()
    total = sum(a.amplitude * np.exp(-s * a.time) for a in found)
    assert total == pytest.approx(gamma / (1 - gamma), abs=1e-7)


def test_loss_weakens_each_crossing():
    # Kelvin-Voigt, small: alpha = w^2 tau / 2 v, times the time w^2 tau / 2; 23 nm at 5 nm/ps twice
    lossy = arrivals(stacked(attenuation_time=0.01), SETUP, 30.0)
    plain = arrivals(stacked(), SETUP, 30.0)
    pairs = [(a, b) for a, b in zip(lossy, plain, strict=True) if a.round_trips == {"soft": 1, "hard": 1}]
    ((a, b),) = pairs
    assert abs(a.amplitude / b.amplitude) == pytest.approx(
        np.exp(-((2 * np.pi * 0.05) ** 2) * 0.005 * 9.2), rel=1e-4
    )
    assert [x.amplitude for x in lossy if x.label == "soft"] == [
        x.amplitude for x in plain if x.label == "soft"
    ]


def test_periods_are_added_up_by_name():
    period = inv.Layer(SOFT, thickness=6.0), inv.Layer(HARD, thickness=5.0)
    found = arrivals(inv.Stack(inv.Repeat(3, *period), inv.Substrate(BASE)), SETUP, 13.0, smallest=1e-6)
    deepest = found[-1]
    assert deepest.time == pytest.approx(12.0)
    labels = {a.label for a in found if a.time == pytest.approx(12.0)}
    assert "3 soft + 3 hard" in labels


def test_sound_starts_where_the_pump_is_absorbed():
    # Under a transparent layer: up once, 50 nm at 5 nm/ps, and down to the substrate and back
    clear = inv.Material("clear", density=2.2, velocity=5.0, **{**FIELDS, "n": 1.5})
    stack = inv.Stack(inv.Layer(clear, thickness=50.0), inv.Layer(SOFT, thickness=30.0), inv.Substrate(HARD))
    found = arrivals(stack, SETUP, 31.0, smallest=1e-3)
    z1, z2, z3 = 11.0, 16.2, 95.0
    assert [a.time for a in found] == pytest.approx([10.0, 20.0, 30.0, 30.0])
    assert [a.label for a in found] == ["½ clear", "½ clear + soft", "½ clear + 2 soft", "1½ clear"]
    up, through = 2 * z2 / (z1 + z2), (z2 - z3) / (z2 + z3)
    assert found[0].amplitude == 1.0
    assert found[1].amplitude == pytest.approx(through * up)
    assert found[3].amplitude == pytest.approx((z1 - z2) / (z1 + z2))
    assert found[0].depths == (50.0, 0.0)
    assert arrivals(stack, SETUP, 31.0, source=0)[0].label == "clear"


def test_a_bare_substrate_sends_nothing_back():
    assert arrivals(inv.Stack(inv.Substrate(BASE)), SETUP, 100.0) == ()
