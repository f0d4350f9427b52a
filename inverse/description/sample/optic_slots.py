"""Places for strain- and thermo-optic coefficients that are unknowns; the others are eliminated in a fit."""

from __future__ import annotations

from inverse.description.material.properties import Material
from inverse.description.sample.slots import GIVEN, Slots, slot_of
from inverse.description.sample.stack import Stack

__all__ = ["OPTIC", "eliminated_numbers", "optic_slots"]

OPTIC = ("dn_dstrain", "dn_dT", "dn_dN")


def eliminated_numbers(stack: Stack) -> list[str]:
    """Say which coefficients were given as numbers, which `simulate` uses and a fit eliminates."""
    given = {
        (medium.material.name, field): value
        for medium in stack.media
        for field in OPTIC
        if isinstance(value := getattr(medium.material, field), complex)
    }
    return [
        f"{name}.{field} = {value:.4g} was given as a number and is not used in a fit, which finds the coefficients by "
        f"itself; to hold it to what you know, give its parts as priors, {field}=(stats.norm(...), stats.norm(...))."
        for (name, field), value in given.items()
    ]


def optic_slots(material: Material) -> Slots:
    """Return the places of the coefficients of which a part is unknown, field -> `Slot`, named by the material.

    Both parts of such a pair are places: a part that is a number is taken as known. All media of one material
    share them.
    """
    slots: Slots = {}
    for field in OPTIC:
        pair = getattr(material, field)
        if isinstance(pair, tuple):
            for part, value in zip(("real", "imag"), pair, strict=True):
                name = f"{field}_{part}"
                slots[name] = slot_of(name, value, material.name, GIVEN, 0.0)
    return slots
