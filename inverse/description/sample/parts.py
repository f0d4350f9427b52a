"""The parts a stack is drawn with: layers, bonds, a substrate, repeated periods and graded layers."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields
from typing import Any

from inverse.description.arguments import whole_number
from inverse.description.material.properties import Material, material
from inverse.description.sample.overrides import GIVEN, MATERIAL_FIELDS, fill_medium
from inverse.description.unknowns import checked, shown

__all__ = [
    "EMPTY",
    "Graded",
    "Interface",
    "Layer",
    "Medium",
    "Part",
    "Repeat",
    "Slice",
    "Substrate",
    "unroll",
]

EMPTY = ("air", "vacuum")
"""What stands above or below a stack and carries neither sound nor heat."""


@dataclass(frozen=True, init=False, eq=False)
class Layer:
    """A layer of the stack.

    Parameters
    ----------
    material : str or Material
        Reference name or a material of the user's.
    thickness : float, frozen scipy.stats distribution or Unknown
        Thickness in nm.
    thickness_spread : float, frozen scipy.stats distribution or Unknown
        Rms variation of the thickness under the spot in nm.
    orientation : str or array_like, shape (3,), optional
        Cut of a single crystal: for reference materials that need one, and with ``stiffness`` any direction.
    **overrides
        Material fields (numbers, distributions, unknowns), or ``density_ratio`` (to the substrate)
        instead of ``density``. With ``stiffness`` (constants in GPa, which become ``Al.c11`` and so on) the
        velocity follows from the constants and the orientation.

    Raises
    ------
    ValueError
        If a field is unknown to `Material`, out of range, or given twice in contradiction.

    Notes
    -----
    Reference values are the bulk's. A deposited film's velocity and density differ by some per cent;
    give them priors that admit it (`film_prior`).
    """

    material: Material
    thickness: Any
    density_ratio: Any
    thickness_spread: Any

    def __init__(
        self,
        material: str | Material,
        *,
        thickness: Any,
        thickness_spread: Any = 0.0,
        orientation: Any = None,
        **overrides: Any,
    ) -> None:
        checked("thickness", thickness, _name_of(material))
        checked("thickness_spread", thickness_spread, _name_of(material))
        object.__setattr__(self, "thickness", thickness)
        object.__setattr__(self, "thickness_spread", thickness_spread)
        fill_medium(self, material, orientation, overrides)

    def __repr__(self) -> str:
        """Write the material and what was given."""
        return f"Layer({_said(self, 'thickness', 'thickness_spread', 'density_ratio')})"


@dataclass(frozen=True, init=False, eq=False)
class Substrate:
    """The half-space under the stack.

    Parameters
    ----------
    material : str or Material
        Reference name or a material of the user's; ``"vacuum"`` (or ``"air"``) leaves the last layer free:
        a membrane, or a wafer with its back echo.
    orientation : str, optional
        Cut of a single crystal, such as ``"100"``.
    **overrides
        Material fields.

    Raises
    ------
    ValueError
        As for `Layer`; a substrate has no ``density_ratio``, and vacuum has nothing to override.
    """

    material: Material
    density_ratio: Any

    def __init__(self, material: str | Material, *, orientation: Any = None, **overrides: Any) -> None:
        if isinstance(material, str) and material.lower() in EMPTY:
            if overrides or orientation is not None:
                raise ValueError(
                    f"Substrate('{material}') is empty; it takes no orientation and no material's fields."
                )
            material = Material("vacuum", n=1.0)
        if "density_ratio" in overrides:
            raise ValueError(
                "Substrate got density_ratio; densities are stated relative to it, so give 'density'."
            )
        fill_medium(self, material, orientation, overrides)

    def __repr__(self) -> str:
        """Write the material and what was given."""
        return f"Substrate({_said(self)})"

    @property
    def is_empty(self) -> bool:
        """Tell whether nothing is there: neither sound nor heat goes in."""
        return self.material.name == "vacuum"


@dataclass(frozen=True, eq=False, kw_only=True)
class Interface:
    """The bond between the layers above and below it.

    Parameters
    ----------
    compliance : float, frozen scipy.stats distribution or Unknown
        Inverse interface stiffness in nm/GPa; 0 is a perfect bond, inf an open gap.
    boundary_conductance : float, frozen scipy.stats distribution or Unknown
        Thermal boundary conductance in MW/m2/K; inf is ideal contact. It has no default.
    roughness : float, frozen scipy.stats distribution or Unknown
        Rms roughness in nm, smooth over a wavelength of the sound: it spreads the phase of what it reflects.
    areal_mass : float, frozen scipy.stats distribution or Unknown
        Mass per area in mg/m2 of what sits in the interface, half on either face; a monolayer has about 1.
    tangential_compliance : float, frozen scipy.stats distribution or Unknown, optional
        Compliance against sliding in nm/GPa, where a layer is cut obliquely; by default `compliance`.

    Raises
    ------
    ValueError
        If a value is out of range.
    """

    boundary_conductance: Any
    compliance: Any = 0.0
    roughness: Any = 0.0
    areal_mass: Any = 0.0
    tangential_compliance: Any = None

    def __post_init__(self) -> None:
        if self.tangential_compliance is not None:
            checked("tangential_compliance", self.tangential_compliance, "Interface")
        for name in ("compliance", "boundary_conductance", "roughness", "areal_mass"):
            checked(name, getattr(self, name), "Interface")

    def __repr__(self) -> str:
        """Write what is not the default."""
        held = {f.name: getattr(self, f.name) for f in fields(self)}
        return f"Interface({_fields_said({n: v for n, v in held.items() if not _is_left_out(v)})})"


@dataclass(frozen=True, eq=False)
class Slice:
    """One slice of a `Graded` layer.

    Attributes
    ----------
    whole : Graded
    fraction : float
        Place of its middle, 0 at the top and 1 at the bottom of the layer.
    """

    whole: Graded
    fraction: float

    @property
    def material(self) -> Material:
        """Name and optical coefficients of the slice."""
        return Material(
            self.whole.name,
            dn_dstrain=_between(self.whole.top.dn_dstrain, self.whole.bottom.dn_dstrain, self.fraction),
            dn_dT=_between(self.whole.top.dn_dT, self.whole.bottom.dn_dT, self.fraction),
        )


@dataclass(frozen=True, init=False, eq=False)
class Graded:
    """A layer whose properties change with depth, linearly from one material to another, in equal slices.

    Parameters
    ----------
    top, bottom : str or Material
        Materials of the two faces; their fields may be unknown.
    thickness : float, frozen scipy.stats distribution or Unknown
        Of the whole layer, nm.
    slices : int
        Number of slices, each uniform, with the properties of its middle. A slice should be thin against the
        shortest wavelength of the sound (velocity x pulse_rms) and of the light in it.
    name : str, optional
        Name of its unknowns, ``<name>.thickness``, ``<name>.top.velocity``; by default ``top-bottom``.

    Raises
    ------
    ValueError
        If there are fewer than 2 or more than 500 slices, or the thickness is out of range.

    Notes
    -----
    All slices share one pair of strain- and thermo-optic coefficients in a fit.
    """

    top: Material
    bottom: Material
    thickness: Any
    slices: int
    name: str

    def __init__(
        self,
        top: str | Material,
        bottom: str | Material,
        *,
        thickness: Any,
        slices: int = 20,
        name: str | None = None,
    ) -> None:
        ends = [end if isinstance(end, Material) else material(end) for end in (top, bottom)]
        label = Material(f"{ends[0].name}-{ends[1].name}" if name is None else name).name
        checked("thickness", thickness, label)
        if not 2 <= whole_number("slices", slices, 1) <= 500:
            raise ValueError(f"{label} got slices={slices}; give 2 to 500.")
        for field, value in zip(
            ("top", "bottom", "thickness", "slices", "name"),
            (*ends, thickness, int(slices), label),
            strict=True,
        ):
            object.__setattr__(self, field, value)

    def __repr__(self) -> str:
        """Write the names of the two faces and what was given."""
        own = {"thickness": self.thickness, "slices": self.slices, "name": self.name}
        return f"Graded({self.top.name!r}, {self.bottom.name!r}, {_fields_said(own)})"

    def cut(self) -> tuple[Slice, ...]:
        """Return the slices, top to bottom."""
        return tuple(Slice(self, (i + 0.5) / self.slices) for i in range(self.slices))


@dataclass(frozen=True, init=False, eq=False)
class Repeat:
    """Parts that repeat, top to bottom: a superlattice.

    Parameters
    ----------
    count : int
        Number of periods.
    *parts : Layer, Interface, Graded or Repeat
        One period. An `Interface` last (or first) in it also stands between one period and the next.

    Raises
    ------
    ValueError
        If there is nothing to repeat, the count is not positive, or a substrate is in it.

    Notes
    -----
    A layer has the same unknowns in every period: one ``GaAs.thickness`` is the thickness of all.

    Examples
    --------
    >>> import inverse as inv
    >>> stack = inv.Stack(
    ...     inv.Repeat(20, inv.Layer("W", thickness=5.6), inv.Layer("Al", thickness=2.8)),
    ...     inv.Substrate("W"),
    ... )
    >>> len(stack.media), stack.names[:3], stack.names[-1]
    (41, ('W', 'Al', 'W'), 'W#2')
    """

    count: int
    parts: tuple[Any, ...]

    def __init__(self, count: int, *parts: Any) -> None:
        if isinstance(count, bool) or not isinstance(count, int) or count < 1:
            raise ValueError(
                f"Repeat got {count!r} as its count; give the number of periods first, then their parts."
            )
        if not any(isinstance(part, Layer | Graded | Repeat) for part in parts):
            raise ValueError("Repeat got no layer; give the parts of one period after the count.")
        for part in parts:
            if not isinstance(part, Layer | Interface | Graded | Repeat):
                raise ValueError(
                    f"Repeat got a {type(part).__name__}; give Layer, Interface, Graded or Repeat, one by one."
                )
        object.__setattr__(self, "count", count)
        object.__setattr__(self, "parts", tuple(parts))

    def __repr__(self) -> str:
        """Write the count and the parts of a period."""
        return f"Repeat({', '.join([str(self.count), *map(repr, self.parts)])})"


Part = Layer | Interface | Substrate | Graded | Repeat
Medium = Layer | Substrate | Slice


def unroll(parts: tuple[Any, ...], place: tuple[int, ...] = ()) -> Iterator[tuple[Any, tuple[int, ...]]]:
    """Give every part as it lies in the sample, with the place it is written at; periods share theirs."""
    for position, part in enumerate(parts):
        here = (*place, position)
        if isinstance(part, Repeat):
            for _ in range(part.count):
                yield from unroll(part.parts, here)
        elif isinstance(part, Graded):
            yield from ((piece, here) for piece in part.cut())
        else:
            yield part, here


def _between(top: Any, bottom: Any, fraction: float) -> Any:
    """Blend two complex numbers; None where one is missing or sought."""
    if not isinstance(top, complex) or not isinstance(bottom, complex):
        return None
    return (1 - fraction) * top + fraction * bottom


def _fields_said(values: dict[str, Any]) -> str:
    return ", ".join(f"{name}={shown(value)}" for name, value in values.items())


def _said(part: Layer | Substrate, *own: str) -> str:
    """Write a medium's name, its own fields and those of its material that the user gave."""
    values = {name: getattr(part, name) for name in own}
    given = {n: getattr(part.material, n) for n in MATERIAL_FIELDS if part.material.sources.get(n) == GIVEN}
    if part.material.orientation is not None:
        given = {"orientation": part.material.orientation, **given}
    said = {name: value for name, value in {**values, **given}.items() if not _is_left_out(value)}
    return ", ".join(filter(None, [repr(part.material.name), _fields_said(said)]))


def _is_left_out(value: Any) -> bool:
    return value is None or (isinstance(value, float) and value == 0.0)


def _name_of(given: str | Material) -> str:
    return given.name if isinstance(given, Material) else str(given)
