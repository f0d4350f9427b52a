"""Places: which number or unknown stands where once a stack meets a measurement."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.instrument import instrument_slots
from inverse.description.material.properties import Material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.quantities import QUANTITIES
from inverse.description.sample.carriers import carrier_slots, initial_stress_slots
from inverse.description.sample.cuts import cut_slots, depth_slots, is_cut, is_oblique
from inverse.description.sample.optic_slots import optic_slots
from inverse.description.sample.parts import Graded, Interface, Layer, Medium, Slice, Substrate
from inverse.description.sample.slots import DEFAULT, GIVEN, ComputedSlot, Slot, Slots, slot_of
from inverse.description.sample.stack import WELDED, Stack
from inverse.description.unknowns import is_unknown

__all__ = ["BoundStack", "Slot", "Slots", "bind"]

Array = NDArray[np.float64]

_REQUIRED = ("velocity", "heat_capacity", "conductivity")
_ELECTRONS = ("electron_heat_capacity", "electron_phonon_coupling", "electron_gruneisen", "lattice_share")
_LOSS = ("attenuation_time", "attenuation_exponent", "quality_factor", "quality_frequency")
_ABSENT = {
    "electron_heat_capacity": 0.0,
    "electron_phonon_coupling": np.inf,
    "electron_gruneisen": 0.0,
    "lattice_share": 0.0,
    "attenuation_time": 0.0,
    "attenuation_exponent": 1.0,
    "quality_factor": np.inf,
    "quality_frequency": 0.01,
}
_INTERFACE = ("compliance", "boundary_conductance", "roughness", "areal_mass")
_BOND_DEFAULTS = {f.name: f.default for f in dataclasses.fields(Interface)}


@dataclass(frozen=True)
class BoundStack:
    """A stack bound to a measurement: every place filled by a number or an unknown.

    Attributes
    ----------
    media : tuple of dict
        Per layer, substrate last: field -> `Slot`, with ``depth_zz``, ... where a layer is cut obliquely; the
        same object for the periods of a superlattice. Vacuum below has an index and nothing else.
    interfaces : tuple of dict
        Per interface: field -> `Slot`, the same object where one repeats.
    ambient : dict
        Fields of a liquid above; empty for air and vacuum.
    names : tuple of str
        Place names of the media.
    materials : tuple of str
        Material (with orientation) of each medium but vacuum: the key by which P and Q are shared.
    instrument : dict
        What the bench adds, field -> `Slot`: ``stage_scale`` and ``overlap_drift`` where they are not zero.
    surface : dict
        ``roughness`` of the free surface where it is not zero.
    """

    media: tuple[Slots, ...]
    interfaces: tuple[Slots, ...]
    ambient: Slots
    names: tuple[str, ...]
    materials: tuple[str, ...]
    instrument: Slots = dataclasses.field(default_factory=dict)
    surface: Slots = dataclasses.field(default_factory=dict)

    @property
    def slots(self) -> tuple[Slot, ...]:
        """All places that hold a number or an unknown, top to bottom; what repeats is given once."""
        groups = (self.ambient, self.surface, *self.media, *self.interfaces, self.instrument)
        leaves = (leaf for group in groups for slot in group.values() for leaf in slot.leaves())
        return tuple({id(leaf): leaf for leaf in leaves}.values())

    @property
    def priors(self) -> dict[str, Any]:
        """Priors of the unknowns by name, in order of appearance."""
        return {slot.name: slot.prior for slot in self.slots if slot.prior is not None}

    @property
    def constants(self) -> list[dict[str, Any]]:
        """Every number that was taken, with unit, source and spread."""
        rows = [slot for slot in self.slots if slot.prior is None]
        return [
            {
                "place": slot.name.rpartition(".")[0],
                "field": slot.name.rpartition(".")[2],
                "value": slot.value,
                "unit": QUANTITIES[slot.field].unit,
                "source": slot.source,
                "spread": slot.spread,
            }
            for slot in rows
        ]

    def fill(self, group: Slots, values: Mapping[str, Array]) -> dict[str, Array | float]:
        """Return field -> number or array (one entry per parameter set), in the public units."""
        return {field: slot.fill(values) for field, slot in group.items()}


def bind(stack: Stack, setup: PumpProbe) -> BoundStack:
    """Bind a stack to a measurement.

    Raises
    ------
    ValueError
        If they are not a `Stack` and a `PumpProbe`, a constant the model needs is missing (named), or one unknown's
        name is used for two priors.
    """
    if not isinstance(stack, Stack) or not isinstance(setup, PumpProbe):
        raise ValueError(
            f"Got a {type(stack).__name__} and a {type(setup).__name__}; give a Stack first, then a PumpProbe."
        )
    substrate = _substrate_slots(stack.names[-1], stack.media[-1], setup)
    media = [*_media_slots(stack, setup, substrate.get("density")), substrate]
    if oblique := any(is_oblique(part.material) for part in stack.media):
        media = _sheared(stack, media)
    bonds: dict[Any, Slots] = {}
    for name, part in zip(stack.interface_names, stack.interfaces, strict=True):
        bonds.setdefault((name, id(part)), _interface_slots(name, part, oblique))
    ambient = {} if stack.ambient is None else _ambient_slots(stack.ambient, setup)
    bound = BoundStack(
        media=tuple(media),
        interfaces=tuple(
            bonds[name, id(part)] for name, part in zip(stack.interface_names, stack.interfaces, strict=True)
        ),
        ambient=ambient,
        names=stack.names,
        materials=tuple(part.material.name for part in stack.media if not _is_empty(part)),
        instrument=instrument_slots(setup),
        surface=_surface_slots(stack, oblique),
    )
    _refuse_two_priors(bound)
    return bound


def _is_empty(part: Medium) -> bool:
    return isinstance(part, Substrate) and part.is_empty


def _field_slot(place: str, material: Material, field: str, value: Any) -> Slot:
    source = material.sources.get(field, GIVEN)
    return slot_of(field, value, place, source, float(material.spread.get(field, 0.0)))


def _need(place: str, material: Material, field: str) -> Any:
    value = getattr(material, field)
    if value is None:
        raise ValueError(
            f"{place} has no {field} ({QUANTITIES[field].unit}): the reference tables give none for "
            f"'{material.name}'. Give it, for example Layer('{material.name}', ..., {field}=...) or in a Material."
        )
    return value


def _media_slots(stack: Stack, setup: PumpProbe, below: Slot | None) -> list[Slots]:
    """Fill the places of all layers, one object for each that repeats."""
    known: dict[tuple[str, float], Slots] = {}
    faces: dict[str, tuple[Slots, Slots]] = {}
    media = []
    for name, part in zip(stack.names[:-1], stack.media[:-1], strict=True):
        key = (name, part.fraction if isinstance(part, Slice) else 0.0)
        if key not in known and isinstance(part, Slice):
            if name not in faces:
                faces[name] = _faces(name, part.whole, setup)
            known[key] = _slice_slots(name, part, faces[name])
        elif key not in known and isinstance(part, Layer):
            known[key] = _layer_slots(name, part, setup, below)
        media.append(known[key])
    return media


def _sheared(stack: Stack, media: list[Slots]) -> list[Slots]:
    """Add what three components need to every medium, one object for each that repeats."""
    known: dict[int, Slots] = {}
    for name, part, slots in zip(stack.names, stack.media, media, strict=True):
        if id(slots) not in known:
            solid = "velocity" in slots
            known[id(slots)] = slots | (depth_slots(name, part.material, slots) if solid else {})
    return [known[id(slots)] for slots in media]


def _surface_slots(stack: Stack, oblique: bool) -> Slots:
    slot = slot_of("roughness", stack.surface_roughness, "surface", GIVEN, 0.0)
    if slot.value == 0.0:
        return {}
    if oblique:
        _refuse_flaws("surface", ["roughness"])
    return {"roughness": slot}


def _refuse_flaws(place: str, flaws: list[str]) -> None:
    if flaws:
        raise ValueError(
            f"{place} has {' and '.join(flaws)}, which the response of an oblique cut does not know; leave it out, or "
            "give the layers velocities in place of their stiffness and orientation."
        )


def _interface_slots(place: str, part: Interface, oblique: bool) -> Slots:
    slots = {f: slot_of(f, getattr(part, f), place, _bond_source(part, f), 0.0) for f in _INTERFACE}
    if oblique:
        _refuse_flaws(place, [f for f in ("roughness", "areal_mass") if slots[f].value != 0.0])
    if part.tangential_compliance is None:
        return slots
    field = "tangential_compliance"
    if not oblique:
        raise ValueError(
            f"{place} has a tangential_compliance, but no layer is cut obliquely, so nothing shears; leave it out."
        )
    return slots | {field: slot_of(field, part.tangential_compliance, place, GIVEN, 0.0)}


def _bond_source(part: Interface, field: str) -> str:
    if part is WELDED:
        return "welded: no Interface stands there"
    value = getattr(part, field)
    return DEFAULT if not is_unknown(value) and value == _BOND_DEFAULTS.get(field) else GIVEN


def _substrate_slots(place: str, part: Medium, setup: PumpProbe) -> Slots:
    if _is_empty(part):
        return _light_slots(place, part.material, setup)
    slots = _material_slots(place, part.material, setup, _density_slot(place, part.material))
    return slots | optic_slots(part.material)


def _layer_slots(place: str, part: Layer, setup: PumpProbe, below: Slot | None) -> Slots:
    """Fill the places of a layer; `below` is the substrate's density."""
    slots = {"thickness": slot_of("thickness", part.thickness, place, GIVEN, 0.0)}
    spread = slot_of("thickness_spread", part.thickness_spread, place, GIVEN, 0.0)
    if spread.value != 0.0:
        slots["thickness_spread"] = spread
    if part.density_ratio is None:
        slots |= _density_slot(place, part.material)
    elif below is None:
        raise ValueError(
            f"{place} has density_ratio, but there is no substrate to refer it to; give density."
        )
    else:
        slots["density_ratio"] = slot_of("density_ratio", part.density_ratio, place, GIVEN, 0.0)
        slots["substrate_density"] = below
    return _material_slots(place, part.material, setup, slots) | optic_slots(part.material)


