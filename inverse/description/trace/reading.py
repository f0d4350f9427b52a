"""Traces: what a pump-probe bench measured, read from a file or built from arrays, checked and with units."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from inverse.description.arguments import checked_path
from inverse.description.trace.checks import (
    CHANNELS,
    TraceError,
    channels_of,
    check_trace,
    refuse_disorder,
    refuse_non_finite,
    refuse_unreal,
)
from inverse.description.trace.columns import Column, ColumnChoice, find_columns
from inverse.description.trace.lockin import USUAL_UNITS, to_channels
from inverse.description.trace.text_tables import TextTable, read_table

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["CHANNELS", "TraceError", "channels_of", "check_trace", "make_trace", "read_trace"]

SPEED_OF_LIGHT = 0.299792458
"""Speed of light in vacuum, mm/ps (exact by the SI's definition of the metre)."""

REPAIRS = ("drop_nan", "sort", "average_repeats")
_LONG_NAMES = {
    "reflectance_change": "reflectance change dR/R",
    "optical_phase": "change of the phase of the reflected light",
    "transmission_change": "transmission change dT/T",
    "beam_deflection": "deflection of the reflected beam",
}
_TO_PICOSECONDS = {"fs": 1e-3, "ps": 1.0, "ns": 1e3, "us": 1e6, "s": 1e12}
_TO_MILLIMETRES = {"mm": 1.0, "um": 1e-3}
_Floats = NDArray[np.float64]


def make_trace(
    delay: ArrayLike,
    *,
    reflectance_change: ArrayLike | None = None,
    optical_phase: ArrayLike | None = None,
    transmission_change: ArrayLike | None = None,
    beam_deflection: ArrayLike | None = None,
    units: Mapping[str, str] | None = None,
    attrs: Mapping[str, str | int | float] | None = None,
    measured: bool = True,
) -> xr.Dataset:
    """Build a checked trace from arrays.

    Parameters
    ----------
    delay : array_like, shape (n,)
        Delay of the probe after the pump, ps, strictly increasing.
    reflectance_change, optical_phase, transmission_change, beam_deflection : array_like, shape (n,), optional
        The channels, at least one. Dimensionless, rad, dimensionless and rad unless `units` says otherwise.
    units : mapping of channel name to str, optional
        Units where they are not the usual ones, such as ``{"reflectance_change": "uV"}``.
    attrs : mapping, optional
        What else to keep beside the data.
    measured : bool
        False for a simulated trace, which may have few points or a constant signal.

    Returns
    -------
    xarray.Dataset
        Data variables on the coordinate ``delay``, each with ``units`` and ``long_name``.

    Raises
    ------
    TraceError
        If anything would have to be dropped, sorted or guessed; see `check_trace`.

    Examples
    --------
    >>> import numpy as np
    >>> delay = np.linspace(-5, 50, 276)
    >>> make_trace(delay, reflectance_change=1e-5 * (delay > 0)).sizes["delay"]
    276
    """
    signals_given = (reflectance_change, optical_phase, transmission_change, beam_deflection)
    given = dict(zip(CHANNELS, signals_given, strict=True))
    times = _as_vector("delay", delay)
    signals = {name: _as_vector(name, values) for name, values in given.items() if values is not None}
    for name, values in signals.items():
        if values.size != times.size:
            raise TraceError(
                f"{name} has {values.size} points and delay has {times.size}; give one value per delay"
            )
    for name in units or {}:
        if name not in signals:
            raise TraceError(
                f"units names {name!r}, which is not a channel given here ({', '.join(signals)})"
            )
    if not signals:
        raise TraceError(f"no channel given; expected at least one of {', '.join(CHANNELS)}")
    return check_trace(_dataset(times, signals, units or {}, attrs or {}), measured=measured)


def read_trace(
    path: str | Path,
    *,
    columns: Mapping[str, ColumnChoice] | None = None,
    delay_unit: str | None = None,
    passes: int = 2,
    stage_zero: float = 0.0,
    header_lines: int | None = None,
    decimal: str = ".",
    separator: str | None = None,
    repair: Sequence[str] = (),
    lockin_phase: float | None = None,
    ratio: bool = False,
) -> xr.Dataset:
    """Read a pump-probe trace from a text file.

    Columns are recognised from the words of the header (``delay_ps,dR_over_R``) or named in `columns`.
    One column per
    scan (``dR_1,dR_2``, or several in `columns`), or a scan number beside each row, gives the mean, its
    standard error
    ``<channel>_scatter`` and the count ``<channel>_scans``. Per cent, ppm, mrad, urad and degrees become
    1 and rad.

    Parameters
    ----------
    path : str or Path
        Text file. Lines that start with ``#`` are kept in ``attrs["comment"]``.
    columns : mapping, optional
        From ``delay``, ``reflectance_change``, ``optical_phase``, ``transmission_change``, ``x``, ``y``
        (lock-in
        channels) and ``scan`` to the column's header, or its number counted from 0, or several of these,
        one per scan.
        Where it is given, no other column is read.
    delay_unit : {"fs", "ps", "ns", "us", "s", "mm", "um"}, optional
        Unit of the delay column; by default the header's, or else ps.
        With ``mm`` or ``um`` it is a stage position: delay = passes (position - stage_zero) / c.
    passes : int
        How often the light runs along the stage's travel, 2 for one retroreflector; negative if a larger
        position
        means a shorter delay.
    stage_zero : float
        Stage position at zero delay, in `delay_unit`.
    header_lines : int, optional
        Lines above the numbers; by default all lines above the first row of numbers.
    decimal : {".", ","}
        Decimal mark.
    separator : str, optional
        Mark between columns, ``" "`` for any run of blanks; by default found from the first row of numbers.
    repair : sequence of {"drop_nan", "sort", "average_repeats"}
        What may be mended. Each repair is counted in attrs; without it the fault is an error.
    lockin_phase : float, optional
        Degrees by which the lock-in's X and Y are turned: X' = X cos + Y sin, Y' = Y cos - X sin. X' becomes
        the reflectance change. ``0`` takes X as it stands.
    ratio : bool
        Take X' / Y' (in phase over out of phase), free of the laser's slow drift, as the reflectance change.

    Returns
    -------
    xarray.Dataset
        See `make_trace`. attrs: ``source`` (file name), ``columns``, ``columns_not_read``,
        ``assumptions``, ``comment``,
        ``rows_dropped_nan``, ``rows_sorted``, ``repeats_averaged``.

    Raises
    ------
    TableError
        If the file is missing, empty, binary, ragged or in another decimal mark.
    TraceError
        If a column cannot be told, or the numbers need a repair that was not asked for.
    """
    allowed = _checked_repairs(repair)
    path = checked_path(path)
    name = path.name
    table = read_table(path, header_lines=header_lines, decimal=decimal, separator=separator)
    chosen = find_columns(table, columns, name)
    unit, assumptions = _delay_unit(delay_unit, chosen["delay"][0], table)
    attrs = _file_attrs(name, table, chosen)
    rows = _read_rows(table, chosen).without_nan(allowed, attrs, name)
    delay = _to_picoseconds(rows.delay, unit, passes, stage_zero)
    signals, units = to_channels(rows.signals, chosen, lockin_phase, ratio, assumptions)
    delay, signals = _collect_scans(delay, signals, rows.scan, allowed, attrs)
    attrs["assumptions"] = "; ".join(assumptions)
    return check_trace(_averaged(delay, signals, units, attrs))


@dataclass(frozen=True)
class _Rows:
    """The numbers in use: delay (n,), signals (n, scans) by role, scan numbers (n,) or None."""

    delay: _Floats
    signals: dict[str, _Floats]
    scan: _Floats | None
    lines: NDArray[np.int64]

    def without_nan(self, repairs: frozenset[str], attrs: dict[str, Any], file: str) -> _Rows:
        """Rows without NaN, if that repair is allowed; infinite numbers are always refused."""
        parts = [self.delay[:, None], *self.signals.values()]
        table = np.hstack(parts if self.scan is None else [*parts, self.scan[:, None]])
        bad = np.isnan(table).any(axis=1)
        attrs["rows_dropped_nan"] = int(np.count_nonzero(bad))
        if bad.any() and "drop_nan" not in repairs:
            raise TraceError(
                f"{file} has {np.count_nonzero(bad)} row(s) with NaN or an empty field, the first in line "
                f"{self.lines[np.argmax(bad)]}; pass repair=('drop_nan',) to leave them out"
            )
        infinite = np.isinf(table).any(axis=1)
        if infinite.any():
            raise TraceError(
                f"{file} has {np.count_nonzero(infinite)} row(s) with an infinite number, the first in line "
                f"{self.lines[np.argmax(infinite)]}; mend or remove them in the file"
            )
        keep = ~bad
        signals = {role: values[keep] for role, values in self.signals.items()}
        return _Rows(
            self.delay[keep], signals, None if self.scan is None else self.scan[keep], self.lines[keep]
        )


def _checked_repairs(repair: Sequence[str]) -> frozenset[str]:
    names = (repair,) if isinstance(repair, str) else tuple(repair)
    for name in names:
        if name not in REPAIRS:
            raise TraceError(f"repair has {name!r}; expected some of {', '.join(REPAIRS)}")
    return frozenset(names)


def _delay_unit(given: str | None, column: Column, table: TextTable) -> tuple[str, list[str]]:
    """Find the unit of the delay column and what was assumed about the file."""
    known = (*_TO_PICOSECONDS, *_TO_MILLIMETRES)
    if given is not None and given not in known:
        raise TraceError(f"delay_unit is {given!r}; expected one of {', '.join(known)}")
    if given and column.unit and given != column.unit:
        raise TraceError(
            f"delay_unit is {given!r} but the header {column.label!r} says {column.unit}; mend one of them"
        )
    assumed = [] if table.names else ["the file has no header: columns taken by position"]
    if not (given or column.unit):
        assumed.append("delay in ps: neither the header nor delay_unit says its unit")
    return given or column.unit or "ps", assumed


def _file_attrs(name: str, table: TextTable, chosen: Mapping[str, tuple[Column, ...]]) -> dict[str, Any]:
    used = {column.index for found in chosen.values() for column in found}
    labels = {role: [column.label for column in found] for role, found in chosen.items()}
    return {
        "source": name,
        "comment": table.comment,
        "columns": json.dumps(labels, ensure_ascii=False),
        "columns_not_read": ", ".join(n for i, n in enumerate(table.names) if i not in used),
    }


def _read_rows(table: TextTable, chosen: Mapping[str, tuple[Column, ...]]) -> _Rows:
    def values(role: str) -> _Floats:
        found = chosen[role]
        return table.values[:, [c.index for c in found]] * np.array([c.factor for c in found])

    signals = {role: values(role) for role in chosen if role not in ("delay", "scan")}
    scan = values("scan")[:, 0] if "scan" in chosen else None
    return _Rows(table.values[:, chosen["delay"][0].index], signals, scan, table.lines)


def _to_picoseconds(delay: _Floats, unit: str, passes: int, stage_zero: float) -> _Floats:
    """Delay in ps; a stage position gives passes (position - stage_zero) / c."""
    if unit in _TO_MILLIMETRES:
        if passes == 0:
            raise TraceError("passes is 0; give how often the light runs along the stage's travel, usually 2")
        return passes * (delay - stage_zero) * _TO_MILLIMETRES[unit] / SPEED_OF_LIGHT
    if stage_zero:
        raise TraceError(
            f"stage_zero is {stage_zero:g} but the delay is in {unit}; it goes with delay_unit='mm' or 'um'"
        )
    return delay * _TO_PICOSECONDS[unit]


def _collect_scans(
    delay: _Floats,
    signals: dict[str, _Floats],
    scan: _Floats | None,
    repairs: frozenset[str],
    attrs: dict[str, Any],
) -> tuple[_Floats, dict[str, _Floats]]:
    """One row per delay and one column per scan, in order, after the repairs that were asked for."""
    attrs["rows_sorted"] = attrs["repeats_averaged"] = 0
    members = (
        [np.ones(delay.size, bool)] if scan is None else [scan == s for s in dict.fromkeys(scan.tolist())]
    )
    blocks = [
        _mend_order(delay[m], {name: v[m] for name, v in signals.items()}, repairs, attrs) for m in members
    ]
    first = blocks[0][0]
    for number, (times, _) in enumerate(blocks[1:], 2):
        if times.shape != first.shape or not np.allclose(times, first, rtol=0.0, atol=1e-6):
            raise TraceError(
                f"scan {number} was not taken at the delays of scan 1 ({times.size} and {first.size} "
                "points); "
                "bring the scans to common delays first, or read them as separate traces"
            )
    return first, {name: np.hstack([block[name] for _, block in blocks]) for name in signals}


def _mend_order(
    delay: _Floats, signals: dict[str, _Floats], repairs: frozenset[str], attrs: dict[str, Any]
) -> tuple[_Floats, dict[str, _Floats]]:
    if "sort" in repairs:
        order = np.argsort(delay, kind="stable")
        attrs["rows_sorted"] += int(np.count_nonzero(order != np.arange(delay.size)))
        delay, signals = delay[order], {name: values[order] for name, values in signals.items()}
    if "average_repeats" in repairs and (np.diff(delay) >= 0).all():
        unique, start = np.unique(delay, return_index=True)
        count = np.diff(np.append(start, delay.size))[:, None]
        attrs["repeats_averaged"] += int(delay.size - unique.size)
        signals = {name: np.add.reduceat(values, start, axis=0) / count for name, values in signals.items()}
        delay = unique
    refuse_non_finite("delay", delay)
    refuse_disorder(delay)
    return delay, signals


def _averaged(
    delay: _Floats, scans: Mapping[str, _Floats], units: Mapping[str, str], attrs: Mapping[str, Any]
) -> xr.Dataset:
    """Build the Dataset of scan means, with the standard error of the mean where there are several."""
    trace = _dataset(delay, {name: values.mean(axis=1) for name, values in scans.items()}, units, attrs)
    for name, values in scans.items():
        count = values.shape[1]
        if count > 1:
            scatter = values.std(axis=1, ddof=1) / np.sqrt(count)
            about = {
                "units": trace[name].attrs["units"],
                "long_name": f"standard error of the mean of {name}",
            }
            trace[f"{name}_scatter"] = ("delay", scatter, about)
            counts = np.full(delay.size, count)
            trace[f"{name}_scans"] = (
                "delay",
                counts,
                {"units": "1", "long_name": f"scans averaged in {name}"},
            )
    return trace


def _dataset(
    delay: _Floats, signals: Mapping[str, _Floats], units: Mapping[str, str], attrs: Mapping[str, Any]
) -> xr.Dataset:
    import xarray as xr

    variables = {
        name: (
            "delay",
            values,
            {"units": units.get(name, USUAL_UNITS[name]), "long_name": _LONG_NAMES[name]},
        )
        for name, values in signals.items()
    }
    about = {"units": "ps", "long_name": "delay of the probe after the pump"}
    return xr.Dataset(variables, coords={"delay": ("delay", delay, about)}, attrs=dict(attrs))


def _as_vector(name: str, values: ArrayLike) -> _Floats:
    """Copy a one-dimensional array of floats."""
    refuse_unreal(name, values)
    try:
        vector = np.array(values, dtype=float)
    except (TypeError, ValueError) as error:
        raise TraceError(f"{name} is not numbers: {error}; give a one-dimensional array of floats") from error
    if vector.ndim != 1:
        raise TraceError(f"{name} has shape {vector.shape}; expected one dimension, one value per delay")
    return vector
