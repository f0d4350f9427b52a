"""Trace files: what is read, what is repaired on request and counted, and what is refused with its mend."""

import json
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from inverse.description.trace.checks import MINIMUM_POINTS, TraceError
from inverse.description.trace.columns import recognise
from inverse.description.trace.lockin import rotate
from inverse.description.trace.reading import channels_of, check_trace, make_trace, read_trace
from inverse.description.trace.text_tables import TableError, TableNotFoundError

DELAY = np.round(np.arange(-5.0, 20.0, 0.5), 3)
SIGNAL = 1e-5 * np.where(DELAY > 0, np.exp(-DELAY / 10.0), 0.0) + 1e-7 * np.cos(DELAY)


def rows(*columns: np.ndarray, separator: str = ",") -> str:
    """Rows of numbers as a file has them."""
    return "\n".join(separator.join(f"{x:.10g}" for x in row) for row in zip(*columns, strict=True))


def write(folder: Path, text: str | bytes, name: str = "wafer07.csv") -> Path:
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))
    return path


def with_header(header: str, *columns: np.ndarray, separator: str = ",") -> str:
    return f"{header}\n{rows(*columns, separator=separator)}\n"


def test_a_plain_file(tmp_path: Path) -> None:
    path = write(tmp_path, "# sample 7\n" + with_header("delay_ps,dR_over_R", DELAY, SIGNAL))
    trace = read_trace(path)
    np.testing.assert_array_equal(trace["delay"], DELAY)
    np.testing.assert_allclose(trace["reflectance_change"], SIGNAL, rtol=1e-9)
    assert trace["delay"].attrs["units"] == "ps"
    assert trace["reflectance_change"].attrs["units"] == "1"
    assert trace.attrs["source"] == "wafer07.csv"
    assert trace.attrs["comment"] == "sample 7"
    assert trace.attrs["assumptions"] == ""
    assert [trace.attrs[n] for n in ("rows_dropped_nan", "rows_sorted", "repeats_averaged")] == [0, 0, 0]


def test_vectors_have_both_channels(vectors: Path) -> None:
    trace = read_trace(vectors / "al_si_weak.csv")
    assert channels_of(trace) == ("reflectance_change", "optical_phase")
    raw = np.loadtxt(vectors / "al_si_weak.csv", delimiter=",", skiprows=1)
    np.testing.assert_array_equal(trace["optical_phase"], raw[:, 2])
    assert trace["optical_phase"].attrs["units"] == "per unit fluence"


def test_attrs_survive_a_netcdf_file(tmp_path: Path) -> None:
    trace = read_trace(
        write(tmp_path, with_header("delay_ps,dR_1,dR_2,temperature", DELAY, SIGNAL, SIGNAL, DELAY))
    )
    trace.to_netcdf(tmp_path / "trace.nc", engine="h5netcdf")
    with xr.open_dataset(tmp_path / "trace.nc", engine="h5netcdf") as back:
        assert back.attrs["columns_not_read"] == "temperature"
        np.testing.assert_array_equal(back["reflectance_change"], trace["reflectance_change"])


@pytest.mark.parametrize(
    ("header", "role", "unit"),
    [
        ("delay_ps", "delay", "ps"),
        ("Time (fs)", "delay", "fs"),
        ("t [ns]", "delay", "ns"),
        ("stage position / mm", "delay", "mm"),
        ("dR/R", "reflectance_change", ""),
        ("ΔR/R (%)", "reflectance_change", "1"),
        ("deltaR_over_R", "reflectance_change", ""),
        ("Reflectivity change", "reflectance_change", ""),
        ("in_phase_uV", "x", "uV"),
        ("X (mV)", "x", "mV"),
        ("out-of-phase (V)", "y", "V"),
        ("dphi_mrad", "optical_phase", "rad"),
        ("δφ", "optical_phase", ""),
        ("optical phase", "optical_phase", ""),
        ("dT/T", "transmission_change", ""),
        ("scan", "scan", ""),
    ],
)
def test_headers_are_recognised(header: str, role: str, unit: str) -> None:
    found = recognise(header, 0)
    assert found is not None
    assert (found[0], found[1].unit) == (role, unit)


@pytest.mark.parametrize(
    "header", ["temperature", "R", "phase", "theta", "power_mW", "dt", "Verzögerung (ps)", ""]
)
def test_other_headers_are_not(header: str) -> None:
    assert recognise(header, 0) is None