def _faces(place: str, whole: Graded, setup: PumpProbe) -> tuple[Slots, Slots]:
    """Fill the places of a graded layer's top and bottom; the top holds its thickness."""
    thickness = {"thickness": slot_of("thickness", whole.thickness, place, GIVEN, 0.0)}
    top, bottom = (
        _material_slots(name, end, setup, _density_slot(name, end))
        for name, end in ((f"{place}.top", whole.top), (f"{place}.bottom", whole.bottom))
    )
    return thickness | top, bottom


def _slice_slots(place: str, part: Slice, faces: tuple[Slots, Slots]) -> Slots:
    """Blend the places of a graded layer's faces."""
    top, bottom = faces
    if odd := sorted((set(top) ^ set(bottom)) - {"thickness"}):
        raise ValueError(
            f"{place} has {', '.join(odd)} on one face only; give it on both, 0 where there is none."
        )
    thickness = Slot(
        top["thickness"].name, "thickness", np.nan, terms=((top["thickness"], 1 / part.whole.slices),)
    )
    blended = {field: _blend(place, top[field], slot, part.fraction) for field, slot in bottom.items()}
    return {"thickness": thickness, **blended}


def _blend(place: str, top: Slot, bottom: Slot, fraction: float) -> Slot:
    if (top.value == np.inf) != (bottom.value == np.inf):
        raise ValueError(
            f"{place} has an infinite {top.field} on one face only; a graded layer needs two finite values, or inf on "
            f"both (electron_phonon_coupling=inf asks for one temperature)."
        )
    return Slot(f"{place}.{top.field}", top.field, np.nan, terms=((top, 1 - fraction), (bottom, fraction)))


