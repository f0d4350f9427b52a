"""Elastic constants from traces: films of one crystal on several cuts, fitted together."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.25)
# Copper, CRC constants, GPa.
TRUTH = {"c11": 168.3, "c12": 121.2, "c44": 75.7}


def problem(cuts: dict, constants: dict, seed: int) -> inv.Inversion:
    """One trace per cut, 0.1 % white noise, the film's thickness known to 0.1 nm; constants shared."""
    rng = np.random.default_rng(seed)
    parts = []
    for thickness, orientation in cuts.items():
        delay = np.arange(-4.0, 1.4 * thickness, 0.15)
        stack = inv.Stack(
            inv.Layer(
                "Cu",
                thickness=inv.Unknown(f"d{thickness}", stats.norm(thickness, 0.1)),
                orientation=orientation,
                stiffness={"symmetry": "cubic", **constants},
            ),
            inv.Interface(compliance=0.05, boundary_conductance=100.0),
            inv.Substrate("Si", orientation="100"),
        )
        values = {"c11": 168.3, "c12": 121.2, "c44": 75.7, f"d{thickness}": float(thickness)}
        trace = inv.simulate(stack, SETUP, delay, values=values)[["reflectance_change"]]
        size = 1e-3 * float(np.abs(trace["reflectance_change"]).max())
        trace["reflectance_change"] += rng.normal(0.0, size, delay.size)
        parts.append(inv.Inversion(stack, SETUP, trace, time_zero=0.0, noise="white"))
    return inv.Inversion.joint(parts)


def shared() -> dict:
    widths = {"c11": 15.0, "c12": 15.0, "c44": 8.0}
    return {name: inv.Unknown(name, stats.norm(value + 5.0, widths[name])) for name, value in TRUTH.items()}


@pytest.mark.slow
def test_longitudinal_cuts_give_c11_and_the_combination_that_they_reach() -> None:
    fit = problem({70: "100", 80: "110", 75: "111"}, shared(), 3).least_squares(seed=3, starts=3)
    places = [fit.names.index(name) for name in TRUTH]
    c11, c12, c44 = fit.values[places]
    assert abs(c11 - 168.3) < 3 * fit.sd[places[0]]
    # c12 + 2 c44 is known far better than either: the data fix it, priors and stability the rest.
    direction = np.array([0.0, 1.0, 2.0])
    spread = np.sqrt(direction @ fit.best.covariance[np.ix_(places, places)] @ direction)
    assert abs(c12 + 2 * c44 - (121.2 + 2 * 75.7)) < 3 * spread
    assert spread < 0.2 * fit.sd[places[1]]


@pytest.mark.slow
def test_an_oblique_cut_adds_what_the_longitudinal_ones_leave_open() -> None:
    tilted = [0.0, np.sin(np.deg2rad(25)), np.cos(np.deg2rad(25))]
    fit = problem({70: "100", 60: tilted}, shared(), 4).least_squares(seed=4, starts=3)
    for name, value in TRUTH.items():
        i = fit.names.index(name)
        assert abs(fit.values[i] - value) < 3 * fit.sd[i]
    # The quasi-shear echo tells c12 and c44 apart.
    assert fit.sd[fit.names.index("c12")] < 5.0
    assert fit.sd[fit.names.index("c44")] < 2.5
