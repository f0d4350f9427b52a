"""Places of what launches sound beside heat: photo-carriers, and a stress given by the user."""

from __future__ import annotations

import numpy as np

from inverse.description.material.properties import Material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.slots import DEFAULT, GIVEN, Slot, Slots, slot_of

__all__ = ["CARRIERS", "carrier_slots", "initial_stress_slots"]

CARRIERS = (
    "band_gap",
    "deformation_potential",
    "carrier_diffusivity",
    "carrier_lifetime",
    "surface_recombination",
)
"""Fields of a `Material` that has photo-carriers."""

_ABSENT = {"deformation_potential": 0.0, "carrier_lifetime": np.inf, "surface_recombination": 0.0}

PLANCK = 1239.841984
"""Planck's constant times the speed of light in eV nm (exact by the SI's definitions of 2019)."""


def carrier_slots(place: str, material: Material, setup: PumpProbe) -> Slots:
    """Return the places of a medium's carriers, field -> `Slot`; none without a band gap.

    Raises
    ------
    ValueError
        If the diffusivity is missing, or a photon of the pump has less energy than the gap.
    """
    if material.band_gap is None:
        given = [field for field in (*CARRIERS, "dn_dN") if getattr(material, field) is not None]
        if given:
            raise ValueError(f"{place} has {', '.join(given)} but no band_gap; carriers need it, in eV.")
        return {}
    if material.carrier_diffusivity is None:
        raise ValueError(
            f"{place} has a band_gap but no carrier_diffusivity (cm2/s); give the ambipolar one."
        )
    photon = PLANCK / setup.pump
    slots = {
        "photon_energy": Slot(
            f"{place}.photon_energy", "photon_energy", photon, None, "the pump's wavelength"
        )
    }
    for field in CARRIERS:
        value = getattr(material, field)
        source = DEFAULT if value is None else material.sources.get(field, GIVEN)
        slots[field] = slot_of(field, _ABSENT.get(field, 0.0) if value is None else value, place, source, 0.0)
    if slots["band_gap"].value > photon:
        raise ValueError(
            f"{place} has band_gap = {slots['band_gap'].value:g} eV, more than a photon of {setup.pump:g} nm "
            f"({photon:.4g} eV) has; leave it out where the pump makes no carriers."
        )
    return slots


def initial_stress_slots(place: str, material: Material) -> Slots:
    """Return the places of a stress that the pulse sets up by itself; none where there is none."""
    if material.initial_stress is None:
        return {}
    given = material.initial_stress_lifetime
    lifetime, source = (np.inf, DEFAULT) if given is None else (given, GIVEN)
    return {
        "initial_stress": slot_of("initial_stress", material.initial_stress, place, GIVEN, 0.0),
        "initial_stress_lifetime": slot_of("initial_stress_lifetime", lifetime, place, source, 0.0),
    }
