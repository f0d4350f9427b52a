"""What the bench adds, in a fit: a stage's scale, a drifting overlap, a lock-in's channel, a spot too small."""

import warnings

import numpy as np
import pytest
from scipy import stats

import inverse as inv
from inverse.description.limits import PlaneWaveWarning

DELAY = np.arange(-8.0, 70.0, 0.2)
BASIC = {"pump": 400, "probe": 800, "pulse_rms": 0.3}


def stack(**film):
    return inv.Stack(
        inv.Layer("Al", **{"thickness": 60.0, **film}),
        inv.Interface(compliance=0.03, boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )


def measured(setup, level=1e-4, seed=3):
    trace = inv.simulate(stack(), setup, DELAY)
    rng = np.random.default_rng(seed)
    for name in ("reflectance_change",):
        values = trace[name].values
        trace[name] = trace[name].copy(
            data=values + level * np.abs(values).max() * rng.standard_normal(values.size)
        )
    return trace[["reflectance_change"]]


def problem(setup, trace, **film):
    return inv.Inversion(stack(**film), setup, trace, time_zero=0.0, noise="white")


def test_a_known_scale_and_drift_predict_the_trace_they_made():
    setup = inv.PumpProbe(**BASIC, stage_scale=4e-3, overlap_drift=2.0)
    trace = measured(setup, level=0.0)
    plain = inv.simulate(stack(), inv.PumpProbe(**BASIC), DELAY)
    scale = np.abs(trace.reflectance_change).max()
    assert np.abs(trace.reflectance_change - plain.reflectance_change).max() > 1e-2 * scale
    found = problem(setup, trace + 1e-12, thickness=stats.norm(60, 1))
    values = [[60.0, 1e-6 * float(scale)]]
    predicted = found.predict(values).reflectance_change[0]
    late = DELAY > 3
    np.testing.assert_allclose(predicted[late] / scale, trace.reflectance_change[late] / scale, atol=2e-5)


def test_the_scale_of_the_stage_goes_into_the_thickness():
    # A thickness from a time can be no better than the stage: 2 per mille of 60 nm are 0.12 nm. (At a tenth of this
    # noise the known flow of heat tells the stage's scale by itself.)
    sure, unsure = (
        problem(
            inv.PumpProbe(**BASIC, stage_scale=scale),
            measured(inv.PumpProbe(**BASIC), level=5e-3),
            thickness=stats.norm(60, 1),
        ).least_squares(seed=1, starts=4)
        for scale in (0.0, stats.norm(0, 2e-3))
    )
    narrow, wide = (dict(zip(f.names, f.sd, strict=True))["Al.thickness"] for f in (sure, unsure))
    assert list(unsure.names[:2]) == ["Al.thickness", "stage_scale"]
    assert narrow < 0.05
    assert wide == pytest.approx(np.hypot(narrow, 0.12), rel=0.1)


def test_a_drift_is_found_where_a_late_echo_shows_it():
    trace = measured(inv.PumpProbe(**BASIC, overlap_drift=1.5), level=2e-5)
    found = problem(inv.PumpProbe(**BASIC, overlap_drift=stats.norm(0, 3)), trace).least_squares(
        seed=1, starts=4
    )
    at = found.names.index("overlap_drift")
    assert found.values[at] == pytest.approx(1.5, abs=4 * found.sd[at])
    assert found.sd[at] < 1.0


@pytest.mark.parametrize("channel", ["in-phase", "out-of-phase"])
def test_a_lockins_channel_is_predicted(channel):
    setup = inv.PumpProbe(**BASIC, repetition_rate=80.0, modulation_frequency=10.0, lockin_channel=channel)
    trace = measured(setup, level=0.0)
    scale = float(np.ptp(trace.reflectance_change.values))
    found = problem(setup, trace, thickness=stats.norm(60, 1))
    predicted = found.predict([[60.0, 1e-3 * scale]]).reflectance_change[0]
    late = DELAY > 3
    np.testing.assert_allclose(predicted[late] / scale, trace.reflectance_change[late] / scale, atol=1e-3)


def test_a_spot_too_small_is_warned_of_and_a_wide_one_is_not():
    trace = measured(inv.PumpProbe(**BASIC))
    with pytest.warns(PlaneWaveWarning, match="a spot near the optical limit"):
        problem(inv.PumpProbe(**BASIC, spot_radius=1.0), trace)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        problem(inv.PumpProbe(**BASIC, spot_radius=10.0), trace)