def _density_slot(place: str, material: Material) -> Slots:
    return {"density": _field_slot(place, material, "density", _need(place, material, "density"))}


def _material_slots(place: str, material: Material, setup: PumpProbe, slots: Slots) -> Slots:
    """Fill the places that every solid has into `slots`, which hold its density."""
    slots = dict(slots)
    if is_cut(material):
        slots |= cut_slots(place, material, slots)
    for field in _REQUIRED:
        if field == "velocity" and is_cut(material):
            continue
        slots[field] = _field_slot(place, material, field, _need(place, material, field))
    slots["thermal_stress_coefficient"] = _stress_slot(place, material)
    _electron_pair(place, material)
    for field in (*_ELECTRONS, *_LOSS):
        value = getattr(material, field)
        slots[field] = (
            Slot(f"{place}.{field}", field, _ABSENT[field], None, DEFAULT, 0.0)
            if value is None
            else _field_slot(place, material, field, value)
        )
    slots |= carrier_slots(place, material, setup) | initial_stress_slots(place, material)
    return slots | _light_slots(place, material, setup)


def _light_slots(place: str, material: Material, setup: PumpProbe) -> Slots:
    return {
        **_index_slots(place, material, "pump", setup.pump),
        **_index_slots(place, material, "probe", setup.probe),
    }


