"""Two windows against one: equal where echoes have died, and the one window where they have not.

The tolerance is the one of the transform, 2e-6 of the peak; the whole window is held against known pairs in
test_inverse_laplace.
"""

from dataclasses import replace

import numpy as np
import pytest
from build import crystal, metal, stacked
from records import one

from inverse.response.basis import arrival, basis, columns, spectra
from inverse.response.carriers import CarrierConstants
from inverse.response.inverse_laplace import TimeGrid, time_grid
from inverse.response.windows import Windows, delay_windows, rings_on, subset

RMS = 0.3
LOG = np.unique(np.concatenate([np.linspace(-8, 10, 60), np.geomspace(10, 4000, 340)]))
BEAMS = (400.0, 800.0)
LAYOUT = columns(["film", "base"])


def bonded(compliance, thickness=60.0, **film):
    return stacked(metal(thickness, **film), crystal(), compliance=[compliance], resistance=[1 / 1e-4])


def both(sample, sets=1, layout=LAYOUT):
    grids = time_grid(LOG, RMS, -0.5), delay_windows(LOG, RMS, -0.5)
    return [basis(sample, BEAMS, grid, one(0.1), layout, sets) for grid in grids]


def is_loud(sample, sets=1):
    grid = delay_windows(LOG, RMS, -0.5)
    near, arrived = spectra(sample, BEAMS, grid.near, LAYOUT, sets), arrival(grid.near, one(0.1))
    return rings_on(grid, sample, near, arrived, len(LAYOUT.groups))


def test_long_traces_take_a_fraction_of_the_frequencies():
    grid = delay_windows(LOG, RMS, -0.5)
    assert isinstance(grid, Windows)
    taken = grid.near.s.shape[1] + grid.far.s.shape[1]
    assert taken < 0.25 * grid.whole.s.shape[1]


@pytest.mark.parametrize("delay", [np.linspace(-5, 110, 400), np.linspace(-5, 10, 50)])
def test_short_traces_take_one_window(delay):
    assert isinstance(delay_windows(delay, RMS, -0.5), TimeGrid)


@pytest.mark.parametrize("compliance", [0.0, 0.01])
def test_two_windows_agree_with_one_once_echoes_have_died(compliance):
    sample = bonded(compliance)
    assert not is_loud(sample).any()
    whole, parts = both(sample)
    peak = np.abs(whole).max(axis=-1, keepdims=True)
    assert 0 < (np.abs(parts - whole) / peak).max() < 2e-6


def test_carriers_take_two_windows_too():
    # Pairs that live 50 ps: late delays see none of them, yet their functions stand among the others
    given = CarrierConstants(*(one(v) for v in (0.5, 0.2, 1.0, 5.0, 1 / 50, 0.1)))
    sample = stacked(metal(60.0), crystal(carriers=given), compliance=[0.0], resistance=[1 / 1e-4])
    bare = stacked(crystal(40.0, carriers=given), metal(), compliance=[0.0], resistance=[1 / 1e-4])
    for stack, dark in ((sample, ["base"]), (bare, ["film"])):
        layout = columns(["film", "base"], dark)
        whole, parts = both(stack, layout=layout)
        assert whole.shape[1] == 12
        peak = np.abs(whole).max(axis=-1, keepdims=True)
        assert (np.abs(parts - whole) / np.where(peak > 0, peak, 1.0)).max() < 2e-6


RINGING = {
    "weak bond": bonded(2.0),
    "bond that rings past the joint": bonded(0.05),
    "echo later than what is watched": bonded(0.0, thickness=2e3),
}


@pytest.mark.parametrize("name", RINGING)
def test_what_rings_on_takes_the_whole_window(name):
    assert is_loud(RINGING[name]).all()
    whole, parts = both(RINGING[name])
    late = LOG > 500
    np.testing.assert_array_equal(parts[..., late], whole[..., late])
    # The near window still serves the early delays
    np.testing.assert_allclose(parts, whole, rtol=0, atol=2e-6 * np.abs(whole).max())


def test_far_window_alone_would_miss_what_rings_on():
    sample, grid = bonded(0.1), delay_windows(LOG, RMS, -0.5)
    whole = basis(sample, BEAMS, grid.whole, one(0.1), LAYOUT, 1)[..., ~grid.early]
    alone = basis(sample, BEAMS, grid.far, one(0.1), LAYOUT, 1)
    assert (np.abs(alone - whole).max(axis=-1) / np.abs(whole).max(axis=-1)).max() > 1e-4


def test_attenuation_lets_a_weak_bond_take_two_windows():
    sample = bonded(0.05, loss_time=0.02)
    assert not is_loud(sample).any()
    whole, parts = both(sample)
    assert (np.abs(parts - whole) / np.abs(whole).max(axis=-1, keepdims=True)).max() < 2e-6


def test_batch_is_each_set_alone():
    compliance = np.array([[0.0], [0.3], [0.005]])
    batch = replace(bonded(0.0), compliance=(compliance,))
    assert is_loud(batch, sets=3).tolist() == [False, True, False]
    together = both(batch, sets=3)[1]
    for row, c in zip(together, compliance[:, 0], strict=True):
        np.testing.assert_allclose(row, both(bonded(c))[1][0], rtol=0, atol=1e-9 * np.abs(row).max())


def test_subset_takes_sets_wherever_they_are():
    batch = replace(bonded(0.0), compliance=(np.arange(3.0)[:, None],))
    chosen = subset(batch, np.array([True, False, True]))
    assert chosen.compliance[0].tolist() == [[0.0], [2.0]]
    assert chosen.media[0].density is batch.media[0].density
