"""The door of the forward model: public units become the coherent system nm, ps, g/cm3, GPa, K."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import QUANTITIES
from inverse.description.sample.cuts import COMPONENTS
from inverse.description.sample.places import BoundStack, Slots
from inverse.response.carriers import CarrierConstants
from inverse.response.flaws import Imperfection
from inverse.response.recursion import OPEN
from inverse.response.solids import DepthElastic

__all__ = ["Ambient", "Medium", "Sample", "sample"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class InitialStress:
    """Stress that the pulse sets up uniformly in a medium: GPa per J/m2, and its inverse lifetime in 1/ps."""

    stress: Array
    rate: Array


@dataclass(frozen=True)
class Medium:
    """One layer or the half-space in coherent units; every array has shape (sets or 1, 1).

    Attributes
    ----------
    thickness : array
        nm; inf for the half-space.
    density, velocity : array
        g/cm3, nm/ps (velocity at low frequency).
    n_pump, n_probe : complex array
        Refractive index, time factor exp(-i w t), so Im n >= 0 absorbs.
    heat_capacity, electron_heat_capacity : array
        Of lattice and electrons, GPa/K.
    conductivity : array
        GPa nm2/ps/K.
    inverse_coupling : array
        Inverse electron-phonon coupling, ps K/GPa; 0 is one temperature.
    stress : array
        Thermal stress coefficient, GPa/K.
    loss_time, loss_exponent : array
        Power-law loss, ps and dimensionless.
    inverse_quality, quality_frequency : array
        1/Q and the angular frequency in rad/ps at which the modulus is stated.
    lattice_conductivity : array
        What of the conductivity is the lattice's, GPa nm2/ps/K.
    electron_stress : array
        Stress coefficient of the electrons' own temperature, GPa/K.
    carriers : CarrierConstants, optional
        Of a semiconductor.
    initial : InitialStress, optional
    """

    thickness: Array
    density: Array
    velocity: Array
    n_pump: Complex
    n_probe: Complex
    heat_capacity: Array
    electron_heat_capacity: Array
    conductivity: Array
    inverse_coupling: Array
    stress: Array
    loss_time: Array
    loss_exponent: Array
    inverse_quality: Array
    quality_frequency: Array
    lattice_conductivity: Array = field(default_factory=lambda: np.zeros((1, 1)))
    electron_stress: Array = field(default_factory=lambda: np.zeros((1, 1)))
    carriers: CarrierConstants | None = None
    initial: InitialStress | None = None


@dataclass(frozen=True)
class Ambient:
    """What lies above: index, and for a liquid its acoustic and thermal constants (else None)."""

    n_pump: Complex
    n_probe: Complex
    density: Array | None = None
    velocity: Array | None = None
    heat_capacity: Array | None = None
    conductivity: Array | None = None

    @property
    def is_liquid(self) -> bool:
        """Tell whether it carries sound and heat."""
        return self.density is not None


_EMPTY = Ambient(np.ones((1, 1), dtype=complex), np.ones((1, 1), dtype=complex))


@dataclass(frozen=True)
class Sample:
    """A batch of stacks: media top to bottom, interfaces, ambient.

    A half-space stands last, or the last layer is free below and `backing` is the vacuum there.
    Where a layer is cut obliquely there are `solids`, one per medium, and the interfaces' compliance in their planes.
    """

    media: tuple[Medium, ...]
    compliance: tuple[Array, ...]
    resistance: tuple[Array, ...]
    ambient: Ambient
    solids: tuple[DepthElastic, ...] | None = None
    tangential: tuple[Array, ...] = ()
    backing: Ambient | None = None
    imperfections: tuple[Imperfection, ...] = ()
    surface_roughness: Array | None = None

    def light(self, beam: str) -> tuple[list[Complex], list[Array]]:
        """Return the index of every medium to ``"pump"`` or ``"probe"``, what is below last, and the thicknesses."""
        below = () if self.backing is None else (self.backing,)
        index = [getattr(part, f"n_{beam}") for part in (*self.media, *below)]
        return index, [m.thickness for m in layers(self.media)]


def layers(media: Sequence[Medium]) -> Sequence[Medium]:
    """Return the media that have a lower face: all, where the last is free below."""
    return media if np.all(np.isfinite(media[-1].thickness)) else media[:-1]


def anchored(decay: Sequence[Complex], media: Sequence[Medium]) -> list[Complex]:
    """Complete ``exp(-q d)`` of the layers by the half-space's zero, where there is one."""
    return list(decay) if len(decay) == len(media) else [*decay, np.zeros((1, 1), dtype=complex)]


