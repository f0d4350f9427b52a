"""The user's own table of n and k."""

from __future__ import annotations

from pathlib import Path

import pytest

from inverse.description.material.properties import Material
from inverse.description.material.refractive_index import IndexTable, read_index

ROWS = ((400.0, 0.49, 4.84), (532.0, 0.94, 6.42), (800.0, 2.77, 8.35))


def write(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "film.txt"
    path.write_text(text, encoding="utf-8")
    return path


def check_table(table: IndexTable) -> None:
    assert table.wavelength == pytest.approx([r[0] for r in ROWS], rel=1e-9)
    assert table.n == pytest.approx([complex(r[1], r[2]) for r in ROWS])
    assert "film.txt" in table.source


@pytest.mark.parametrize("separator", [",", ";", "\t", " "])
def test_read_index_round_trip(tmp_path: Path, separator: str) -> None:
    lines = [separator.join(map(str, row)) for row in ROWS]
    text = "\n".join(["# ellipsometer", separator.join(("wavelength (nm)", "n", "k")), *lines])
    check_table(read_index(write(tmp_path, text)))


@pytest.mark.parametrize("separator", [";", "\t", " "])
def test_read_index_with_decimal_commas(tmp_path: Path, separator: str) -> None:
    lines = [separator.join(map(str, row)).replace(".", ",") for row in ROWS]
    path = write(tmp_path, "\n".join([separator.join(("lambda_nm", "n", "k")), *lines]))
    check_table(read_index(path, decimal=","))
    with pytest.raises(ValueError, match=r"line 2: '400,0' is not a number.*pass decimal=','"):
        read_index(path)


def test_read_index_refuses_decimal_commas_between_commas(tmp_path: Path) -> None:
    path = write(tmp_path, "wavelength (nm),n,k\n400,0,0,49,4,84\n")
    with pytest.raises(ValueError, match=r"line 2: 6 values for 3 columns.*decimal commas, pass decimal=','"):
        read_index(path)


def test_read_index_refuses_points_where_commas_were_announced(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match=r"'400.0' is not a number with decimal ','.*pass decimal='\.'"):
        read_index(write(tmp_path, "wavelength (nm);n;k\n400.0;0.49;4.84\n"), decimal=",")


@pytest.mark.parametrize("heading", ["wavelength (um)", "lambda [µm]", "wl_um"])
def test_read_index_in_micrometres(tmp_path: Path, heading: str) -> None:
    lines = [f"{w / 1e3};{n};{k}" for w, n, k in ROWS]
    check_table(read_index(write(tmp_path, "\n".join([f"{heading};n;k", *lines]))))


def test_read_index_in_electronvolts_comes_out_sorted(tmp_path: Path) -> None:
    # h c / e = 1239.841984 eV nm (SI)
    lines = [f"{1239.841984 / w!r},{n},{k}" for w, n, k in ROWS]
    check_table(read_index(write(tmp_path, "\n".join(["energy,n,k", *lines])), unit="eV"))


def test_read_index_by_column_order(tmp_path: Path) -> None:
    lines = [f"{k},{w},1.0,{n}" for w, n, k in ROWS]
    table = read_index(write(tmp_path, "\n".join(lines)), columns=("k", "wavelength", "psi", "n"), unit="nm")
    check_table(table)
    assert Material("film", n=table).index_at(800) == 2.77 + 8.35j


@pytest.mark.parametrize(
    ("text", "keywords", "message"),
    [
        ("", {}, "is empty"),
        ("# only a remark\n", {}, "is empty"),
        ("wavelength (nm),n,k\n", {}, "holds no row of numbers"),
        ("wavelength,n,k\n400,0.49,4.84\n", {}, "does not say the unit of 'wavelength'; pass unit="),
        ("wavelength (nm),n,k\n400,0.49,4.84\n", {"unit": "um"}, r"writes 'wavelength \(nm\)' but unit='um'"),
        ("wavelength (nm),n,k\n400,0.49,4.84\n", {"unit": "furlong"}, "unit = 'furlong'; give 'nm'"),
        ("wavelength (nm),n\n400,0.49\n", {}, r"0 columns for 'k'.*pass columns="),
        ("400,0.49,4.84\n", {}, "0 columns for 'wavelength'"),
        ("wavelength (nm),n,k\n400,0.49,oops\n", {}, "line 2: 'oops' is not a number"),
        ("wavelength (nm),n,k\n400,0.49,nan\n", {}, "line 2: 'nan' is not finite; delete the row"),
        ("wavelength (nm),n,k\n400,1,2\n400,1,2\n", {}, "must increase, but 400 nm follows 400 nm"),
        ("wavelength (nm),n,k\n400,0.49,-4.84\n", {}, "negative imaginary part"),
        ("wavelength (nm),n,k\n0.4,0.49,4.84\n", {}, "looks like m or um"),
        ("energy (eV),n,k\n-1,0.49,4.84\n", {}, "photon energy of -1 eV is not positive"),
        ("wavelength (nm),n,k\n400,0.49,4.84\n", {"decimal": "'"}, "give '.' or ','"),
        ("wavelength (nm),n,k\n400,0.49,4.84\n", {"decimal": ",", "delimiter": ","}, "two different signs"),
    ],
)
def test_read_index_refusals(tmp_path: Path, text: str, keywords: dict[str, str], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        read_index(write(tmp_path, text), **keywords)


def test_index_table_refusals() -> None:
    with pytest.raises(ValueError, match="got 2 wavelengths, 1 values and 0 spreads"):
        IndexTable((400.0, 500.0), (1 + 0j,))
    with pytest.raises(ValueError, match="must increase, but 400 nm follows 500 nm"):
        IndexTable((500.0, 400.0), (1 + 0j, 1 + 0j))