@pytest.mark.parametrize(
    ("header", "factor", "unit"),
    [
        ("dR_percent", 1e-2, "1"),
        ("dR/R (ppm)", 1e-6, "1"),
        ("dphi_urad", 1e-6, "rad"),
        ("dphi_deg", np.pi / 180, "rad"),
    ],
)
def test_units_become_one_and_radian(tmp_path: Path, header: str, factor: float, unit: str) -> None:
    trace = read_trace(write(tmp_path, with_header(f"delay_ps,{header}", DELAY, SIGNAL)))
    (name,) = channels_of(trace)
    np.testing.assert_allclose(trace[name], SIGNAL * factor, rtol=1e-9)
    assert trace[name].attrs["units"] == unit


@pytest.mark.parametrize(("unit", "factor"), [("fs", 1e3), ("ns", 1e-3), ("s", 1e-12)])
def test_delay_units(tmp_path: Path, unit: str, factor: float) -> None:
    by_header = read_trace(write(tmp_path, with_header(f"delay_{unit},dR", DELAY * factor, SIGNAL)))
    by_argument = read_trace(
        write(tmp_path, with_header("delay,dR", DELAY * factor, SIGNAL)), delay_unit=unit
    )
    np.testing.assert_allclose(by_header["delay"], DELAY, rtol=1e-9)
    np.testing.assert_allclose(by_argument["delay"], DELAY, rtol=1e-9)


def test_stage_position_one_millimetre_of_a_retroreflector_is_6_671_ps(tmp_path: Path) -> None:
    """2 mm / c with the SI's exact c = 299 792 458 m/s: 6.671 281 9 ps, worked by hand."""
    position = 10.0 + 0.1 * np.arange(40)
    path = write(tmp_path, with_header("stage_mm,dR", position, SIGNAL[:40]))
    trace = read_trace(path, stage_zero=11.0)
    assert trace["delay"].values[20] - trace["delay"].values[10] == pytest.approx(6.6712819, rel=1e-7)
    assert trace["delay"].values[10] == pytest.approx(0.0, abs=1e-12)
    folded = read_trace(path, stage_zero=11.0, passes=4)
    np.testing.assert_allclose(folded["delay"], 2.0 * trace["delay"], rtol=1e-12)


def test_stage_that_runs_backwards(tmp_path: Path) -> None:
    path = write(tmp_path, with_header("stage_mm,dR", 0.1 * np.arange(40), SIGNAL[:40]))
    with pytest.raises(TraceError, match="run downwards"):
        read_trace(path, passes=-2)
    trace = read_trace(path, passes=-2, repair=["sort"])
    assert trace.attrs["rows_sorted"] == 40
    np.testing.assert_allclose(trace["reflectance_change"], SIGNAL[:40][::-1], rtol=1e-9)


def test_columns_by_name_and_number(tmp_path: Path) -> None:
    text = with_header("Verzögerung;Signal A;Signal B", DELAY, SIGNAL, 2 * SIGNAL, separator=";")
    path = write(tmp_path, text)
    trace = read_trace(path, columns={"delay": "Verzögerung", "reflectance_change": 2})
    np.testing.assert_allclose(trace["reflectance_change"], 2 * SIGNAL, rtol=1e-9)
    assert json.loads(trace.attrs["columns"]) == {
        "delay": ["Verzögerung"],
        "reflectance_change": ["Signal B"],
    }
    assert trace.attrs["columns_not_read"] == "Signal A"


def test_two_columns_without_a_header(tmp_path: Path) -> None:
    trace = read_trace(write(tmp_path, rows(DELAY, SIGNAL, separator="\t")))
    np.testing.assert_allclose(trace["reflectance_change"], SIGNAL, rtol=1e-9)
    assert "no header" in trace.attrs["assumptions"]
    assert "delay in ps" in trace.attrs["assumptions"]


def test_header_in_a_comment_is_a_header_only_if_it_names_a_delay(tmp_path: Path) -> None:
    named = read_trace(write(tmp_path, with_header("# delay_fs dR", DELAY * 1e3, SIGNAL, separator=" ")))
    np.testing.assert_allclose(named["delay"], DELAY, rtol=1e-9)
    remark = read_trace(write(tmp_path, with_header("# measured today", DELAY, SIGNAL, separator=" ")))
    np.testing.assert_array_equal(remark["delay"], DELAY)


