"""Tables of the complex refractive index, from the reference data or the user's own ellipsometry file."""

from __future__ import annotations

import re
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np

from inverse.description.arguments import checked_path
from inverse.description.quantities import check

__all__ = ["CoarseIndexWarning", "IndexTable", "read_index"]

_EV_NM = 1239.841984  # h c / e in eV nm, exact SI constants
_UNITS = {"nm": "nm", "um": "um", "µm": "um", "μm": "um", "micron": "um", "microns": "um", "ev": "eV"}
_HEADINGS = {
    "wavelength": ("wavelength", "lambda", "λ", "wl", "energy", "photon energy", "e"),
    "n": ("n", "n'", "n_real", "re(n)", "refractive index"),
    "k": ("k", "n''", "n_imag", "im(n)", "κ", "extinction coefficient"),
}


class CoarseIndexWarning(UserWarning):
    """The index was interpolated between table points between which it changes much."""


@dataclass(frozen=True)
class IndexTable:
    """A complex refractive index n' + i n'' tabulated against vacuum wavelength.

    Parameters
    ----------
    wavelength : sequence of float
        Vacuum wavelengths in nm, increasing.
    n : sequence of complex
        Index at each wavelength; n'' >= 0, because the optical time factor is e^{-i w t}.
    source : str
        Where the numbers come from.
    spread : sequence of complex, optional
        Standard-deviation-like spread of the real and the imaginary part at each wavelength.

    Raises
    ------
    ValueError
        If the lengths differ, wavelengths do not increase, or a value is out of range.

    Examples
    --------
    >>> IndexTable((400.0, 410.0), (0.49 + 4.84j, 0.51 + 4.96j)).at(405.0)
    (0.5+4.9j)
    """

    wavelength: tuple[float, ...]
    n: tuple[complex, ...]
    source: str = "given by the user"
    spread: tuple[complex, ...] = ()

    def __repr__(self) -> str:
        """Write the range."""
        return f"IndexTable({len(self.n)} values, {self.wavelength[0]:g} to {self.wavelength[-1]:g} nm)"

    def __post_init__(self) -> None:
        wavelength = tuple(check("wavelength", w, "index table") for w in self.wavelength)
        if not wavelength or len(wavelength) != len(self.n) or len(self.spread) not in (0, len(self.n)):
            raise ValueError(
                f"An index table got {len(wavelength)} wavelengths, {len(self.n)} values and "
                f"{len(self.spread)} spreads; give a value (and a spread or none at all) for each wavelength."
            )
        for before, after in pairwise(wavelength):
            if not after > before:
                raise ValueError(
                    f"Wavelengths of an index table must increase, but {after:g} nm follows {before:g} nm; "
                    "sort the table and drop repeated wavelengths."
                )
        object.__setattr__(self, "wavelength", wavelength)
        object.__setattr__(
            self,
            "n",
            tuple(check_index(v, f"index at {w:g} nm") for w, v in zip(wavelength, self.n, strict=True)),
        )
        object.__setattr__(self, "spread", tuple(complex(s) for s in self.spread))

    def at(self, wavelength: float) -> complex:
        """Return the index at a vacuum wavelength in nm, linear between table points.

        Parameters
        ----------
        wavelength : float
            Vacuum wavelength in nm, inside the table's range.

        Returns
        -------
        complex
            n' + i n''.

        Raises
        ------
        ValueError
            If the wavelength lies outside the table.

        Warns
        -----
        CoarseIndexWarning
            If the index differs by more than 3 % between the two table points used.
        """
        self._refuse_outside(wavelength)
        self._warn_if_coarse(wavelength)
        return self._linear(wavelength, self.n)

    def spread_at(self, wavelength: float) -> complex:
        """Return the spread of the real and imaginary part at a wavelength in nm, as one complex number.

        Raises
        ------
        ValueError
            If the wavelength lies outside the table.
        """
        self._refuse_outside(wavelength)
        return self._linear(wavelength, self.spread) if self.spread else 0j

    def _linear(self, wavelength: float, values: Sequence[complex]) -> complex:
        column = np.asarray(values, dtype=complex)
        real = np.interp(wavelength, self.wavelength, column.real)
        return complex(float(real), float(np.interp(wavelength, self.wavelength, column.imag)))

    def _refuse_outside(self, wavelength: float) -> None:
        low, high = self.wavelength[0], self.wavelength[-1]
        if not low - 1e-9 <= wavelength <= high + 1e-9:
            raise ValueError(
                f"The refractive index ({self.source}) is known from {low:g} to {high:g} nm and was asked at "
                f"{wavelength:g} nm; it is not extrapolated. Give n={{{wavelength:g}: complex}} or a wider "
                "table (read_index)."
            )

    def _warn_if_coarse(self, wavelength: float) -> None:
        after = int(np.searchsorted(self.wavelength, wavelength - 1e-9))
        if after == 0 or self.wavelength[min(after, len(self.n) - 1)] <= wavelength + 1e-9:
            return
        low, high = self.wavelength[after - 1], self.wavelength[after]
        change = abs(self.n[after] - self.n[after - 1]) / abs(self.n[after - 1])
        if change > 0.03:
            warnings.warn(
                f"The refractive index at {wavelength:g} nm is interpolated between {low:g} and {high:g} nm, "
                f"where it changes by {change:.0%} ({self.source}); give a denser table (read_index) or the "
                "index at this wavelength.",
                CoarseIndexWarning,
                stacklevel=4,
            )


