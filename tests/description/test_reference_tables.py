"""The tables as tables: sources, flags, defaults, names."""

from __future__ import annotations

import csv
import math

import pytest

from inverse.description.material.properties import Material, material
from inverse.description.material.reference_tables import (
    find,
    index_series,
    names,
    read_table,
    table_directory,
)
from inverse.description.material.reference_values import DEFAULT_SPREAD

TABLES = ("mechanical", "thermal", "electrons", "photoelastic")
FIELDS = (
    "density",
    "velocity",
    "heat_capacity",
    "conductivity",
    "thermal_stress_coefficient",
    "expansion",
    "bulk_modulus",
    "dn_dstrain",
    "electron_heat_capacity",
    "electron_phonon_coupling",
)
COMMON = ("Al", "W", "Au", "Cr", "Ti", "Ni", "Cu", "Pt", "Si", "SiO2", "sapphire", "GaAs", "Ag", "Mo")


def every_material() -> list[tuple[str, str | None]]:
    cases: list[tuple[str, str | None]] = []
    for name in names():
        entry = find(name)
        cases += [(name, None)] if entry.kind != "crystal" else []
        cases += [(name, orientation) for orientation in entry.orientations]
    return cases


def some_material(name: str, **keywords: str) -> Material:
    entry = find(name)
    return material(name, entry.orientations[0] if entry.kind == "crystal" else None, **keywords)


def test_every_number_has_a_source() -> None:
    keys = {row["key"] for row in read_table("sources")}
    for table in (*TABLES, "optical_series"):
        for row in read_table(table):
            assert row["source"] in keys, row
    assert all(row["citation"] for row in read_table("sources"))
    series = {(row["material"], row["series"]) for row in read_table("optical_series")}
    assert {(row["material"], row["series"]) for row in read_table("optical")} == series


def test_no_source_is_unused() -> None:
    used = {row["source"] for table in (*TABLES, "optical_series") for row in read_table(table)}
    used |= {row["molar_mass_source"] for row in read_table("materials")}
    assert {row["key"] for row in read_table("sources")} == used


def test_row_and_source_agree_on_what_is_from_memory() -> None:
    recalled = {row["key"]: row["from_memory"] for row in read_table("sources")}
    for table in TABLES:
        for row in read_table(table):
            assert row["from_memory"] == recalled[row["source"]], row


def test_every_default_is_single_and_says_why_it_beats_its_alternatives() -> None:
    for table in TABLES:
        kept: dict[tuple[str, ...], list[dict[str, str]]] = {}
        for row in read_table(table):
            assert row["default"] in ("yes", "alternative", "no")
            kept.setdefault((row["material"], row["quantity"], row.get("axis", "")), []).append(row)
        for key, group in kept.items():
            defaults = [row for row in group if row["default"] == "yes"]
            assert len(defaults) <= 1, key
            if defaults and any(row["default"] == "alternative" for row in group):
                assert defaults[0]["reason"], key
            assert all(
                row["reason"] for row in group if row["default"] == "no" and table != "photoelastic"
            ), key


def test_every_index_series_has_one_default_with_its_reason() -> None:
    for name in {row["material"] for row in read_table("optical_series")}:
        defaults = [row for row in index_series(name) if row["default"] == "yes"]
        assert len(defaults) == 1
        assert defaults[0]["reason"]


def test_tables_are_well_formed() -> None:
    for path in table_directory().glob("*.csv"):
        with path.open(encoding="utf-8", newline="") as handle:
            widths = {len(row) for row in csv.reader(handle)}
        assert len(widths) == 1, path.name
    for table in TABLES:
        for row in read_table(table):
            assert math.isfinite(float(row["value"]))
            assert row["unit"]


@pytest.mark.parametrize(("name", "orientation"), every_material())
def test_every_value_of_a_reference_material_has_source_and_spread(
    name: str, orientation: str | None
) -> None:
    medium = material(name, orientation)
    for field in FIELDS:
        if getattr(medium, field) is None:
            assert field not in medium.sources
        else:
            assert medium.sources[field]
            assert medium.spread[field] > 0
    if medium.n is not None:
        assert medium.sources["n"] == medium.n.source
        assert all(n.imag >= 0 for n in medium.n.n)
        assert all(s.real > 0 for s in medium.n.spread)


