"""Layers of uneven thickness: the mean of their traces."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv

DELAY = np.arange(-2.0, 60.0, 0.1)
SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)


def stack(thickness=60.0, spread=0.0):
    return inv.Stack(
        inv.Layer("Al", thickness=thickness, thickness_spread=spread),
        inv.Interface(compliance=0.05, boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )


def trace(thickness=60.0, spread=0.0, **more):
    return inv.simulate(stack(thickness, spread), SETUP, DELAY, **more)


def test_an_uneven_film_is_the_mean_of_even_ones():
    # by brute force: 81 films between -5 and 5 standard deviations; the third echo is shifted by 0.56 ps
    x = np.linspace(-5, 5, 81)
    weights = np.exp(-(x**2) / 2)
    traces = np.array([trace(60.0 + 0.6 * step).reflectance_change.values for step in x])
    mean = weights @ traces / weights.sum()
    found, even = trace(spread=0.6).reflectance_change.values, trace().reflectance_change.values
    scale = np.abs(mean).max()
    assert np.abs(found - mean).max() < 1e-4 * scale
    assert np.abs(even - mean).max() > 2e-3 * scale


def test_no_spread_is_the_even_film():
    np.testing.assert_array_equal(trace(spread=0.0).reflectance_change, trace().reflectance_change)
    small = trace(spread=1e-5).reflectance_change.values
    np.testing.assert_allclose(small, trace().reflectance_change, atol=1e-10 * np.abs(small).max())


def test_shares_are_averaged_too():
    found = trace(spread=0.7, shares=True)
    np.testing.assert_allclose(
        found.reflectance_change_share.sum("part"), found.reflectance_change, atol=1e-18
    )


def test_a_fit_finds_the_spread():
    measured = trace(spread=0.7)[["reflectance_change"]]
    level = 1e-3 * float(np.ptp(measured.reflectance_change.values))
    noise = level * np.random.default_rng(2).standard_normal(DELAY.size)
    measured["reflectance_change"] = measured.reflectance_change + noise
    measured.reflectance_change.attrs["units"] = "1"
    problem = inv.Inversion(
        stack(stats.norm(60, 1), stats.halfnorm(scale=1.0)), SETUP, measured, time_zero=0.0, noise="white"
    )
    fit = problem.least_squares(seed=1, starts=3)
    at = fit.names.index("Al.thickness_spread")
    assert fit.values[at] == pytest.approx(0.7, abs=4 * fit.sd[at])
    assert fit.sd[at] < 0.1


def test_periods_vary_together_and_other_layers_not_at_all():
    period = inv.Layer("Al", thickness=10.0, thickness_spread=0.1), inv.Layer("W", thickness=5.0)
    base = inv.Substrate("Si", orientation="100")
    x, w = np.polynomial.hermite_e.hermegauss(13)
    each = [
        inv.simulate(
            inv.Stack(inv.Repeat(2, inv.Layer("Al", thickness=10.0 + 0.1 * d), period[1]), base), SETUP, DELAY
        ).reflectance_change.values
        for d in x
    ]
    found = inv.simulate(inv.Stack(inv.Repeat(2, *period), base), SETUP, DELAY).reflectance_change
    np.testing.assert_allclose(found, w @ np.array(each) / w.sum(), atol=1e-12 * np.abs(found).max().item())


def test_two_uneven_layers_are_refused():
    both = (inv.Layer(name, thickness=9.0, thickness_spread=0.5) for name in ("Al", "W"))
    with pytest.raises(
        ValueError, match=r"Al\.thickness_spread, W\.thickness_spread: one layer of a stack may have"
    ):
        inv.simulate(inv.Stack(*both, inv.Substrate("Si", orientation="100")), SETUP, DELAY)
