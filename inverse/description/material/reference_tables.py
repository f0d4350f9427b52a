"""Reading the plain tables of reference_materials: names, rows, sources. No physics."""

from __future__ import annotations

import csv
import difflib
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from statistics import stdev

from inverse.description.material.refractive_index import IndexTable

__all__ = ["Entry", "Number", "Row", "find", "index_series", "names", "read_table", "table_directory"]

Row = dict[str, str]


@dataclass(frozen=True)
class Entry:
    """What the tables say of a material as a whole.

    Attributes
    ----------
    name : str
        Name it goes by.
    kind : str
        ``metal``, ``crystal``, ``glass``, ``film``, ``polymer`` or ``liquid``.
    symmetry : str
        ``cubic``, ``hexagonal``, ``trigonal_6`` or ``isotropic``.
    orientations : tuple of str
        Cuts along which a velocity is known.
    molar_mass : float
        In g/mol.
    molar_mass_source : str
        Its source.
    """

    name: str
    kind: str
    symmetry: str
    orientations: tuple[str, ...]
    molar_mass: float
    molar_mass_source: str


@dataclass(frozen=True)
class Number:
    """A number with its standard-deviation-like spread between sources and the text of its source."""

    value: float
    spread: float
    source: str


def table_directory() -> Path:
    """Return the folder of the tables, in an installed wheel or in the repository.

    Raises
    ------
    ValueError
        If there is none.
    """
    here = Path(__file__).resolve().parents[2]
    for folder in (here / "reference_materials", here.parent / "reference_materials"):
        if (folder / "materials.csv").is_file():
            return folder
    raise ValueError(f"The tables reference_materials were not found beside {here}; reinstall the package.")


@cache
def read_table(table: str) -> tuple[Row, ...]:
    """Return the rows of ``reference_materials/<table>.csv`` as dictionaries of text."""
    with (table_directory() / f"{table}.csv").open(encoding="utf-8", newline="") as handle:
        return tuple(csv.DictReader(handle))


def names() -> tuple[str, ...]:
    """Return the names of all reference materials."""
    return tuple(row["material"] for row in read_table("materials"))


@cache
def _spellings() -> dict[str, str]:
    spellings = {}
    for row in read_table("materials"):
        for spelling in (row["material"], row["description"], *row["aliases"].split(";")):
            spellings[spelling.lower()] = row["material"]
    return spellings


def find(name: str) -> Entry:
    """Return the entry of a material by name or alias, whatever its case.

    Raises
    ------
    ValueError
        If there is none; near names are listed.
    """
    spellings = _spellings()
    key = str(name).strip().lower()
    if key not in spellings:
        near = difflib.get_close_matches(key, spellings, n=6, cutoff=0.5)
        listed = ", ".join(dict.fromkeys(spellings[n] for n in near))
        hint = f"Did you mean {listed}? " if listed else ""
        raise ValueError(
            f"No reference material is called {name!r}. {hint}Known are {', '.join(names())}. "
            "For another one give a Material."
        )
    row = next(r for r in read_table("materials") if r["material"] == spellings[key])
    return Entry(
        name=row["material"],
        kind=row["kind"],
        symmetry=row["symmetry"],
        orientations=tuple(o for o in row["orientations"].split(";") if o),
        molar_mass=float(row["molar_mass_g_per_mol"]),
        molar_mass_source=citation(row["molar_mass_source"]),
    )


@cache
def _citations() -> dict[str, str]:
    flag = {"yes": "from memory: ", "no": ""}
    return {row["key"]: flag[row["from_memory"]] + row["citation"] for row in read_table("sources")}


def citation(key: str) -> str:
    """Return the text of a source; one recalled and not read begins with ``from memory``."""
    return _citations()[key]


def rows(table: str, material: str, quantity: str, *, axis: str = "") -> list[Row]:
    """Return the rows of a quantity, the default first, then its alternatives; unused rows are left out.

    Parameters
    ----------
    table : str
        Table name.
    material, quantity : str
        As written in the table.
    axis : str
        Crystal axis for quantities that have one; rows without an axis hold for all.
    """
    found = [
        row
        for row in read_table(table)
        if row["material"] == material
        and row["quantity"] == quantity
        and row["default"] != "no"
        and row.get("axis", "") in ("", axis)
    ]
    return sorted(found, key=lambda row: row["default"] != "yes")


def number(table: str, material: str, quantity: str, *, axis: str = "") -> Number | None:
    """Return the default value of a quantity with the spread between its sources, or None."""
    found = rows(table, material, quantity, axis=axis)
    if not found or found[0]["default"] != "yes":
        return None
    values = [float(row["value"]) for row in found]
    return Number(values[0], max(between(values), uncertainty(found[0])), source_of(found[0]))


def uncertainty(row: Row) -> float:
    """Return the uncertainty printed with a value, 0 where none is."""
    return float(row["uncertainty"] or 0.0)


def between(values: list[float]) -> float:
    """Return the sample standard deviation between sources; 0 for one source, which says nothing."""
    return stdev(values) if len(values) > 1 else 0.0


def source_of(row: Row) -> str:
    """Return the text of a row's source with what the row adds to it."""
    text = citation(row["source"])
    return f"{text} [{row['reason']}]" if row.get("reason") else text


def index_series(material: str) -> list[Row]:
    """Return the series of refractive index kept for a material, the default first.

    Each row has ``series``, ``form``, ``source``, ``k_measured``, ``default`` (``yes``, ``alternative``, or
    ``no`` where the series takes no part in the spread) and ``reason``.
    """
    order = {"yes": 0, "alternative": 1, "no": 2}
    found = [row for row in read_table("optical_series") if row["material"] == find(material).name]
    return sorted(found, key=lambda row: order[row["default"]])


def index_points(material: str, series: str) -> dict[float, complex]:
    """Return wavelength in nm -> complex index of one series."""
    return {
        float(row["wavelength_nm"]): complex(float(row["n"]), float(row["k"]))
        for row in read_table("optical")
        if row["material"] == material and row["series"] == series
    }


def index_table(material: str, series: str | None, floor: float) -> IndexTable | None:
    """Return a series of refractive index with the spread between series at each of its wavelengths.

    Parameters
    ----------
    material : str
        Canonical name.
    series : str, optional
        Name of the series; by default the default one.
    floor : float
        Least relative spread of each part.

    Raises
    ------
    ValueError
        If the material has no such series.
    """
    kept = index_series(material)
    chosen = [row for row in kept if row["series"] == series] if series else kept[:1]
    if series and not chosen:
        raise ValueError(
            f"'{material}' has no series of refractive index {series!r}; it has "
            f"{', '.join(row['series'] for row in kept) or 'none'}."
        )
    if not chosen:
        return None
    points = index_points(material, chosen[0]["series"])
    rivals = [index_points(material, row["series"]) for row in kept if row["default"] != "no"]
    spread = tuple(_index_spread(w, n, [r[w] for r in rivals if w in r], floor) for w, n in points.items())
    return IndexTable(tuple(points), tuple(points.values()), _series_source(chosen[0]), spread)


def _index_spread(wavelength: float, n: complex, rivals: list[complex], floor: float) -> complex:
    real = max(between([r.real for r in rivals]), floor * n.real)
    return complex(real, max(between([r.imag for r in rivals]), floor * n.imag))


def _series_source(row: Row) -> str:
    unmeasured = "; absorption not given there, taken as zero" if row["k_measured"] == "no" else ""
    return f"{source_of(row)}{unmeasured}"
