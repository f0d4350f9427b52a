"""A trace that cannot hold what is asked of it is refused by name."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)


def stack(thickness):
    return inv.Stack(
        inv.Layer("Al", thickness=thickness),
        inv.Interface(compliance=0.02, boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )


def trace(thickness, last):
    delay = np.concatenate([np.arange(-5, 5, 0.1), np.arange(5, last, 0.25)])
    clean = inv.simulate(stack(thickness), SETUP, delay)["reflectance_change"].values
    noise = 1e-3 * np.abs(clean).max() * np.random.default_rng(8).standard_normal(delay.size)
    return inv.make_trace(delay, reflectance_change=clean + noise)


def test_a_film_thinner_than_its_echo_is_refused():
    """2 d / v = 0.5 ps at 1.6 nm and 6.42 nm/ps, under twice the pulse's 0.3 ps."""
    with pytest.raises(
        ValueError, match=r"Al is thinner than its echo.*at most 0\.5 ps.*Give its thickness as a number"
    ):
        inv.Inversion(stack(stats.uniform(1.0, 0.6)), SETUP, trace(1.5, 60))


def test_a_trace_too_short_for_one_echo_is_refused():
    """The echo of 290 nm of aluminium returns after 90 ps."""
    with pytest.raises(
        ValueError, match=r"too short to hold one echo: it ends .* takes at least 9\d\.?\d* ps"
    ):
        inv.Inversion(stack(stats.uniform(295, 30)), SETUP, trace(300, 60))


def test_a_known_thickness_is_not_refused():
    inversion = inv.Inversion(stack(300.0), SETUP, trace(300, 60))
    assert "Al.thickness" not in inversion.names
