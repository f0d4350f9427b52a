"""Layers known by their elastic constants: what a cut of a crystal gives waves along the depth.

The depth's Christoffel matrix c_{i3k3} is linear in the independent constants, so its components are weighted sums
of them. Where every constant's part has z as an eigenvector, waves along the depth are purely longitudinal
whatever the constants are: one velocity says it all. Other cuts are oblique and need three components.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from inverse.description.material.properties import Material
from inverse.description.sample.slots import DEFAULT, GIVEN, ComputedSlot, Slot, Slots, slot_of
from inverse.elastic import StiffnessTensor, averages, constant_names, crystal_direction, rotation_to_z
from inverse.elastic.stability import is_stable
from inverse.elastic.symmetry import basis
from inverse.elastic.voigt import mandel_rotation, mandel_to_voigt, voigt_to_mandel

__all__ = ["COMPONENTS", "constant_slots", "cut_slots", "depth_slots", "is_cut", "is_oblique"]

Array = NDArray[np.float64]

COMPONENTS = ("xx", "yy", "zz", "yz", "xz", "xy")
"""Components of the depth's Christoffel matrix c_{i3k3}, by i and k."""

_PLACES = ((4, 4), (3, 3), (2, 2), (3, 2), (4, 2), (4, 3))
_ZERO = 1e-9


def is_cut(material: Material) -> bool:
    """Tell whether a material's velocity follows from its elastic constants."""
    return material.velocity is None and material.stiffness is not None


def _weights(symmetry: str, orientation: Any) -> Array:
    """Return the depth's components, shape (constants, 6), per unit of each constant."""
    voigt = basis(symmetry)
    if orientation is not None:
        turn = mandel_rotation(rotation_to_z(crystal_direction(orientation, symmetry)))
        voigt = mandel_to_voigt(turn @ voigt_to_mandel(voigt) @ turn.T)
    return np.stack([voigt[:, i, j] for i, j in _PLACES], axis=1)


def is_oblique(material: Material) -> bool:
    """Tell whether waves along the depth mix longitudinal and transverse motion in this cut."""
    if not is_cut(material) or material.stiffness is None:
        return False
    weights = _weights(material.stiffness["symmetry"], material.orientation)
    return bool(np.abs(weights[:, 3:5]).max() > _ZERO)


def constant_slots(place: str, material: Material) -> tuple[Slot, ...]:
    """Return the places ``Al.c11``, ... of the independent constants."""
    given: Mapping[str, Any] = material.stiffness or {}
    source = material.sources.get("stiffness", GIVEN)
    return tuple(slot_of(name, given[name], place, source, 0.0) for name in constant_names(given["symmetry"]))


@dataclass(frozen=True)
class _Velocity:
    """Velocity along the depth from constants and density; not a number where the constants are unstable."""

    symmetry: str
    weights: tuple[tuple[float, ...], ...]

    def __call__(self, *values: ArrayLike) -> Array:
        *constants, density = np.broadcast_arrays(*map(np.asarray, values))
        vector = np.stack(constants, axis=-1).astype(float)
        stable = is_stable(np.tensordot(vector, basis(self.symmetry), axes=1))
        modulus = _quasi_longitudinal(vector @ np.array(self.weights))
        return np.sqrt(np.where(stable & (modulus > 0), modulus, np.nan) / density)


def _quasi_longitudinal(components: Array) -> Array:
    """Eigenvalue, shape (...), of the wave polarised most nearly along z, from components of shape (..., 6)."""
    xx, yy, zz, yz, xz, xy = np.moveaxis(components, -1, 0)
    matrix = np.stack([np.stack(r, axis=-1) for r in ((xx, xy, xz), (xy, yy, yz), (xz, yz, zz))], axis=-2)
    moduli, vectors = np.linalg.eigh(np.where(np.isfinite(matrix), matrix, 0.0))
    along = np.argmax(vectors[..., 2, :] ** 2, axis=-1)[..., None]
    return np.asarray(np.take_along_axis(moduli, along, axis=-1)[..., 0])


def _product(a: Any, b: Any) -> Any:
    return np.asarray(a) * np.asarray(b)


def _density(place: str, slots: Slots) -> Slot:
    if "density" in slots:
        return slots["density"]
    inputs = (slots["density_ratio"], slots["substrate_density"])
    return ComputedSlot(f"{place}.density", "density", np.nan, inputs=inputs, formula=_product)


