"""Layers, interfaces and the stack they make, drawn top to bottom."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field, fields, replace
from typing import Any

from inverse.description.materials import Material, material
from inverse.description.quantities import check
from inverse.description.unknowns import Unknown, is_unknown, validate_prior

__all__ = ["Interface", "Layer", "Stack", "Substrate"]

_VACUUM = ("air", "vacuum")


@dataclass(frozen=True, init=False, eq=False)
class Layer:
    """A layer of the stack.

    Parameters
    ----------
    material : str or Material
        Reference name or a material of the user's.
    thickness : float, frozen scipy.stats distribution or Unknown
        Thickness in nm.
    orientation : str, optional
        Cut of a single crystal, for reference materials that need one.
    **overrides
        Material fields (numbers, distributions, unknowns), or ``density_ratio`` (to the substrate)
        instead of ``density``.

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

    def __init__(
        self, material: str | Material, *, thickness: Any, orientation: str | None = None, **overrides: Any
    ) -> None:
        _check_value("thickness", thickness, _name_of(material))
        object.__setattr__(self, "thickness", thickness)
        _fill_medium(self, material, orientation, overrides)


@dataclass(frozen=True, init=False, eq=False)
class Substrate:
    """The half-space under the stack.

    Parameters
    ----------
    material : str or Material
        Reference name or a material of the user's.
    orientation : str, optional
        Cut of a single crystal, such as ``"100"``.
    **overrides
        Material fields.

    Raises
    ------
    ValueError
        As for `Layer`; a substrate has no ``density_ratio``.
    """

    material: Material
    density_ratio: Any

    def __init__(self, material: str | Material, *, orientation: str | None = None, **overrides: Any) -> None:
        if "density_ratio" in overrides:
            raise ValueError("Substrate got density_ratio; densities are stated relative to it, so give 'density'.")
        _fill_medium(self, material, orientation, overrides)


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
        Rms roughness in nm.

    Raises
    ------
    ValueError
        If a value is out of range.
    """

    boundary_conductance: Any
    compliance: Any = 0.0
    roughness: Any = 0.0

    def __post_init__(self) -> None:
        for name in ("compliance", "boundary_conductance", "roughness"):
            _check_value(name, getattr(self, name), "Interface")


@dataclass(frozen=True, init=False, eq=False)
class Stack:
    """A film stack, top to bottom, as its cross-section is drawn.

    Parameters
    ----------
    *parts : Layer, Interface or Substrate
        Layers from the surface down, the substrate last; an `Interface` may stand between two of them.
        Two parts in a row without one are welded and thermally ideal.
    ambient : str or Material
        ``"air"``, ``"vacuum"``, or a liquid by reference name or `Material`.

    Raises
    ------
    ValueError
        If the order makes no sense.

    Examples
    --------
    >>> import inverse as inv
    >>> stack = inv.Stack(
    ...     inv.Layer("Al", thickness=60.0),
    ...     inv.Interface(compliance=0.02, boundary_conductance=100.0),
    ...     inv.Substrate("Si", orientation="100"),
    ... )
    >>> stack.names
    ('Al', 'Si')
    """

    parts: tuple[Layer | Interface | Substrate, ...]
    ambient: Material | None
    media: tuple[Layer | Substrate, ...] = field(repr=False)
    interfaces: tuple[Interface, ...] = field(repr=False)
    names: tuple[str, ...] = field(repr=False)

    def __init__(self, *parts: Layer | Interface | Substrate, ambient: str | Material = "air") -> None:
        media, interfaces = _split(parts)
        object.__setattr__(self, "parts", tuple(parts))
        object.__setattr__(self, "media", tuple(media))
        object.__setattr__(self, "interfaces", tuple(interfaces))
        object.__setattr__(self, "ambient", _ambient(ambient))
        object.__setattr__(self, "names", tuple(_place_names(media)))

    def __str__(self) -> str:
        """Say the stack in one line, surface first."""
        above = "air" if self.ambient is None else self.ambient.name
        return " / ".join([above, *self.names])

    @property
    def interface_names(self) -> tuple[str, ...]:
        """Names of the interfaces, ``Al|Si``, top to bottom."""
        return tuple(f"{a}|{b}" for a, b in zip(self.names, self.names[1:], strict=False))


def _name_of(given: str | Material) -> str:
    return given.name if isinstance(given, Material) else str(given)


def _check_value(name: str, value: Any, where: str) -> None:
    if isinstance(value, Unknown):
        validate_prior(name, value.prior, where)
    elif is_unknown(value):
        validate_prior(name, value, where)
    else:
        check(name, value, where)


_MATERIAL_FIELDS = tuple(f.name for f in fields(Material) if f.name not in ("name", "sources", "spread"))


def _fill_medium(
    part: Layer | Substrate, given: str | Material, orientation: str | None, overrides: dict[str, Any]
) -> None:
    """Resolve a material with its overrides into the attributes shared by layers and the substrate."""
    base = given if isinstance(given, Material) else material(given, orientation)
    ratio = overrides.pop("density_ratio", None)
    strange = sorted(set(overrides) - set(_MATERIAL_FIELDS))
    if strange:
        raise ValueError(
            f"{base.name} got {', '.join(strange)}, which no Material has; its fields are "
            f"{', '.join(_MATERIAL_FIELDS)}, or density_ratio for a layer."
        )
    if ratio is not None:
        if "density" in overrides:
            raise ValueError(f"{base.name} got both density and density_ratio; give one of them.")
        _check_value("density_ratio", ratio, base.name)
    object.__setattr__(part, "material", _override(base, overrides))
    object.__setattr__(part, "density_ratio", ratio)


def _override(base: Material, overrides: dict[str, Any]) -> Material:
    if not overrides:
        return base
    sources = {**base.sources, **dict.fromkeys(overrides, "given by the user")}
    spread = {k: v for k, v in base.spread.items() if k not in overrides}
    parts = {"expansion", "bulk_modulus"} & set(overrides)
    if parts and "thermal_stress_coefficient" not in overrides:
        overrides = {**overrides, "thermal_stress_coefficient": None}
    elif "thermal_stress_coefficient" in overrides and not parts:
        overrides = {**overrides, "expansion": None, "bulk_modulus": None}
    return replace(base, **overrides, sources=sources, spread=spread)


def _split(
    parts: tuple[Layer | Interface | Substrate, ...],
) -> tuple[list[Layer | Substrate], list[Interface]]:
    """Separate media from interfaces, filling welded ones in."""
    media: list[Layer | Substrate] = []
    interfaces: list[Interface] = []
    pending: Interface | None = None
    for position, part in enumerate(parts):
        if isinstance(part, Interface):
            if not media or pending is not None:
                raise ValueError(
                    f"Part {position + 1} of the Stack is an Interface that has no layer above it; "
                    "an Interface stands between two layers."
                )
            pending = part
        elif isinstance(part, Layer | Substrate):
            if media:
                if isinstance(media[-1], Substrate):
                    raise ValueError("The Stack goes on below its Substrate; the Substrate must be the last part.")
                interfaces.append(pending or Interface(boundary_conductance=float("inf")))
            media.append(part)
            pending = None
        else:
            raise ValueError(f"Part {position + 1} of the Stack is {part!r}; give Layer, Interface or Substrate.")
    if pending is not None or not media or not isinstance(media[-1], Substrate):
        raise ValueError("A Stack must end with a Substrate (the half-space below everything).")
    return media, interfaces


def _place_names(media: list[Layer | Substrate]) -> Iterator[str]:
    seen: Counter[str] = Counter()
    for part in media:
        name = part.material.name
        seen[name] += 1
        yield name if seen[name] == 1 else f"{name}#{seen[name]}"


def _ambient(given: str | Material) -> Material | None:
    """Return the liquid above the stack, or None where it carries neither sound nor heat."""
    if isinstance(given, Material):
        return given
    return None if given.lower() in _VACUUM else material(given)
