"""Beam deflection: the slope of the phase across the spot, alone and beside the reflectance."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv

DELAY = np.arange(-4.0, 45.0, 0.2)
SPOTS = {"spot_radius": 9.0, "probe_spot_radius": 4.0, "probe_offset": 5.0}
SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3, **SPOTS)


def stack(thickness):
    return inv.Stack(
        inv.Layer("Al", thickness=thickness),
        inv.Interface(compliance=0.03, boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )


def test_the_angle_is_the_mean_slope_of_the_phase_under_the_probe():
    # Numbers on a grid: a Gaussian pump's phase, its slope, and the means of both under a Gaussian probe, in um
    x = np.linspace(-60, 60, 24001)
    phase = np.exp(-2 * x**2 / 9.0**2)
    probe = np.exp(-2 * (x - 5.0) ** 2 / 4.0**2)
    slope = (np.gradient(phase, x) * probe).sum() / probe.sum()
    seen = (phase * probe).sum() / probe.sum()
    away = -0.8 / (2 * np.pi) * slope / seen
    assert SETUP.deflection == pytest.approx(away, rel=1e-6)
    assert SETUP.deflection > 0


def test_a_deflection_is_the_phase_times_that_angle():
    trace = inv.simulate(stack(40.0), SETUP, DELAY, channels=("optical_phase", "beam_deflection"))
    np.testing.assert_allclose(trace.beam_deflection, SETUP.deflection * trace.optical_phase, rtol=1e-12)
    assert trace.beam_deflection.attrs["units"] == "rad"


def measured(channels, level=2e-3):
    trace = inv.simulate(stack(40.0), SETUP, DELAY, channels=channels)
    rng = np.random.default_rng(1)
    for name in channels:
        size = level * np.ptp(trace[name].values)
        trace[name] = trace[name].copy(data=trace[name].values + size * rng.standard_normal(DELAY.size))
    return trace


@pytest.mark.parametrize("channels", [("beam_deflection",), ("reflectance_change", "beam_deflection")])
def test_a_fit_of_the_deflection_finds_the_film(channels):
    found = inv.Inversion(
        stack(stats.norm(40, 3)), SETUP, measured(channels), time_zero=0.0, noise="white"
    ).least_squares(seed=1, starts=3)
    assert found.values[0] == pytest.approx(40.0, abs=4 * found.sd[0])
    assert found.sd[0] < 0.5
    assert inv.check_model(found).describes


def test_reflectance_and_deflection_share_their_coefficients():
    # A deflection taken at half the offset it was made at has half the phase that the reflectance's coefficients give
    trace = measured(("reflectance_change", "beam_deflection"), level=1e-3)
    wrong = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3, **{**SPOTS, "probe_offset": 2.5})
    right, off = (
        inv.Inversion(stack(stats.norm(40, 3)), s, trace, time_zero=0.0, noise="white").least_squares(
            seed=1, starts=2
        )
        for s in (SETUP, wrong)
    )
    assert right.best.log_posterior > off.best.log_posterior + 20


def test_a_deflection_without_its_spots_is_refused():
    plain = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
    with pytest.raises(ValueError, match="beam_deflection needs the spot_radius and the probe_offset"):
        inv.simulate(stack(40.0), plain, DELAY, channels=("beam_deflection",))


def test_a_file_may_hold_a_deflection(tmp_path):
    path = tmp_path / "deflection.csv"
    trace = measured(("beam_deflection",))
    rows = "\n".join(
        f"{t:.3f},{1e6 * v:.9e}" for t, v in zip(DELAY, trace.beam_deflection.values, strict=True)
    )
    path.write_text(f"delay (ps),beam deflection (urad)\n{rows}\n", encoding="utf-8")
    np.testing.assert_allclose(inv.read_trace(path).beam_deflection, trace.beam_deflection, rtol=1e-6)