def sample(bound: BoundStack, values: Mapping[str, Array]) -> Sample:
    """Convert a bound stack and the values of its unknowns into a batch of stacks.

    Parameters
    ----------
    bound : BoundStack
    values : mapping
        Unknown name -> array of shape (sets,), public units.
    """
    solid = {id(slots): slots for slots in bound.media if "velocity" in slots}
    once = {key: _medium(bound, slots, values) for key, slots in solid.items()}
    return Sample(
        media=tuple(once[id(slots)] for slots in bound.media if id(slots) in once),
        compliance=tuple(_compliance(bound, slots, values) for slots in bound.interfaces),
        resistance=tuple(_resistance(bound, slots, values) for slots in bound.interfaces),
        ambient=_ambient(bound, values),
        backing=None if "velocity" in bound.media[-1] else _EMPTY,
        imperfections=_imperfections(bound, values),
        surface_roughness=_coherent("roughness", bound.fill(bound.surface, values)["roughness"])
        if bound.surface
        else None,
        **_three_components(bound, values),
    )


def _three_components(bound: BoundStack, values: Mapping[str, Array]) -> dict[str, Any]:
    if not any("depth_zz" in slots for slots in bound.media):
        return {}
    return {
        "solids": tuple(_solid(bound, slots, values) for slots in bound.media if "velocity" in slots),
        "tangential": tuple(_tangential(bound, slots, values) for slots in bound.interfaces),
    }


def _solid(bound: BoundStack, slots: Slots, values: Mapping[str, Array]) -> DepthElastic:
    filled = bound.fill(slots, values)
    xx, yy, zz, yz, xz, xy = _together(*(filled[f"depth_{name}"] for name in COMPONENTS))
    rows = [np.stack(row, axis=-1) for row in ((xx, xy, xz), (xy, yy, yz), (xz, yz, zz))]
    # The velocity is no number where the constants are unstable; the stress takes that into the response.
    mark = 0.0 * np.asarray(filled["velocity"])
    stress = ("thermal_stress_xz", "thermal_stress_yz", "thermal_stress_coefficient")
    seen = (filled["photoelastic_xz"], filled["photoelastic_yz"], 1.0)
    return DepthElastic(
        np.stack(rows, axis=-2),
        np.stack(_together(*(filled[name] + mark for name in stress)), axis=-1),
        np.stack(_together(*seen), axis=-1),
    )


def _together(*values: Array | float) -> tuple[Array, ...]:
    return np.broadcast_arrays(*(np.atleast_1d(np.asarray(v, dtype=float)) for v in values))


def _tangential(bound: BoundStack, slots: Slots, values: Mapping[str, Array]) -> Array:
    filled = bound.fill(slots, values)
    field = "tangential_compliance" if "tangential_compliance" in filled else "compliance"
    return np.minimum(_coherent(field, filled[field]), OPEN)


def _coherent(field: str, value: Array | float) -> Array:
    if isinstance(value, float):
        return _constant(field, value)
    return np.atleast_1d(np.asarray(value, dtype=float))[:, None] * _factor(field)


@lru_cache(maxsize=4096)
def _constant(field: str, value: float) -> Array:
    """Convert a number that every call meets again; not to be written to."""
    out = np.full((1, 1), value * _factor(field))
    out.flags.writeable = False
    return out


