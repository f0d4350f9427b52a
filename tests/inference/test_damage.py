"""A result file that was damaged or changed is refused, whatever was hit."""

import json

import h5py
import numpy as np
import pytest
import xarray as xr
from problems import SETUP, bonded, noisy, sampled
from scipy import stats

import inverse as inv


@pytest.fixture(scope="module")
def saved(tmp_path_factory):
    truth = {"Al.thickness": 60.0, "Al.velocity": 6.42, "Al|Si.compliance": 0.02}
    trace = noisy(bonded(), truth, 0.01, seed=1)
    problem = inv.Inversion(bonded(), SETUP, trace, time_zero=stats.norm(0, 0.05), noise="white")
    result = sampled(problem, 0.1 * np.random.default_rng(1).standard_normal((2, 5, 12, len(problem.names))))
    path = inv.save(result, tmp_path_factory.mktemp("results") / "result.nc")
    return result, path


def test_a_sound_file_holds_the_result_and_nothing_else(saved, tmp_path):
    result, path = saved
    loaded = inv.load(path)
    assert loaded.identical(result)
    again = inv.save(loaded, tmp_path / "again.nc")
    assert inv.load(again).identical(result)


def test_no_flipped_bit_passes_unseen(saved, tmp_path):
    result, path = saved
    whole, rng = path.read_bytes(), np.random.default_rng(2)
    struck = tmp_path / "struck.nc"
    refused = 0
    for place in rng.integers(len(whole), size=60):
        damaged = bytearray(whole)
        damaged[place] ^= 1 << int(rng.integers(8))
        struck.write_bytes(damaged)
        try:
            assert inv.load(struck).identical(result), f"byte {place}"
        except ValueError as error:
            assert "take another copy of it" in str(error)
            refused += 1
    assert refused > 20


def test_every_array_carries_a_checksum_of_its_own(saved):
    """So that a reader other than this library sees the damage too."""
    with h5py.File(saved[1]) as file:
        assert file["posterior/Al.thickness"].fletcher32
        assert file["observed_data/reflectance_change"].fletcher32


@pytest.mark.parametrize("share", [0.01, 0.5, 0.999])
def test_a_file_cut_short_is_refused(saved, tmp_path, share):
    whole = saved[1].read_bytes()
    short = tmp_path / "short.nc"
    short.write_bytes(whole[: int(share * len(whole))])
    with pytest.raises(ValueError, match=r"'.*short\.nc' is damaged or not a NetCDF file.*take another copy"):
        inv.load(short)


def test_a_number_that_was_changed_is_noticed(saved, tmp_path):
    changed = tmp_path / "changed.nc"
    with xr.open_datatree(saved[1], engine="h5netcdf") as tree:
        tree = tree.load()
    record = json.loads(tree.attrs["inverse"])
    tree.attrs["inverse"] = json.dumps({**record, "seed": 2})
    tree.to_netcdf(changed, engine="h5netcdf")
    with pytest.raises(ValueError, match="does not hold what save wrote"):
        inv.load(changed)


def test_draws_that_are_no_numbers_are_refused(saved, tmp_path):
    result = saved[0].copy(deep=True)
    result["posterior"]["Al.thickness"][0, 3] = np.nan
    path = inv.save(result, tmp_path / "holes.nc")
    with pytest.raises(
        ValueError, match=r"the draws of Al\.thickness are not finite numbers on \(chain, draw\)"
    ):
        inv.load(path)
