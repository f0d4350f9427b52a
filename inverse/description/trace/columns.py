"""Which column of a table is which channel: header words and units, or the user's own map."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from inverse.description.trace.checks import CHANNELS, TraceError
from inverse.description.trace.text_tables import TextTable

ROLES = ("delay", *CHANNELS, "x", "y", "scan")
ColumnChoice = str | int | Sequence[str | int]

_SIGNS = str.maketrans(
    {"Δ": "d", "δ": "d", "∆": "d", "φ": "phi", "ϕ": "phi", "Φ": "phi", "τ": "tau", "μ": "u", "µ": "u"}
)
_CHANGE = r"(d|delta|change(of|in)?)?"
_WORDS = {
    "delay": r"((pump)?probe|time|optical|stage)*(delay|position|time|tau|t|stage)(stage|time|position)?",
    "reflectance_change": r"d(elta)?r((over|by|div)?r)?|" + _CHANGE + r"reflect(ance|ivity)(change)?",
    "optical_phase": r"d(elta)?ph(i|ase)|optical(d|delta)?phase(change)?|phase(change|shift)|phi",
    "transmission_change": r"d(elta)?t(over|by|div)?t|" + _CHANGE + r"transmi(ssion|ttance)(change)?",
    "beam_deflection": r"(probe|beam)?deflection(angle)?|beamdeflectionchange",
    "x": r"(lockin)?x|inphase|vin",
    "y": r"(lockin)?y|outofphase|quadrature|vout",
    "scan": r"scan(number|no|index)?|run|sweep|repeat",
}
_TIME_UNITS = {u: (u, 1.0) for u in ("fs", "ps", "ns", "us", "s", "mm", "um")}
_VOLTS = {"v": ("V", 1.0), "mv": ("mV", 1.0), "uv": ("uV", 1.0), "nv": ("nV", 1.0)}
_CHANGE_UNITS = {"percent": ("1", 1e-2), "ppm": ("1", 1e-6)} | _VOLTS
_DEGREE = 0.017453292519943295
_PHASE_UNITS = {
    "rad": ("rad", 1.0),
    "mrad": ("rad", 1e-3),
    "urad": ("rad", 1e-6),
    "deg": ("rad", _DEGREE),
} | _VOLTS
_UNITS: dict[str, dict[str, tuple[str, float]]] = {
    "delay": _TIME_UNITS,
    "reflectance_change": _CHANGE_UNITS,
    "optical_phase": _PHASE_UNITS,
    "transmission_change": _CHANGE_UNITS,
    "beam_deflection": _PHASE_UNITS,
    "x": _CHANGE_UNITS,
    "y": _CHANGE_UNITS,
    "scan": {},
}


@dataclass(frozen=True)
class Column:
    """One column and what it holds.

    Attributes
    ----------
    index : int
        Position in the table, from 0.
    label : str
        Header, or the position where there is none.
    unit : str
        Unit after multiplication with `factor`; empty where the header says none.
    factor : float
        From the unit in the header to `unit`.
    number : int or None
        Trailing number in the header, of a scan.
    """

    index: int
    label: str
    unit: str = ""
    factor: float = 1.0
    number: int | None = None


def find_columns(
    table: TextTable, columns: Mapping[str, ColumnChoice] | None, name: str
) -> dict[str, tuple[Column, ...]]:
    """Columns of a table by role; several of one role are repeated scans.

    Parameters
    ----------
    table : TextTable
        The table.
    columns : mapping or None
        The user's map, from role to header, number (from 0) or several of them; None reads the header's
        words.
    name : str
        File name for messages.

    Returns
    -------
    dict
        From role to columns; ``delay`` and at least one signal are always there.

    Raises
    ------
    TraceError
        If a column is missing, or its role cannot be told.
    """
    width = table.values.shape[1]
    if width < 2:
        raise TraceError(
            f"{name} has too few columns: {width}, expected a delay and at least one signal; "
            "if columns are divided by an unusual mark, pass separator="
        )
    if columns is not None:
        found = {role: _chosen(table, role, choice, name) for role, choice in columns.items()}
    elif not table.names or (table.named_in_comment and recognise(table.names[0], 0) is None):
        found = _without_header(width, name)
    else:
        found = _from_header(table, name)
    _refuse_incomplete(found, table, name)
    return found


def recognise(header: str, index: int) -> tuple[str, Column] | None:
    """Role of a column from its header's words and unit, or None."""
    tokens = re.findall(r"[a-z]+|\d+", header.translate(_SIGNS).lower().replace("%", " percent "))
    number = int(tokens.pop()) if len(tokens) > 1 and tokens[-1].isdigit() else None
    per_fluence = tokens[-2:] == ["per", "fluence"]
    words = tokens[:-2] if per_fluence else tokens
    for role, pattern in _WORDS.items():
        for unit, (stored, factor) in {"": ("", 1.0), **_UNITS[role]}.items():
            body = words[:-1] if unit and words and words[-1] == unit else words
            if (not unit or body is not words) and re.fullmatch(pattern, "".join(body)):
                stored = "per unit fluence" if per_fluence else stored
                return role, Column(index, header, stored, factor, number)
    return None