def check_index(value: complex, where: str) -> complex:
    """Return a complex index whose parts are in range.

    Raises
    ------
    ValueError
        If it is not a number, the real part is out of range, or the imaginary part is negative.
    """
    try:
        number = complex(0 + value)  # a text would be parsed, but cannot be added to
    except (TypeError, ValueError):
        raise ValueError(f"{where} = {value!r} is not a complex number; write it like 2.77+8.35j.") from None
    if number.imag < 0:
        raise ValueError(
            f"{where} = {number:g} has a negative imaginary part; with the time factor e^{{-i w t}} an "
            "absorbing medium has n'' >= 0. If the source uses e^{+i w t}, take the complex conjugate."
        )
    check("n_real", number.real, where)
    check("n_imag", number.imag, where)
    return number


def read_index(
    path: str | Path,
    *,
    unit: str | None = None,
    decimal: str = ".",
    delimiter: str | None = None,
    columns: Sequence[str] | None = None,
) -> IndexTable:
    r"""Read a table of wavelength, n and k from a text file, such as an ellipsometer writes.

    The first line that is neither empty nor begins with ``#`` names the columns, unless `columns` does.

    Parameters
    ----------
    path : str or Path
        The file, UTF-8.
    unit : {"nm", "um", "eV"}, optional
        Unit of the wavelength (eV for photon energy); it may stand in the column's name instead,
        ``wavelength (nm)``.
    decimal : {".", ","}
        Decimal mark. It is never guessed.
    delimiter : str, optional
        What separates columns; by default the first of tab, semicolon, comma (unless it is the decimal
        mark) that the first line holds, else blanks.
    columns : sequence of str, optional
        Names of the file's columns in order, out of ``wavelength``, ``n``, ``k``, others being ignored; the
        file then has no line of names.

    Returns
    -------
    IndexTable
        Sorted by wavelength in nm.

    Raises
    ------
    ValueError
        If the file is empty, a column or the unit is missing, a value is not a number (the row is named), a
        wavelength is repeated, or k is negative.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> file = pathlib.Path(tempfile.mkdtemp()) / "film.txt"
    >>> _ = file.write_text("wavelength (nm);n;k\n400,0;0,49;4,84\n800,0;2,77;8,35\n")
    >>> read_index(file, decimal=",").at(800.0)
    (2.77+8.35j)
    """
    if decimal not in (".", ","):
        raise ValueError(f"decimal = {decimal!r}; give '.' or ','.")
    path = checked_path(path)
    lines = _content_lines(path)
    separator = _delimiter(lines[0][1], delimiter, decimal)
    names = list(columns) if columns is not None else _names(lines.pop(0)[1], separator)
    places = _find_columns(names, path)
    layout = _Layout(path, separator, decimal, len(names), places, _unit(names[places[0]], unit, path))
    if not lines:
        raise ValueError(f"{path} holds no row of numbers under its line of names; give wavelength, n and k.")
    rows = sorted(_row(layout, number, text) for number, text in lines)
    return IndexTable(
        tuple(wavelength for wavelength, _, _ in rows),
        tuple(complex(n, k) for _, n, k in rows),
        source=f"read from {path.name}",
    )


