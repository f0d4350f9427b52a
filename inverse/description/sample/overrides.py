"""A part's material: a reference entry or the user's own, with the fields that the part itself overrides."""

from __future__ import annotations

from dataclasses import fields, replace
from typing import Any

from inverse.description.arguments import refuse_unknown_names
from inverse.description.material.properties import Material, material
from inverse.description.material.reference_tables import find
from inverse.description.unknowns import checked

__all__ = ["GIVEN", "MATERIAL_FIELDS", "fill_medium"]

GIVEN = "given by the user"
"""Source of an overridden field."""

MATERIAL_FIELDS = tuple(f.name for f in fields(Material) if f.name not in ("name", "sources", "spread"))


def fill_medium(part: Any, given: str | Material, orientation: Any, overrides: dict[str, Any]) -> None:
    """Resolve a material with its overrides into the attributes that a layer and a substrate share."""
    base = _base(given, orientation, overrides)
    ratio = overrides.pop("density_ratio", None)
    refuse_unknown_names(base.name, overrides, (*MATERIAL_FIELDS, "density_ratio"))
    if ratio is not None:
        if "density" in overrides:
            raise ValueError(f"{base.name} got both density and density_ratio; give one of them.")
        checked("density_ratio", ratio, base.name)
    object.__setattr__(part, "material", _override(base, overrides))
    object.__setattr__(part, "density_ratio", ratio)


def _base(given: str | Material, orientation: Any, overrides: dict[str, Any]) -> Material:
    """Find the material to start from; with constants of its own a layer may be cut in any direction."""
    if isinstance(given, Material):
        return given if orientation is None else replace(given, orientation=orientation)
    if "stiffness" not in overrides:
        return material(given, orientation)
    listed = find(given).orientations
    if orientation is None or (isinstance(orientation, str) and orientation in listed):
        return material(given, orientation)
    start = material(given, listed[0] if listed else None)
    return replace(start, orientation=orientation, thermal_stress_coefficient=_stress_of_any_cut(start))


def _stress_of_any_cut(start: Material) -> Any:
    """Return the thermal stress along the depth if it is the same for every cut, as in cubic crystals."""
    cubic = start.stiffness is not None and start.stiffness["symmetry"] == "cubic"
    return start.thermal_stress_coefficient if cubic else None


def _override(base: Material, overrides: dict[str, Any]) -> Material:
    if not overrides:
        return base
    if overrides.get("stiffness") is not None:
        if overrides.get("velocity") is not None:
            raise ValueError(
                f"{base.name} got both stiffness and velocity; the velocity follows from the constants, so give one."
            )
        overrides = {**overrides, "velocity": None}
    sources = {**base.sources, **dict.fromkeys(overrides, GIVEN)}
    spread = {k: v for k, v in base.spread.items() if k not in overrides}
    parts = {"expansion", "bulk_modulus"} & set(overrides)
    if parts and "thermal_stress_coefficient" not in overrides:
        overrides = {**overrides, "thermal_stress_coefficient": None}
    elif "thermal_stress_coefficient" in overrides and not parts:
        overrides = {**overrides, "expansion": None, "bulk_modulus": None}
    return replace(base, **overrides, sources=sources, spread=spread)