def test_a_long_preamble(tmp_path: Path) -> None:
    text = "Instrument 3\nGain 20\n\n" + with_header("delay_ps,dR", DELAY, SIGNAL)
    trace = read_trace(write(tmp_path, text))
    assert trace.attrs["comment"] == "Instrument 3\nGain 20"
    np.testing.assert_array_equal(read_trace(write(tmp_path, text), header_lines=4)["delay"], DELAY)


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "latin-1"])
def test_encodings(tmp_path: Path, encoding: str) -> None:
    text = with_header("delay_ps,in_phase_µV", DELAY, SIGNAL).replace("\n", "\r\n")
    trace = read_trace(write(tmp_path, text.encode(encoding)))
    assert trace["reflectance_change"].attrs["units"] == "uV"


def test_decimal_commas_are_named_and_read(tmp_path: Path) -> None:
    path = write(tmp_path, with_header("delay_ps;dR", DELAY, SIGNAL, separator=";").replace(".", ","))
    with pytest.raises(TableError, match=r"decimal commas \('2,8366\S+' in line 2\); pass decimal=','"):
        read_trace(path)
    np.testing.assert_allclose(read_trace(path, decimal=",")["reflectance_change"], SIGNAL, rtol=1e-9)


@pytest.mark.parametrize("separator", ["\t", " ", ";"])
def test_decimal_commas_with_a_foreign_header(tmp_path: Path, separator: str) -> None:
    delay = DELAY + 0.25
    body = rows(delay, SIGNAL, separator=separator).replace(".", ",")
    path = write(tmp_path, f"Verzögerung{separator}Reflexionsänderung\n{body}\n")
    with pytest.raises(TableError, match=r"wafer07.csv has decimal commas .* pass decimal=','"):
        read_trace(path)
    with pytest.raises(
        TraceError, match=r"no delay column found .* 0: 'Verzögerung', 1: 'Reflexionsänderung'"
    ):
        read_trace(path, decimal=",")
    trace = read_trace(path, decimal=",", columns={"delay": 0, "reflectance_change": 1})
    np.testing.assert_allclose(trace["delay"], delay, rtol=1e-9)


def test_decimal_commas_between_commas_cannot_be_read(tmp_path: Path) -> None:
    body = "\n".join(f"{t:.2f},{s:.2f}".replace(".", ",") for t, s in zip(DELAY, SIGNAL, strict=True))
    with pytest.raises(
        TableError, match="names 2 columns, but the rows hold 4; if the file has decimal commas"
    ):
        read_trace(write(tmp_path, f"delay_ps,dR\n{body}\n"))


def test_points_where_commas_were_announced(tmp_path: Path) -> None:
    path = write(tmp_path, with_header("delay_ps;dR", DELAY, SIGNAL, separator=";"))
    with pytest.raises(TableError, match=r"decimal points in line 2 .*pass decimal='\.'"):
        read_trace(path, decimal=",")


def spoilt(kind: str) -> tuple[np.ndarray, np.ndarray]:
    """Delays and signal with one fault."""
    delay, signal = DELAY.copy(), SIGNAL.copy()
    if kind == "nan":
        signal[[3, 7]] = np.nan
    elif kind == "infinite":
        signal[5] = np.inf
    elif kind == "unsorted":
        delay[[10, 20]] = delay[[20, 10]]
    elif kind == "repeated":
        delay[11] = delay[10]
    elif kind == "constant":
        signal[:] = 2.5
    return delay, signal


@pytest.mark.parametrize(
    ("kind", "message"),
    [
        ("nan", r"2 row\(s\) with NaN or an empty field, the first in line 5; pass repair=\('drop_nan',\)"),
        ("infinite", r"1 row\(s\) with an infinite number, the first in line 7"),
        (
            "unsorted",
            r"unsorted: they step back 2 time\(s\), first from 5 to 0.5 ps; pass repair=\('sort',\)",
        ),
        ("repeated", r"1 delay\(s\) are repeated, first 0 ps; pass repair=\('average_repeats',\)"),
        ("constant", r"reflectance_change is constant \(2.5 at every delay\)"),
    ],
)
def test_faults_are_refused_with_their_mend(tmp_path: Path, kind: str, message: str) -> None:
    with pytest.raises(TraceError, match=message):
        read_trace(write(tmp_path, with_header("delay_ps,dR", *spoilt(kind))))


def test_dropped_rows_are_counted(tmp_path: Path) -> None:
    delay, signal = spoilt("nan")
    trace = read_trace(write(tmp_path, with_header("delay_ps,dR", delay, signal)), repair=("drop_nan",))
    assert trace.attrs["rows_dropped_nan"] == 2
    np.testing.assert_array_equal(trace["delay"], delay[np.isfinite(signal)])