def _stress_slot(place: str, material: Material) -> Slot:
    field, parts = "thermal_stress_coefficient", ("expansion", "bulk_modulus")
    values = [getattr(material, part) for part in parts]
    if material.thermal_stress_coefficient is None and None not in values and any(map(is_unknown, values)):
        inputs = tuple(_field_slot(place, material, p, v) for p, v in zip(parts, values, strict=True))
        return ComputedSlot(f"{place}.{field}", field, np.nan, inputs=inputs, formula=_thermal_stress)
    return _field_slot(place, material, field, _need(place, material, field))


def _thermal_stress(expansion: Any, bulk_modulus: Any) -> Any:
    return 3 * expansion * bulk_modulus


def _electron_pair(place: str, material: Material) -> None:
    given = [f for f in _ELECTRONS[:2] if getattr(material, f) is not None]
    if material.lattice_share is not None and len(given) < 2:
        raise ValueError(
            f"{place} has a lattice_share but one temperature only; give electron_heat_capacity and "
            "electron_phonon_coupling too, or leave it out."
        )
    if material.lattice_share is not None and material.band_gap is not None:
        raise ValueError(
            f"{place} has a lattice_share and a band_gap; a medium is a metal or a semiconductor here."
        )
    if len(given) == 1 and given[0] == "electron_heat_capacity":
        raise ValueError(
            f"{place} has electron_heat_capacity but no electron_phonon_coupling; two temperatures need both "
            "(electron_phonon_coupling=inf asks for one temperature)."
        )
    if len(given) == 1 and material.electron_phonon_coupling != np.inf:
        raise ValueError(
            f"{place} has electron_phonon_coupling but no electron_heat_capacity; give both or neither."
        )


def _index_slots(place: str, material: Material, light: str, wavelength: float) -> Slots:
    if material.n is None:
        raise ValueError(
            f"{place} has no refractive index n; give n={{{wavelength:g}: complex}} or a table of it."
        )
    real, imag = _index_parts(material, wavelength)
    source = material.sources.get("n", GIVEN)
    spread = material.index_spread_at(wavelength)
    suffix = f"_{wavelength:g}"
    return {
        f"n_real_{light}": slot_of("n_real", real, place, source, spread.real, suffix),
        f"n_imag_{light}": slot_of("n_imag", imag, place, source, spread.imag, suffix),
    }


def _index_parts(material: Material, wavelength: float) -> tuple[Any, Any]:
    if isinstance(material.n, Mapping):
        for key, value in material.n.items():
            if abs(float(key) - wavelength) < 1e-9 and isinstance(value, Sequence):
                return value[0], value[1]
    elif isinstance(material.n, tuple):
        return material.n[0], material.n[1]
    value = complex(material.index_at(wavelength))
    return value.real, value.imag


def _ambient_slots(material: Material, setup: PumpProbe) -> Slots:
    place = material.name
    slots = {
        field: _field_slot(place, material, field, _need(place, material, field))
        for field in ("density", *_REQUIRED)
    }
    return slots | _light_slots(place, material, setup)


def _refuse_two_priors(bound: BoundStack) -> None:
    seen: dict[str, Any] = {}
    for slot in bound.slots:
        if slot.prior is None:
            continue
        if slot.name in seen and seen[slot.name] is not slot.prior and slot.field != "density":
            raise ValueError(
                f"The name '{slot.name}' stands for two different priors; use one Unknown object in both places."
            )
        seen[slot.name] = slot.prior