@pytest.mark.parametrize(
    "name", ["Al", "W", "Au", "Cr", "Ti", "Ni", "Cu", "Pt", "Si", "SiO2", "sapphire", "GaAs", "Ag", "Mo"]
)
def test_what_the_model_needs_is_there(name: str) -> None:
    medium = some_material(name)
    for field in ("density", "velocity", "heat_capacity", "conductivity", "thermal_stress_coefficient"):
        assert getattr(medium, field) > 0
    assert medium.index_at(400) and medium.index_at(800)
    if find(name).kind == "metal":
        assert medium.electron_heat_capacity > 0
        assert medium.electron_phonon_coupling > 0


def test_recalled_values_are_marked() -> None:
    for field in ("electron_heat_capacity", "electron_phonon_coupling"):
        assert "from memory" in material("Al").sources[field]
    assert "from memory" in material("Al").sources["heat_capacity"]  # the electrons' share was taken off
    assert "from memory" in material("TiN").sources["velocity"]
    assert material("MgO", "100").sources["conductivity"].startswith("from memory")
    assert material("Ru", "c").sources["velocity"].count("from memory") == 1
    for field in ("density", "velocity", "conductivity", "n", "thermal_stress_coefficient"):
        assert "from memory" not in material("Al").sources[field]


def test_sources_say_how_a_value_was_computed() -> None:
    assert material("Si", "100").sources["heat_capacity"].startswith("specific heat x density")
    assert "[100]" in material("Si", "100").sources["velocity"]
    assert "Voigt-Reuss-Hill" in material("Pt").sources["velocity"]
    assert material("silica").sources["n"].endswith("taken as zero")


def test_spread_is_the_largest_of_sources_print_and_floor() -> None:
    # GaAs: 55 (Ioffe) against 45.5 W/m/K (PMC6927520).
    assert material("GaAs", "100").spread["conductivity"] == pytest.approx(9.5 / math.sqrt(2))
    # AlN: McNeil 1993 prints c33 = 388.5(10.0) GPa.
    assert material("AlN", "c").spread["velocity"] == pytest.approx(10.925 * 0.5 * 10 / 388.5, rel=0.01)
    assert material("Al").spread["density"] == pytest.approx(DEFAULT_SPREAD["density"] * 2.7)
    assert material("Al").spread["electron_phonon_coupling"] == pytest.approx(math.log(2) * 2.45e17)


@pytest.mark.parametrize(
    ("spelling", "name"),
    [
        ("al", "Al"),
        ("Aluminium", "Al"),
        ("TUNGSTEN", "W"),
        ("silica", "SiO2"),
        ("Fused silica", "SiO2"),
        ("h2o", "water"),
    ],
)
def test_aliases(spelling: str, name: str) -> None:
    assert material(spelling).name == name


@pytest.mark.parametrize("cut", ["100", "[100]", "(100)", " <100> "])
def test_orientation_spellings(cut: str) -> None:
    assert material("silicon", cut).velocity == material("Si", "100").velocity


def test_unknown_name_lists_near_ones() -> None:
    with pytest.raises(
        ValueError, match=r"No reference material is called 'saphire'. Did you mean Al2O3.*give a Material"
    ):
        material("saphire")


def test_missing_orientation_lists_them() -> None:
    with pytest.raises(
        ValueError, match="'Si' is a single crystal; give its orientation, one of '100', '110', '111'"
    ):
        material("Si")
    with pytest.raises(ValueError, match="'Al2O3' is a single crystal; give its orientation, one of 'c'"):
        material("sapphire")


def test_impossible_orientation_is_refused() -> None:
    with pytest.raises(ValueError, match=r"'Si' has no orientation 'c'.*give one of '100'"):
        material("Si", "c")
    with pytest.raises(ValueError, match=r"'SiO2' has no orientation '100'.*isotropic, so give none"):
        material("silica", "100")
