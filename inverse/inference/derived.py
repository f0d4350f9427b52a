"""Quantities that follow from the unknowns of a stack, computed for every draw."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from inverse.description.sample.places import BoundStack, Slots
from inverse.description.sample.slots import ComputedSlot

__all__ = ["derived"]

Array = NDArray[np.float64]

FREQUENCY = 0.05
"""Frequency in THz at which reflection coefficients are reported."""


SILICA = ("SiO2", 2.20, 5.968)
"""Fused silica, the interlayer most often suspected: density in g/cm3, velocity in nm/ps (reference tables)."""


def derived(
    bound: BoundStack,
    values: Mapping[str, Array],
    *,
    interlayer: tuple[str, float, float] = SILICA,
    frequency: float = FREQUENCY,
) -> dict[str, Array]:
    """Compute the derived quantities of a stack.

    Parameters
    ----------
    bound : BoundStack
    values : mapping
        Unknown name -> array of any one shape.
    interlayer : (str, float, float)
        Name, density (g/cm3) and velocity (nm/ps) of the interlayer whose equivalent thickness is reported.
    frequency : float
        THz, of the reported reflection coefficient.

    Returns
    -------
    dict
        Per layer ``c33 = rho v^2`` (GPa; of one known by its constants ``velocity`` and
        ``longitudinal_modulus = rho v^2``), ``round_trip = 2 d / v`` (ps) and ``impedance_ratio = Z / Z_below``;
        per interface ``stiffness`` (GPa/nm; inf for a perfect bond), the magnitude of the displacement's reflection,
        ``(Z1 - Z2 + s Z1 Z2 / K) / (Z1 + Z2 + s Z1 Z2 / K)`` (Schoenberg 1980; Tas et al. 1998), and
        ``equivalent_thickness`` (nm) of a thin welded interlayer of impedance Z whose reflection has the same
        magnitude to second order in frequency, ``(c33 / K) / sqrt((1 - Z^2 / Z1^2) (1 - Z^2 / Z2^2))``: the layer's
        inertia takes back part of what its compliance does. There is none unless Z is below both. Only what
        depends on an unknown is returned.
    """
    media = [_acoustic(bound, slots, values) for slots in bound.media if "velocity" in slots]
    out: dict[str, Array] = {}
    for name, slots, (density, velocity), (lower_density, lower_velocity) in zip(
        bound.names, bound.media, media, media[1:], strict=False
    ):
        modulus = "longitudinal_modulus" if isinstance(slots["velocity"], ComputedSlot) else "c33"
        if f"{name}.{modulus}" in out or slots["thickness"].terms:
            # Periods have the same values; a slice of a graded layer has none of its own.
            continue
        thickness = bound.fill(slots, values)["thickness"]
        out[f"{name}.{modulus}"] = np.asarray(density * velocity**2)
        if isinstance(slots["velocity"], ComputedSlot):
            out[f"{name}.velocity"] = np.asarray(velocity)
        out[f"{name}.round_trip"] = np.asarray(2 * thickness / velocity)
        out[f"{name}.impedance_ratio"] = np.asarray(density * velocity / (lower_density * lower_velocity))
    for j, slots in enumerate(bound.interfaces[: len(media) - 1]):
        place = f"{bound.names[j]}|{bound.names[j + 1]}"
        compliance = np.asarray(bound.fill(slots, values)["compliance"])
        z1, z2 = (density * velocity for density, velocity in media[j : j + 2])
        spring = 2j * np.pi * frequency * z1 * z2 * compliance
        with np.errstate(divide="ignore"):
            out[f"{place}.stiffness"] = np.asarray(1 / compliance)
        _, layer_density, layer_velocity = interlayer
        z = layer_density * layer_velocity
        if np.all(z < np.minimum(z1, z2)):
            part = np.sqrt((1 - (z / z1) ** 2) * (1 - (z / z2) ** 2))
            out[f"{place}.equivalent_thickness"] = np.asarray(z * layer_velocity * compliance / part)
        out[f"{place}.reflection"] = np.abs((z1 - z2 + spring) / (z1 + z2 + spring))
    return {name: value for name, value in out.items() if value.ndim}


def _acoustic(bound: BoundStack, slots: Slots, values: Mapping[str, Array]) -> tuple[Array, Array]:
    filled = bound.fill(slots, values)
    if "density_ratio" in filled:
        filled["density"] = np.asarray(filled["density_ratio"]) * filled["substrate_density"]
    return np.asarray(filled["density"]), np.asarray(filled["velocity"])
