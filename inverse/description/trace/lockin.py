"""From the columns of a file to channels: a lock-in's two outputs turned, divided, or one of them taken."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from inverse.description.trace.checks import CHANNELS, TraceError
from inverse.description.trace.columns import Column

USUAL_UNITS = {
    "reflectance_change": "1",
    "optical_phase": "rad",
    "transmission_change": "1",
    "beam_deflection": "rad",
}
_Floats = NDArray[np.float64]


def to_channels(
    signals: dict[str, _Floats],
    chosen: Mapping[str, tuple[Column, ...]],
    phase: float | None,
    ratio: bool,
    assumptions: list[str],
) -> tuple[dict[str, _Floats], dict[str, str]]:
    """Make channels of columns, a lock-in's X and Y becoming one reflectance channel.

    Parameters
    ----------
    signals : dict of ndarray, shape (rows, scans)
        Columns by role.
    chosen : mapping
        Where they came from, for units and messages.
    phase : float or None
        Degrees; see `rotate`.
    ratio : bool
        Whether to take X' / Y'.
    assumptions : list of str
        What was assumed is added here.

    Returns
    -------
    tuple of dict
        Channels and their units.

    Raises
    ------
    TraceError
        If the lock-in's columns do not suffice, or nothing says what to take.
    """
    lockin: dict[str, _Floats] = {role: signals[role] for role in ("x", "y") if role in signals}
    channels = {name: signals[name] for name in CHANNELS if name in signals}
    units = {name: _common_unit(chosen[name]) or USUAL_UNITS[name] for name in channels}
    if not lockin:
        if phase is not None or ratio:
            raise TraceError(
                "lockin_phase and ratio need the lock-in's two channels; map columns={'x': ..., 'y': ...}"
            )
        return channels, units
    if "reflectance_change" in channels:
        raise TraceError(
            "the file has a reflectance change and lock-in channels; say with columns= which of them is "
            "the signal"
        )
    both = {*lockin} == {"x", "y"} and lockin["x"].shape == lockin["y"].shape
    channels["reflectance_change"] = _in_phase(lockin, both, phase, ratio, assumptions)
    units["reflectance_change"] = "1" if ratio else _common_unit(chosen["x"]) or "1"
    return channels, units


def _in_phase(
    lockin: dict[str, _Floats], both: bool, phase: float | None, ratio: bool, assumptions: list[str]
) -> _Floats:
    if not both:
        if phase is not None or ratio or "x" not in lockin:
            raise TraceError(
                "lockin_phase and ratio need as many X as Y columns of the lock-in, found "
                f"{', '.join(lockin)}; "
                "map columns={'x': ..., 'y': ...}"
            )
        assumptions.append("the in-phase column is the reflectance change as it stands")
        return lockin["x"]
    if phase is None and not ratio:
        raise TraceError(
            "the file has the lock-in's X and Y; pass lockin_phase= (degrees, 0 takes X as it stands) or "
            "ratio=True, "
            "or map the one column to use with columns="
        )
    turned, across = rotate(lockin["x"], lockin["y"], phase or 0.0)
    if not ratio:
        return turned
    if (np.sign(across) != np.sign(across.flat[0])).any():
        raise TraceError(
            "ratio: the out-of-phase channel passes through zero, so in phase over out of phase means "
            "nothing; "
            "set lockin_phase, or take the in-phase channel alone"
        )
    return turned / across


def rotate(x: _Floats, y: _Floats, degrees: float) -> tuple[_Floats, _Floats]:
    """Turn lock-in channels: X' = X cos + Y sin, Y' = Y cos - X sin.

    Parameters
    ----------
    x, y : ndarray
        In-phase and quadrature outputs, any unit.
    degrees : float
        Angle.

    Returns
    -------
    tuple of ndarray
        The turned channels.
    """
    cosine, sine = np.cos(np.deg2rad(degrees)), np.sin(np.deg2rad(degrees))
    return x * cosine + y * sine, y * cosine - x * sine


def _common_unit(columns: Sequence[Column]) -> str:
    found = {column.unit for column in columns}
    if len(found) > 1:
        labels = ", ".join(column.label for column in columns)
        raise TraceError(f"scans in different units: {labels}; bring them to one unit first")
    return found.pop()