def test_an_empty_field_is_missing(tmp_path: Path) -> None:
    text = with_header("delay_ps,dR", DELAY, SIGNAL).replace("-4.5,", "-4.5,#", 1)
    lines = [line.split("#")[0] for line in text.split("\n")]
    with pytest.raises(TraceError, match="empty field, the first in line 3"):
        read_trace(write(tmp_path, "\n".join(lines)))


def test_sorted_rows_are_counted_and_keep_their_signal(tmp_path: Path) -> None:
    delay, signal = spoilt("unsorted")
    trace = read_trace(write(tmp_path, with_header("delay_ps,dR", delay, signal)), repair=("sort",))
    assert trace.attrs["rows_sorted"] == 2
    order = np.argsort(delay)
    np.testing.assert_allclose(trace["reflectance_change"], signal[order], rtol=1e-9)


def test_averaged_repeats_are_counted(tmp_path: Path) -> None:
    delay, signal = spoilt("repeated")
    trace = read_trace(write(tmp_path, with_header("delay_ps,dR", delay, signal)), repair="average_repeats")
    assert trace.attrs["repeats_averaged"] == 1
    assert trace["reflectance_change"].values[10] == pytest.approx(signal[10:12].mean(), rel=1e-9)


def test_an_unknown_repair(tmp_path: Path) -> None:
    with pytest.raises(
        TraceError, match="repair has 'interpolate'; expected some of drop_nan, sort, average"
    ):
        read_trace(write(tmp_path, with_header("delay_ps,dR", DELAY, SIGNAL)), repair=("interpolate",))


