"""Measurements at the door: what is read, what is refused and how it is said."""

import numpy as np
import pytest
from scipy import stats

from inverse.study.stiffness.measurements import BrillouinShift, EchoTime, Velocity, named, velocities

BRANCH = "longitudinal"


def velocity(**changes: object) -> Velocity:
    return Velocity(**{"direction": "100", "value": 8.43, "uncertainty": 0.01, "branch": BRANCH, **changes})


def test_labels_become_the_branches_they_admit() -> None:
    assert velocity(branch="transverse").branch == ("fast transverse", "slow transverse")
    assert (
        velocity(branch=None).branch
        == velocity(branch="unknown").branch
        == (BRANCH, "fast transverse", "slow transverse")
    )
    assert velocity(branch=("slow transverse", BRANCH)).branch == (BRANCH, "slow transverse")


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"value": 8430.0}, r"Velocity\.velocity = 8430 is outside 0\.1 to 50 nm/ps.*looks like m/s"),
        ({"value": np.nan}, r"Velocity\.velocity = nan is outside"),
        ({"value": "fast"}, "is not a number"),
        ({"uncertainty": 0.0}, "got uncertainty 0.0; give a positive standard uncertainty"),
        ({"uncertainty": np.nan}, "got uncertainty nan; give a positive standard uncertainty"),
        ({"branch": "shear"}, "got branch 'shear'; expected one of longitudinal, fast transverse"),
        ({"branch": ()}, r"got branch \(\); expected one of"),
        ({"density": 2330.0}, r"density = 2330 is outside .*looks like kg/m3"),
        ({"density": stats.norm(0.0, 1.0)}, "quantile does not fit.*density"),
        ({"name": "a|b"}, "leave out"),
    ],
)
def test_a_measurement_that_makes_no_sense_is_refused(changes: dict, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        velocity(**changes)


def test_a_brillouin_shift_in_gigahertz_and_a_time_in_seconds_are_refused() -> None:
    with pytest.raises(ValueError, match=r"brillouin_shift = 50\.3 is outside .*looks like GHz"):
        BrillouinShift(direction="x", value=50.3, uncertainty=0.1, wavelength=532.0, refractive_index=1.5)
    with pytest.raises(ValueError, match=r"echo_time = 3\.1e-11 is outside .*looks like s"):
        EchoTime(direction="x", value=3.1e-11, uncertainty=1e-13, thickness=100.0)
    with pytest.raises(ValueError, match=r"wavelength = 5\.32e-07 is outside"):
        BrillouinShift(direction="x", value=0.03, uncertainty=1e-4, wavelength=5.32e-7, refractive_index=1.5)
    with pytest.raises(ValueError, match=r"scattering_angle = 270 is outside"):
        BrillouinShift(
            direction="x", value=0.03, uncertainty=1e-4, wavelength=532.0, refractive_index=1.5, angle=270.0
        )


def test_a_table_is_read_row_by_row_and_empty_cells_are_left_out() -> None:
    table = {
        "direction": ["100", "110"],
        "velocity": [8.43, 5.84],
        "uncertainty": [0.01, 0.02],
        "branch": [BRANCH, np.nan],
        "density": [np.nan, 2.33],
        "name": ["", "second"],
    }
    first, second = velocities(table)
    assert (first.branch, first.density, first.name) == ((BRANCH,), None, "")
    assert (second.value, second.uncertainty, second.density, second.name) == (5.84, 0.02, 2.33, "second")
    assert len(second.branch) == 3


def test_a_table_may_be_a_data_frame() -> None:
    import pandas as pd

    frame = pd.DataFrame({"direction": ["100"], "velocity": [8.43], "uncertainty": [0.01]})
    assert velocities(frame)[0].value == 8.43


@pytest.mark.parametrize(
    ("table", "message"),
    [
        (
            {"direction": ["100"], "velocity": [8.4]},
            "columns direction, velocity; it needs direction, velocity, unc",
        ),
        (
            {"direction": ["100"], "velocity": [8.4], "uncertainty": [0.1], "mode": ["L"]},
            "mode; it needs .* may have branch, density, name",
        ),
        ({"direction": ["100", "110"], "velocity": [8.4], "uncertainty": [0.1]}, "columns differ in length"),
        ({"direction": ["100"], "velocity": [np.nan], "uncertainty": [0.1]}, "Row 1 of the table: .*nan"),
    ],
)
def test_a_table_that_is_not_one_is_refused(table: dict, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        velocities(table)


def test_two_values_of_one_branch_that_exclude_each_other_are_contradictory_labels() -> None:
    pair = [velocity(name="a"), velocity(direction=[-1.0, 0.0, 0.0], value=5.84, name="b")]
    with pytest.raises(
        ValueError, match=r"a = 8\.43 and b = 5\.84 nm/ps are both labelled longitudinal .* contradict"
    ):
        named(pair, "cubic")
    # Values that agree are two measurements of one wave; another specimen may have another density.
    names, directions = named([velocity(), velocity(value=8.44)], "cubic")
    assert names == ("m1", "m2") and directions.tolist() == [[1, 0, 0]] * 2
    assert named([velocity(), velocity(value=5.84, density=4.9)], "cubic")


def test_a_slow_wave_faster_than_the_fast_one_is_a_contradiction() -> None:
    pair = [velocity(value=4.68, branch="fast transverse"), velocity(value=5.85, branch="slow transverse")]
    with pytest.raises(ValueError, match="the slow one is faster: the labels contradict"):
        named(pair, "cubic")
    assert named([velocity(value=4.68, branch="transverse"), pair[1]], "cubic")


@pytest.mark.parametrize(
    ("measurements", "message"),
    [
        ([], "No measurements were given"),
        ([8.43], "8.43 is no measurement"),
        ([velocity(name="a"), velocity(name="a")], "The name a stands for several measurements"),
        ([velocity(direction=[0, 0, 0])], "m1: direction of zero length"),
        ([velocity(direction="c")], "m1: orientation 'c' is not known for a cubic crystal"),
        ([velocity(direction=np.eye(3))], r"m1 got directions of shape \(3, 3\)"),
    ],
)
def test_a_set_of_measurements_that_makes_no_sense_is_refused(measurements: list, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        named(measurements, "cubic")