def describe_columns(table: TextTable) -> str:
    """Columns of a table for a message: ``0: 'delay_ps', 1: 'dR'``."""
    names = table.names or ("",) * table.values.shape[1]
    return ", ".join(f"{i}: {n!r}" if n else str(i) for i, n in enumerate(names))


def _chosen(table: TextTable, role: str, choice: ColumnChoice, name: str) -> tuple[Column, ...]:
    if role not in ROLES:
        raise TraceError(f"columns has the key {role!r}; expected some of {', '.join(ROLES)}")
    several = [choice] if isinstance(choice, (str, int)) else list(choice)
    return tuple(_one_chosen(table, role, item, name) for item in several)


def _one_chosen(table: TextTable, role: str, item: str | int, name: str) -> Column:
    width = table.values.shape[1]
    if isinstance(item, str):
        hits = [i for i, n in enumerate(table.names) if n == item]
    else:
        hits = [item] if 0 <= item < width else []
    if len(hits) != 1:
        problem = "no column" if not hits else "several columns called"
        raise TraceError(
            f"{name} has {problem} {item!r} for {role}; its columns are {describe_columns(table)} (numbers "
            "from 0)"
        )
    label = table.names[hits[0]] if table.names else str(hits[0])
    return _with_unit(role, Column(hits[0], label))


def _with_unit(role: str, column: Column) -> Column:
    """Read the unit that the header of a mapped column ends in, if any."""
    tokens = re.findall(r"[a-z]+", column.label.translate(_SIGNS).lower().replace("%", " percent "))
    if tokens[-2:] == ["per", "fluence"]:
        return Column(column.index, column.label, "per unit fluence")
    unit, factor = _UNITS[role].get(tokens[-1] if len(tokens) > 1 else "", ("", 1.0))
    return Column(column.index, column.label, unit, factor)


def _without_header(width: int, name: str) -> dict[str, tuple[Column, ...]]:
    if width != 2:
        raise TraceError(
            f"{name} has {width} columns and no header; pass columns=, for instance "
            "columns={'delay': 0, 'reflectance_change': 1} (numbers from 0)"
        )
    return {"delay": (Column(0, "0"),), "reflectance_change": (Column(1, "1"),)}


def _from_header(table: TextTable, name: str) -> dict[str, tuple[Column, ...]]:
    found: dict[str, list[Column]] = {}
    for index, header in enumerate(table.names):
        hit = recognise(header, index)
        if hit is not None:
            found.setdefault(hit[0], []).append(hit[1])
    for role, several in found.items():
        numbered = {column.number for column in several} - {None}
        if len(several) > 1 and (role in ("delay", "scan") or len(numbered) < len(several)):
            labels = ", ".join(repr(column.label) for column in several)
            raise TraceError(
                f"{name} has several columns that could be {role}: {labels}; "
                f"say which with columns={{'{role}': ...}}, or number repeated scans in the header (dR_1, "
                "dR_2)"
            )
    return {role: tuple(several) for role, several in found.items()}


def _refuse_incomplete(found: Mapping[str, tuple[Column, ...]], table: TextTable, name: str) -> None:
    listed = f"its columns are {describe_columns(table)}"
    mend = "map them with columns={'delay': ..., 'reflectance_change': ...}, by header or number from 0"
    if "delay" not in found:
        raise TraceError(f"no delay column found in {name}: {listed}; {mend}")
    if not any(role in found for role in (*CHANNELS, "x", "y")):
        raise TraceError(f"no signal column found in {name}: {listed}; {mend}")
    for role in ("delay", "scan"):
        if len(found.get(role, ())) > 1:
            raise TraceError(f"columns maps {role} to several columns of {name}; there can be one; {listed}")