@dataclass(frozen=True)
class _Layout:
    """How a file writes its rows."""

    path: str | Path
    separator: str | None
    decimal: str
    columns: int
    places: tuple[int, int, int]
    unit: str


def _content_lines(path: Path) -> list[tuple[int, str]]:
    text = path.read_text(encoding="utf-8-sig")
    lines = [(i, line.strip()) for i, line in enumerate(text.splitlines(), start=1)]
    kept = [(i, line) for i, line in lines if line and not line.startswith("#")]
    if not kept:
        raise ValueError(f"{path} is empty; expected columns wavelength, n and k.")
    return kept


def _delimiter(first: str, given: str | None, decimal: str) -> str | None:
    if given == decimal:
        raise ValueError(f"delimiter and decimal are both {given!r}; a table needs two different signs.")
    if given is not None:
        return given
    marks = ("\t", ";", ",") if decimal == "." else ("\t", ";")
    return next((mark for mark in marks if mark in first), None)


def _names(line: str, separator: str | None) -> list[str]:
    if separator:
        return [cell.strip() for cell in line.split(separator)]
    # A unit in brackets after a blank belongs to the name before it.
    return re.sub(r"\s+([(\[])", r"\1", line).split()


def _bare(name: str) -> str:
    return re.sub(r"[\[(].*?[\])]|_(nm|um|µm|μm|ev)$", "", name.strip().lower()).strip()


def _find_columns(names: Sequence[str], path: str | Path) -> tuple[int, int, int]:
    bare = [_bare(name) for name in names]
    found = []
    for wanted, spellings in _HEADINGS.items():
        hits = [i for i, name in enumerate(bare) if name in spellings]
        if len(hits) != 1:
            raise ValueError(
                f"{path} has {len(hits)} columns for '{wanted}' among {list(names)}; name the columns "
                "wavelength, n and k in the file's first line, or pass columns=('wavelength', 'n', 'k')."
            )
        found.append(hits[0])
    return found[0], found[1], found[2]


def _unit(name: str, given: str | None, path: str | Path) -> str:
    if given is not None and given.lower() not in _UNITS:
        raise ValueError(f"unit = {given!r}; give 'nm', 'um' or 'eV'.")
    match = re.search(r"(?:[\[(]\s*|_)(nm|um|µm|μm|microns?|ev)\s*[\])]?$", name.strip().lower())
    written = _UNITS[match.group(1)] if match else None
    asked = _UNITS[given.lower()] if given is not None else None
    if written and asked and written != asked:
        raise ValueError(f"{path} writes '{name}' but unit={given!r} was passed; drop one of the two.")
    if not (written or asked):
        raise ValueError(f"{path} does not say the unit of '{name}'; pass unit='nm', 'um' or 'eV'.")
    return written or asked or ""


def _row(layout: _Layout, line: int, text: str) -> tuple[float, float, float]:
    cells = [cell.strip() for cell in text.split(layout.separator)]
    if len(cells) != layout.columns:
        raise ValueError(
            f"{layout.path}, line {line}: {len(cells)} values for {layout.columns} columns in '{text}'. If "
            "the file writes decimal commas, pass decimal=',' (and a delimiter other than tab or semicolon)."
        )
    wavelength, n, k = (_number(layout, line, cells[place]) for place in layout.places)
    return _to_nm(wavelength, layout.unit), n, k


def _number(layout: _Layout, line: int, cell: str) -> float:
    other = "." if layout.decimal == "," else ","
    hint = f" It holds '{other}': pass decimal='{other}'." if other in cell else ""
    try:
        value = float("" if hint else cell.replace(",", "."))
    except ValueError:
        raise ValueError(
            f"{layout.path}, line {line}: '{cell}' is not a number with decimal '{layout.decimal}'.{hint}"
        ) from None
    if not np.isfinite(value):
        raise ValueError(f"{layout.path}, line {line}: '{cell}' is not finite; delete the row.")
    return value


def _to_nm(value: float, unit: str) -> float:
    if unit == "eV":
        if value <= 0:
            raise ValueError(f"A photon energy of {value:g} eV is not positive; check the unit.")
        return _EV_NM / value
    return value * 1e3 if unit == "um" else value
