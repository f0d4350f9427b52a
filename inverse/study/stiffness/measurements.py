"""What is measured of a crystal's sound: velocities, Brillouin shifts and echo times along directions."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import check
from inverse.description.unknowns import checked
from inverse.elastic import BRANCHES, crystal_direction

__all__ = [
    "BrillouinShift",
    "EchoTime",
    "Measurement",
    "Velocity",
    "candidates",
    "named",
    "velocities",
]

Array = NDArray[np.float64]

_SETS = {"transverse": BRANCHES[1:], "unknown": BRANCHES}
_COLUMNS = ("direction", "velocity", "uncertainty")
_MORE_COLUMNS = ("branch", "density", "name")


@dataclass(frozen=True, eq=False, kw_only=True)
class Measurement:
    """One number measured of a wave along a direction.

    Parameters
    ----------
    direction : str or array_like, shape (3,)
        Direction of the wave vector, as `inverse.elastic.crystal_direction` takes it.
    value : float
        What was measured.
    uncertainty : float
        Its standard uncertainty, in the same unit.
    branch : str or sequence of str, optional
        One of `inverse.elastic.BRANCHES`; ``"transverse"`` where it is not known which of the two; several
        names; or ``"unknown"`` (or None), any of the three. Where it is not one, all are weighed alike.
    density : float, frozen scipy.stats distribution or Unknown, optional
        Of this specimen in g/cm3; by default that of the problem.
    name : str
        Name in results and of this measurement's own unknowns; by default m1, m2, ... by its place.

    Raises
    ------
    ValueError
        If a value is out of range, looks like another unit, or the branch is not known.
    """

    direction: Any
    value: float
    uncertainty: float
    branch: Any = None
    density: Any = None
    name: str = ""

    field: ClassVar[str] = "velocity"

    def __post_init__(self) -> None:
        where = self.name or type(self).__name__
        object.__setattr__(self, "value", check(self.field, self.value, where))
        object.__setattr__(self, "uncertainty", _uncertainty(self, where))
        object.__setattr__(self, "branch", candidates(self.branch, where))
        if self.density is not None:
            checked("density", self.density, where)
        if set(self.name) & set("|#/."):
            raise ValueError(f"Measurement name {self.name!r}: leave out '|', '#', '/' and '.'.")

    @property
    def power(self) -> int:
        """Power of the velocity to which the measured number is proportional."""
        return 1

    def factor(self) -> float:
        """Return what the velocity (to its power) is multiplied with, unknowns apart."""
        return 1.0

    def unknowns(self) -> dict[str, Any]:
        """Return what else enters as a factor, a number or a prior: quantity -> value."""
        return {}


@dataclass(frozen=True, eq=False, kw_only=True)
class Velocity(Measurement):
    """A measured phase velocity in nm/ps (= km/s); see `Measurement`.

    Examples
    --------
    >>> Velocity(direction="110", value=9.14, uncertainty=0.01, branch="longitudinal").branch
    ('longitudinal',)
    """


@dataclass(frozen=True, eq=False, kw_only=True)
class BrillouinShift(Measurement):
    """A measured Brillouin shift ``f = (2 n v / lambda) sin(theta / 2)`` in THz; see `Measurement`.

    Parameters
    ----------
    wavelength : float
        Vacuum wavelength in nm.
    refractive_index : float, frozen scipy.stats distribution or Unknown
        n in the scattering medium. 1 where light enters and leaves a plate symmetrically and `angle` is the
        one outside: there n drops out by Snell's law.
    angle : float
        Angle between incident and scattered light inside the medium, degrees; 180 is backscattering.

    References
    ----------
    Vialla et al., arXiv:1109.3531, for the relation.
    """

    wavelength: float
    refractive_index: Any
    angle: float = 180.0

    field: ClassVar[str] = "brillouin_shift"

    def __post_init__(self) -> None:
        super().__post_init__()
        where = self.name or "BrillouinShift"
        check("wavelength", self.wavelength, where)
        check("scattering_angle", self.angle, where)
        checked("n_real", self.refractive_index, where)

    def factor(self) -> float:
        """Return 2 sin(theta / 2) / lambda in 1/nm."""
        return float(2 * np.sin(np.deg2rad(self.angle) / 2) / self.wavelength)

    def unknowns(self) -> dict[str, Any]:
        """Return the refractive index."""
        return {"n_real": self.refractive_index}


@dataclass(frozen=True, eq=False, kw_only=True)
class EchoTime(Measurement):
    """A measured time ``t = 2 d / v`` of an echo through a layer and back, in ps; see `Measurement`.

    Parameters
    ----------
    thickness : float, frozen scipy.stats distribution or Unknown
        d in nm.
    """

    thickness: Any

    field: ClassVar[str] = "echo_time"

    def __post_init__(self) -> None:
        super().__post_init__()
        checked("thickness", self.thickness, self.name or "EchoTime")

    @property
    def power(self) -> int:
        """Minus one: the time falls with the velocity."""
        return -1

    def factor(self) -> float:
        """Return 2: there and back."""
        return 2.0

    def unknowns(self) -> dict[str, Any]:
        """Return the thickness."""
        return {"thickness": self.thickness}


def candidates(branch: Any, where: str) -> tuple[str, ...]:
    """Return the branches a label admits, in the order of `BRANCHES`.

    Raises
    ------
    ValueError
        If a name is not known.
    """
    given = ("unknown",) if branch is None else (branch,) if isinstance(branch, str) else tuple(branch)
    names = [name for label in given for name in _SETS.get(label, (label,))]
    strange = [str(name) for name in names if name not in BRANCHES]
    if strange or not names:
        raise ValueError(
            f"{where} got branch {branch!r}; expected one of {', '.join(BRANCHES)}, 'transverse' for either "
            "of two, 'unknown' for any, or several of these."
        )
    return tuple(name for name in BRANCHES if name in names)


def _uncertainty(given: Measurement, where: str) -> float:
    try:
        number = float(given.uncertainty)
    except (TypeError, ValueError):
        number = np.nan
    if not (np.isfinite(number) and number > 0):
        raise ValueError(
            f"{where} got uncertainty {given.uncertainty!r}; give a positive standard uncertainty in the "
            "value's unit."
        )
    return number


def velocities(table: Any) -> tuple[Velocity, ...]:
    """Read a table of velocities.

    Parameters
    ----------
    table : mapping of str to sequence, or pandas.DataFrame
        Columns ``direction``, ``velocity`` (nm/ps) and ``uncertainty``, and if need be ``branch``,
        ``density`` and ``name``; see `Measurement`.

    Returns
    -------
    tuple of Velocity

    Raises
    ------
    ValueError
        If a column is missing, unknown or of another length, or a row is not usable; the message names it.

    Examples
    --------
    >>> rows = velocities({"direction": ["100"], "velocity": [8.44], "uncertainty": [0.01]})
    >>> rows[0].branch
    ('longitudinal', 'fast transverse', 'slow transverse')
    """
    columns = {str(key): list(table[key]) for key in table}
    missing = [c for c in _COLUMNS if c not in columns]
    strange = [c for c in columns if c not in (*_COLUMNS, *_MORE_COLUMNS)]
    if missing or strange:
        raise ValueError(
            f"The table has the columns {', '.join(columns) or 'none'}; it needs {', '.join(_COLUMNS)} and "
            f"may have {', '.join(_MORE_COLUMNS)}."
        )
    lengths = {name: len(column) for name, column in columns.items()}
    if len(set(lengths.values())) > 1:
        raise ValueError(f"The table's columns differ in length: {lengths}.")
    return tuple(
        _row({name: column[i] for name, column in columns.items()}, i) for i in range(lengths["direction"])
    )


def _row(cells: Mapping[str, Any], i: int) -> Velocity:
    try:
        return Velocity(
            direction=cells["direction"],
            value=cells["velocity"],
            uncertainty=cells["uncertainty"],
            branch=_filled(cells.get("branch")),
            density=_filled(cells.get("density")),
            name=_filled(cells.get("name")) or "",
        )
    except ValueError as error:
        raise ValueError(f"Row {i + 1} of the table: {error}") from None


def _filled(cell: Any) -> Any:
    """Return None for an empty cell, which a DataFrame holds as nan."""
    empty = isinstance(cell, float) and np.isnan(cell)
    return None if empty or (isinstance(cell, str) and not cell.strip()) else cell


def named(measurements: Sequence[Measurement], symmetry: str) -> tuple[tuple[str, ...], Array]:
    """Return a name for each measurement and the unit vectors, shape (k, 3), of their directions.

    Raises
    ------
    ValueError
        If there are none, a name repeats, a direction means nothing in the symmetry or has zero length, or
        two labels contradict each other.
    """
    if not measurements:
        raise ValueError("No measurements were given; expected Velocity, BrillouinShift or EchoTime objects.")
    strange = [m for m in measurements if not isinstance(m, Measurement)]
    if strange:
        raise ValueError(f"{strange[0]!r} is no measurement; expected Velocity, BrillouinShift or EchoTime.")
    names = tuple(m.name or f"m{i + 1}" for i, m in enumerate(measurements))
    if len(set(names)) < len(names):
        twice = sorted({n for n in names if names.count(n) > 1})
        raise ValueError(f"The name {', '.join(twice)} stands for several measurements; give each its own.")
    directions = np.stack(
        [_direction(m, name, symmetry) for m, name in zip(measurements, names, strict=True)]
    )
    _refuse_contradictions(measurements, names, directions)
    return names, directions


def _direction(given: Measurement, name: str, symmetry: str) -> Array:
    try:
        unit = crystal_direction(given.direction, symmetry)
    except ValueError as error:
        raise ValueError(f"{name}: {error}") from None
    if unit.shape != (3,):
        raise ValueError(f"{name} got directions of shape {unit.shape}; a measurement has one direction.")
    return unit


_LIMIT = 6.0
"""Combined standard uncertainties beyond which two statements about one wave exclude each other."""


def _refuse_contradictions(
    measurements: Sequence[Measurement], names: Sequence[str], directions: Array
) -> None:
    plain = [i for i, m in enumerate(measurements) if m.field == "velocity" and m.density is None]
    for a in plain:
        for b in plain:
            if a != b and abs(directions[a] @ directions[b]) > 1 - 1e-9:
                _refuse_pair(measurements[a], measurements[b], names[a], names[b])


def _refuse_pair(a: Measurement, b: Measurement, first: str, second: str) -> None:
    excess = (b.value - a.value) / np.hypot(a.uncertainty, b.uncertainty)
    if len(a.branch) == 1 and a.branch == b.branch and abs(excess) > _LIMIT:
        raise ValueError(
            f"{first} = {a.value:g} and {second} = {b.value:g} nm/ps are both labelled {a.branch[0]} along "
            f"one direction but differ by {abs(excess):.1f} combined standard uncertainties: the labels "
            "contradict the values. Correct a label or a value, or give branch='unknown'."
        )
    if (a.branch, b.branch) == (BRANCHES[1:2], BRANCHES[2:]) and excess > _LIMIT:
        raise ValueError(
            f"{first} = {a.value:g} nm/ps is labelled {a.branch[0]} and {second} = {b.value:g} nm/ps "
            f"{b.branch[0]} along one direction, but the slow one is faster: the labels contradict the "
            "values. Exchange them, or give branch='transverse'."
        )