def cut_slots(place: str, material: Material, slots: Slots) -> Slots:
    """Return the velocity along the depth of a medium known by its constants.

    Parameters
    ----------
    place : str
    material : Material
    slots : dict
        The medium's other places; its density is used.

    Raises
    ------
    ValueError
        If the orientation is missing or means nothing.
    """
    given = material.stiffness or {}
    symmetry = given["symmetry"]
    if material.orientation is None and symmetry != "isotropic":
        raise ValueError(
            f"{place} has the stiffness of a {symmetry} crystal but no orientation; give the direction of its depth, "
            "such as orientation='100' or three components."
        )
    weights = tuple(map(tuple, _weights(symmetry, material.orientation).tolist()))
    inputs = (*constant_slots(place, material), _density(place, slots))
    velocity = ComputedSlot(
        f"{place}.velocity", "velocity", np.nan, inputs=inputs, formula=_Velocity(symmetry, weights)
    )
    return {"velocity": velocity}


def depth_slots(place: str, material: Material, slots: Slots) -> Slots:
    """Return the depth's Christoffel matrix and shear stresses of a medium, for three components.

    Parameters
    ----------
    place : str
    material : Material
    slots : dict
        The medium's other places.

    Returns
    -------
    dict
        ``depth_xx`` to ``depth_xy`` in GPa, ``thermal_stress_xz`` and ``thermal_stress_yz`` in GPa/K, and
        ``photoelastic_xz`` and ``photoelastic_yz``.

    Raises
    ------
    ValueError
        If nothing says how the medium shears.
    """
    if material.stiffness is None:
        raise ValueError(
            f"{place} stands in a stack with an oblique cut, where every medium shears; give its stiffness, such as "
            "stiffness={'symmetry': 'isotropic', 'c11': ..., 'c44': ...} in GPa."
        )
    shears = {
        field: slot_of(
            field,
            getattr(material, field) or 0.0,
            place,
            DEFAULT if getattr(material, field) is None else GIVEN,
            0.0,
        )
        for field in ("thermal_stress_xz", "thermal_stress_yz", "photoelastic_xz", "photoelastic_yz")
    }
    return {
        **(_sums(place, material, slots) if is_cut(material) else _scaled(place, material, slots)),
        **shears,
    }


def _sums(place: str, material: Material, slots: Slots) -> Slots:
    """Return weighted sums of the constants that the velocity already stands on."""
    velocity = slots["velocity"]
    assert isinstance(velocity, ComputedSlot)
    weights = _weights((material.stiffness or {})["symmetry"], material.orientation)
    return {
        f"depth_{name}": Slot(
            f"{place}.depth_{name}",
            "longitudinal_modulus",
            np.nan,
            terms=tuple(zip(velocity.inputs[:-1], map(float, column), strict=True)),
        )
        for name, column in zip(COMPONENTS, weights.T, strict=True)
    }


@dataclass(frozen=True)
class _Share:
    """A fixed share of density x velocity squared."""

    share: float

    def __call__(self, density: ArrayLike, velocity: ArrayLike) -> Array:
        return np.asarray(self.share * np.asarray(density) * np.asarray(velocity) ** 2)


def _scaled(place: str, material: Material, slots: Slots) -> Slots:
    """Scale the shape of a known stiffness to the velocity that is given or sought."""
    given = dict(material.stiffness or {})
    tensor = StiffnessTensor.from_constants(given.pop("symmetry"), given)
    if material.orientation is None and tensor.symmetry != "isotropic":
        hill = averages(tensor)
        shear = float(hill.shear / (hill.bulk + 4 / 3 * hill.shear))
        shares = np.array([shear, shear, 1.0, 0.0, 0.0, 0.0])
    else:
        components = tensor.vector @ _weights(tensor.symmetry, material.orientation)
        shares = components / components[2]
    inputs = (_density(place, slots), slots["velocity"])
    return {
        f"depth_{name}": ComputedSlot(
            f"{place}.depth_{name}",
            "longitudinal_modulus",
            np.nan,
            inputs=inputs,
            formula=_Share(float(share)),
        )
        for name, share in zip(COMPONENTS, shares, strict=True)
    }