def _factor(field: str) -> float:
    return QUANTITIES[field].to_coherent if field in QUANTITIES else 1.0


def _index(filled: Mapping[str, Array | float], light: str) -> Complex:
    return _coherent("n_real", filled[f"n_real_{light}"]) + 1j * _coherent(
        "n_imag", filled[f"n_imag_{light}"]
    )


def _medium(bound: BoundStack, slots: Slots, values: Mapping[str, Array]) -> Medium:
    filled = bound.fill(slots, values)
    if "density_ratio" in filled:
        filled["density"] = np.asarray(filled["density_ratio"]) * np.asarray(filled["substrate_density"])
    one = {name: _coherent(name, value) for name, value in filled.items()}
    with np.errstate(divide="ignore"):
        inverse_coupling, inverse_quality = (
            1 / one["electron_phonon_coupling"],
            1 / one["quality_factor"],
        )
    return Medium(
        thickness=one.get("thickness", np.full((1, 1), np.inf)),
        density=one["density"],
        velocity=one["velocity"],
        n_pump=_index(filled, "pump"),
        n_probe=_index(filled, "probe"),
        heat_capacity=one["heat_capacity"],
        electron_heat_capacity=one["electron_heat_capacity"],
        conductivity=one["conductivity"],
        inverse_coupling=inverse_coupling,
        stress=one["thermal_stress_coefficient"],
        loss_time=one["attenuation_time"],
        loss_exponent=one["attenuation_exponent"],
        inverse_quality=inverse_quality,
        quality_frequency=one["quality_frequency"],
        lattice_conductivity=one["lattice_share"] * one["conductivity"],
        electron_stress=one["electron_gruneisen"] * one["electron_heat_capacity"],
        carriers=_carriers(one) if "band_gap" in one else None,
        initial=_initial(one) if "initial_stress" in one else None,
    )


def _initial(one: Mapping[str, Array]) -> InitialStress:
    return InitialStress(one["initial_stress"], 1 / one["initial_stress_lifetime"])


def _carriers(one: Mapping[str, Array]) -> CarrierConstants:
    return CarrierConstants(
        photon=one["photon_energy"],
        gap=one["band_gap"],
        stress=-one["deformation_potential"],
        diffusivity=one["carrier_diffusivity"],
        rate=1 / one["carrier_lifetime"],
        surface=one["surface_recombination"],
    )


def _compliance(bound: BoundStack, slots: Slots, values: Mapping[str, Array]) -> Array:
    return np.minimum(_coherent("compliance", bound.fill(slots, values)["compliance"]), OPEN)


def _imperfections(bound: BoundStack, values: Mapping[str, Array]) -> tuple[Imperfection, ...]:
    """Return mass and roughness of every interface; nothing where all are smooth and massless."""
    filled = [bound.fill(slots, values) for slots in bound.interfaces]
    if not any(np.any(interface[field]) for interface in filled for field in ("areal_mass", "roughness")):
        return ()
    return tuple(
        Imperfection(_coherent("areal_mass", f["areal_mass"]), _coherent("roughness", f["roughness"]))
        for f in filled
    )


def _resistance(bound: BoundStack, slots: Slots, values: Mapping[str, Array]) -> Array:
    conductance = _coherent("boundary_conductance", bound.fill(slots, values)["boundary_conductance"])
    with np.errstate(divide="ignore"):
        return np.minimum(1 / conductance, OPEN)


def _ambient(bound: BoundStack, values: Mapping[str, Array]) -> Ambient:
    if not bound.ambient:
        return _EMPTY
    filled = bound.fill(bound.ambient, values)
    return Ambient(
        n_pump=_index(filled, "pump"),
        n_probe=_index(filled, "probe"),
        density=_coherent("density", filled["density"]),
        velocity=_coherent("velocity", filled["velocity"]),
        heat_capacity=_coherent("heat_capacity", filled["heat_capacity"]),
        conductivity=_coherent("conductivity", filled["conductivity"]),
    )
