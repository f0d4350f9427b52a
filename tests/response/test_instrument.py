"""A stage whose scale is off and an overlap that drifts: the same trace at other delays, times a line."""

import numpy as np
import pytest
from build import crystal, liquid, metal, one, stacked
from scipy import stats

import inverse as inv
from inverse.description.sample.places import bind
from inverse.response.basis import basis, columns
from inverse.response.instrument import drift, in_stage_time, stage_factor
from inverse.response.inverse_laplace import time_grid

DELAY = np.arange(-1.0, 60.0, 0.2)
LOSSY = {"loss_time": 0.02, "loss_exponent": 0.5, "inverse_quality": 0.02, "quality_frequency": 0.05}
HOT = {"electron_heat_capacity": 3e-5, "inverse_coupling": 1 / 2.5e-4}


def trace(sample, delay, rms=0.3):
    layout = columns([str(j) for j in range(len(sample.media) + sample.ambient.is_liquid)])
    grid = time_grid(delay, rms, earliest=0.0)
    return basis(sample, (400.0, 800.0), grid, one(0.0), layout, 1)[0]


@pytest.mark.parametrize("factor", [1.0013, 0.8])
def test_a_stage_of_another_scale_reads_the_trace_at_other_times(factor):
    # Every mechanism there is: two temperatures, both losses, a bond, a liquid; the pulse is measured with the stage
    sample = stacked(
        metal(43.0, **HOT, **LOSSY, lattice_conductivity=0.06),
        crystal(25.0, **LOSSY),
        crystal(),
        compliance=[0.05, 0.0],
        resistance=[5e4, 0.0],
        ambient=liquid(),
    )
    expected = trace(sample, factor * DELAY, 0.3 * factor)
    found = trace(in_stage_time(sample, one(factor)), DELAY)
    scale = np.abs(expected).max(axis=1, keepdims=True)
    moved = np.abs(trace(sample, DELAY) - expected) / scale
    # the grids differ by the factor too, so the two agree to rounding but for the liquid's and the wraps' last digits
    assert (np.abs(found - expected) / scale).max() < 1e-6
    assert moved.max() > 1e-3


def bound(**bench):
    setup = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3, **bench)
    return bind(inv.Stack(inv.Layer("Al", thickness=50.0), inv.Substrate("Si", orientation="100")), setup)


def test_a_perfect_bench_has_no_places():
    assert bound().instrument == {}
    assert stage_factor(bound(), {}) is None
    assert drift(bound(), {}, DELAY[None]).item() == 1.0


def test_unknowns_of_the_bench_go_by_their_bare_names():
    both = bound(stage_scale=stats.norm(0, 1e-3), overlap_drift=stats.norm(0, 0.1))
    assert list(both.priors) == ["stage_scale", "overlap_drift"]
    values = {"stage_scale": np.array([0.0, 1e-3]), "overlap_drift": np.array([0.1, -0.2])}
    np.testing.assert_allclose(stage_factor(both, values), [[1.0], [1.001]])
    # 0.1 per ns is a hundredth after 100 ps
    np.testing.assert_allclose(drift(both, values, np.array([[0.0, 100.0]])), [[[1.0, 1.01]], [[1.0, 0.98]]])


def test_a_shared_unknown_keeps_its_name():
    stage = inv.Unknown("bench A stage", stats.norm(0, 1e-3))
    assert list(bound(stage_scale=stage).priors) == ["bench A stage"]


def test_known_values_are_listed_as_constants():
    rows = {c["field"]: c["value"] for c in bound(stage_scale=2e-3).constants}
    assert rows["stage_scale"] == 2e-3


def test_nonsense_is_refused():
    with pytest.raises(ValueError, match=r"PumpProbe\.stage_scale = 1 is outside"):
        inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3, stage_scale=1.0)