@pytest.mark.parametrize(
    ("factor", "message"),
    [
        (1e-12, "looks like seconds; pass delay_unit='s'"),
        (1e-3, "looks like nanoseconds"),
        (1e3, "looks like femtoseconds"),
    ],
)
def test_delays_in_another_unit(tmp_path: Path, factor: float, message: str) -> None:
    with pytest.raises(TraceError, match=message):
        read_trace(write(tmp_path, with_header("delay,dR", DELAY * factor, SIGNAL)))
    with pytest.raises(TraceError, match=message):
        make_trace(DELAY * factor, reflectance_change=SIGNAL)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "is empty"),
        (b" \n\n", "is empty"),
        (b"delay_ps,dR\n", "holds no row of numbers"),
        (bytes(range(256)) * 4, "is a binary file"),
        (b"delay_ps\n1.0\n2.0\n", "too few columns: 1"),
        (b"1,2,3\n4,5,6\n", r"3 columns and no header; pass columns="),
        (
            b"delay_ps,dR\n1.0,2.0\n3.0\n",
            "line 3 of wafer07.csv has 1 fields where the first row of numbers has 2",
        ),
        (b"delay_ps,dR\n1.0,2.0\nEND,0\n", "line 3 of wafer07.csv has 'END' where a number is expected"),
        (b"delay_ps,power\n1,2\n", "no signal column found .* 0: 'delay_ps', 1: 'power'"),
        (
            b"delay_ps,dR/R,dR_over_R\n1,2,3\n",
            "several columns that could be reflectance_change: 'dR/R', 'dR_over_R'",
        ),
        (b"delay_ps,time,dR\n1,2,3\n", "several columns that could be delay"),
        (b"delay_ps,X,Y\n1,2,3\n", "lock-in's X and Y; pass lockin_phase="),
        (b"delay_ps,dR,X\n1,2,3\n", "reflectance change and lock-in channels"),
        (b"delay_ps,dR\n1,2\n2,3\n", f"2 points; at least {MINIMUM_POINTS}"),
    ],
)
def test_files_that_cannot_be_read(tmp_path: Path, content: bytes, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        read_trace(write(tmp_path, content))


def test_a_missing_file_is_both_kinds_of_error(tmp_path: Path) -> None:
    with pytest.raises(TableNotFoundError, match=r"no file .*wafer08\.csv"):
        read_trace(tmp_path / "wafer08.csv")
    assert issubclass(TableNotFoundError, ValueError) and issubclass(TableNotFoundError, FileNotFoundError)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (
            {"columns": {"delay": 0, "reflectance": 1}},
            "key 'reflectance'; expected some of delay, reflectance_change",
        ),
        (
            {"columns": {"delay": 0, "optical_phase": "dphi"}},
            r"no column 'dphi' for optical_phase; its columns are 0: ",
        ),
        ({"columns": {"delay": 0, "optical_phase": 5}}, "no column 5 for optical_phase"),
        ({"columns": {"reflectance_change": 1}}, "no delay column"),
        ({"columns": {"delay": 0}}, "no signal column"),
        ({"columns": {"delay": [0, 1], "reflectance_change": 1}}, "maps delay to several columns"),
        ({"delay_unit": "fs"}, "delay_unit is 'fs' but the header 'delay_ps' says ps"),
        ({"delay_unit": "min"}, "delay_unit is 'min'; expected one of"),
        ({"stage_zero": 3.0}, "stage_zero is 3 but the delay is in ps"),
        ({"decimal": ";"}, "decimal is ';'"),
        ({"header_lines": -1}, "header_lines is -1"),
        ({"header_lines": 500}, "holds no row of numbers"),
        ({"ratio": True}, "need the lock-in's two channels"),
        ({"lockin_phase": 3.0}, "need the lock-in's two channels"),
    ],
)
def test_arguments_that_do_not_fit(tmp_path: Path, arguments: dict, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        read_trace(write(tmp_path, with_header("delay_ps,dR", DELAY, SIGNAL)), **arguments)


def test_zero_passes(tmp_path: Path) -> None:
    with pytest.raises(TraceError, match="passes is 0"):
        read_trace(write(tmp_path, with_header("stage_mm,dR", DELAY, SIGNAL)), passes=0)


def test_scans_in_columns_give_mean_and_standard_error(tmp_path: Path) -> None:
    """By hand: 1, 2, 6 have mean 3, sample variance 7, standard error sqrt(7/3)."""
    columns = [SIGNAL * k for k in (1.0, 2.0, 6.0)]
    trace = read_trace(write(tmp_path, with_header("delay_ps,dR_1,dR_2,dR_3", DELAY, *columns)))
    np.testing.assert_allclose(trace["reflectance_change"], 3.0 * SIGNAL, rtol=1e-9)
    np.testing.assert_allclose(
        trace["reflectance_change_scatter"], np.sqrt(7 / 3) * np.abs(SIGNAL), rtol=1e-8
    )
    assert (trace["reflectance_change_scans"] == 3).all()
    assert trace["reflectance_change_scatter"].attrs["units"] == "1"


def test_scans_below_each_other_are_the_same_as_beside(tmp_path: Path) -> None:
    scan = np.repeat([1, 2], DELAY.size)
    long = with_header("scan,delay_ps,dR", scan, np.tile(DELAY, 2), np.r_[SIGNAL, 3 * SIGNAL])
    wide = with_header("delay_ps,first,second", DELAY, SIGNAL, 3 * SIGNAL)
    below = read_trace(write(tmp_path, long))
    beside = read_trace(
        write(tmp_path, wide), columns={"delay": "delay_ps", "reflectance_change": ["first", "second"]}
    )
    xr.testing.assert_equal(below, beside)


def test_scans_at_other_delays_are_refused(tmp_path: Path) -> None:
    scan = np.repeat([1, 2], DELAY.size)
    text = with_header("scan,delay_ps,dR", scan, np.r_[DELAY, DELAY + 0.01], np.r_[SIGNAL, SIGNAL])
    with pytest.raises(TraceError, match="scan 2 was not taken at the delays of scan 1"):
        read_trace(write(tmp_path, text))


def test_standard_error_of_scans_is_the_noise(tmp_path: Path) -> None:
    """Statistics: 16 scans of unit noise give 1/4, known from 50 delays to 1/sqrt(2 x 50 x 15); 4 sigma."""
    noise = np.random.default_rng(3).normal(size=(16, DELAY.size))
    names = ",".join(f"dR_{i}" for i in range(16))
    trace = read_trace(write(tmp_path, with_header(f"delay_ps,{names}", DELAY, *noise)))
    spread = np.sqrt(np.mean(trace["reflectance_change_scatter"].values ** 2))
    assert spread == pytest.approx(0.25, rel=4 / np.sqrt(2 * 50 * 15))


def lockin_file(folder: Path, degrees: float) -> tuple[Path, np.ndarray, np.ndarray]:
    """A lock-in that runs `degrees` ahead: its X and Y are the true ones turned back."""
    drift = 1.0 + 0.01 * DELAY
    across = -2e-6 * np.ones_like(DELAY) * drift
    along = SIGNAL * drift
    turn = np.deg2rad(degrees)
    x, y = along * np.cos(turn) - across * np.sin(turn), along * np.sin(turn) + across * np.cos(turn)
    return write(folder, with_header("delay_ps,X_uV,Y_uV", DELAY, x, y)), along, across


def test_lockin_phase_turns_the_signal_into_x(tmp_path: Path) -> None:
    path, along, _ = lockin_file(tmp_path, 30.0)
    trace = read_trace(path, lockin_phase=30.0)
    np.testing.assert_allclose(trace["reflectance_change"], along, atol=1e-14)
    assert trace["reflectance_change"].attrs["units"] == "uV"


def test_a_quarter_turn_exchanges_the_channels() -> None:
    x, y = rotate(np.array([1.0, 2.0]), np.array([3.0, 5.0]), 90.0)
    np.testing.assert_allclose(x, [3.0, 5.0], atol=1e-15)
    np.testing.assert_allclose(y, [-1.0, -2.0], atol=1e-15)


def test_the_ratio_is_free_of_a_common_drift(tmp_path: Path) -> None:
    path, _, _ = lockin_file(tmp_path, 30.0)
    trace = read_trace(path, lockin_phase=30.0, ratio=True)
    np.testing.assert_allclose(trace["reflectance_change"], SIGNAL / -2e-6, atol=1e-7)
    assert trace["reflectance_change"].attrs["units"] == "1"


def test_a_ratio_through_zero_is_refused(tmp_path: Path) -> None:
    path = write(tmp_path, with_header("delay_ps,X,Y", DELAY, SIGNAL, np.cos(DELAY)))
    with pytest.raises(TraceError, match="passes through zero"):
        read_trace(path, ratio=True)


def test_one_lockin_channel_is_taken_as_it_stands(tmp_path: Path) -> None:
    trace = read_trace(write(tmp_path, with_header("delay_ps,in_phase_uV", DELAY, SIGNAL)))
    assert "as it stands" in trace.attrs["assumptions"]
    with pytest.raises(TraceError, match="as many X as Y"):
        read_trace(tmp_path / "wafer07.csv", ratio=True)


def test_make_trace_copies_and_names_units() -> None:
    signal = SIGNAL.copy()
    trace = make_trace(DELAY, optical_phase=signal, units={"optical_phase": "mrad"}, attrs={"sample": "7"})
    signal[:] = 0.0
    np.testing.assert_array_equal(trace["optical_phase"], SIGNAL)
    assert trace["optical_phase"].attrs["units"] == "mrad"
    assert trace.attrs["sample"] == "7"


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({}, "no channel given"),
        ({"reflectance_change": SIGNAL[:-1]}, "reflectance_change has 49 points and delay has 50"),
        ({"reflectance_change": np.c_[SIGNAL, SIGNAL]}, r"has shape \(50, 2\); expected one dimension"),
        ({"reflectance_change": ["a"] * 50}, "is not numbers"),
        ({"reflectance_change": SIGNAL, "units": {"optical_phase": "rad"}}, "units names 'optical_phase'"),
        (
            {"reflectance_change": np.where(DELAY == 0, np.nan, SIGNAL)},
            r"1 NaN value\(s\), the first at point 10",
        ),
        ({"reflectance_change": np.where(DELAY == 0, np.inf, SIGNAL)}, r"1 infinite value"),
    ],
)
def test_make_trace_refuses(arguments: dict, message: str) -> None:
    with pytest.raises(TraceError, match=message):
        make_trace(DELAY, **arguments)


def test_a_simulated_trace_may_be_short_or_constant() -> None:
    trace = make_trace([1.0, 1.2], reflectance_change=[0.0, 0.0], measured=False)
    assert check_trace(trace, measured=False) is trace
    with pytest.raises(TraceError, match="2 points"):
        check_trace(trace.assign_coords(delay=("delay", [1.0, 3.0])))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda t: t["reflectance_change"], "a trace is an xarray Dataset, got DataArray"),
        (lambda t: t.rename(delay="time"), "no coordinate 'delay'"),
        (lambda t: t.rename(reflectance_change="dR"), "none of the channels"),
        (lambda t: t.expand_dims(site=2), "one trace per Dataset"),
        (lambda t: t.isel(delay=slice(None, None, -1)), "run downwards"),
        (lambda t: t.assign_coords(delay=t["delay"].assign_attrs(units="s")), "units attribute is 's'"),
    ],
)
def test_check_trace_refuses(change, message: str) -> None:
    with pytest.raises(TraceError, match=message):
        check_trace(change(make_trace(DELAY, reflectance_change=SIGNAL)))
