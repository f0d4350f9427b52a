"""From the rows of the reference tables to the constants a model needs, each with source and spread."""

from __future__ import annotations

import numpy as np

from inverse.description.material.reference_tables import (
    Entry,
    Number,
    Row,
    between,
    index_table,
    number,
    rows,
    source_of,
    uncertainty,
)
from inverse.elastic.averages import averages
from inverse.elastic.christoffel import longitudinal_velocity
from inverse.elastic.symmetry import constant_names
from inverse.elastic.tensor import StiffnessTensor

__all__ = ["CRYSTAL_SPREAD", "DEFAULT_SPREAD", "reference_values", "stiffness"]

T0 = 300.0  # K, at which the electrons' heat capacity gamma T is taken

DEFAULT_SPREAD = {
    "density": 0.02,
    "velocity": 0.02,
    "heat_capacity": 0.03,
    "conductivity": 0.05,
    "thermal_stress_coefficient": 0.10,
    "expansion": 0.05,
    "bulk_modulus": 0.03,
    "dn_dstrain": 0.30,
    "electron_heat_capacity": 0.20,
    "electron_phonon_coupling": float(np.log(2.0)),
    "n": 0.03,
}
"""Least relative spread of a reference value, a choice of this project: 2 % for what differs between films
and bulk, 5 % for the conductivity, a factor of two for the electron-phonon coupling."""

CRYSTAL_SPREAD = {
    "density": 0.002,
    "velocity": 0.005,
    "heat_capacity": 0.02,
    "thermal_stress_coefficient": 0.05,
}
"""The same for single crystals and liquids, which are what the tables describe."""


def reference_values(entry: Entry, orientation: str | None) -> dict[str, Number]:
    """Return every scalar constant the tables give for a material, by `Material` field name.

    Parameters
    ----------
    entry : Entry
        The material.
    orientation : str, optional
        Cut of a crystal; None for polycrystals, glasses and liquids.

    Returns
    -------
    dict of str to Number
        Units as in `Material`. What the tables do not give is absent.
    """
    axis = "c" if orientation == "c" else ""
    density = number("mechanical", entry.name, "density")
    found = {
        "density": density,
        "velocity": _velocity(entry, orientation),
        "heat_capacity": _heat_capacity(entry, density),
        "conductivity": number("thermal", entry.name, "conductivity", axis=axis),
        "thermal_stress_coefficient": _thermal_stress(entry, orientation),
        "dn_dstrain": _dn_dstrain(entry),
        **_isotropic_expansion(entry),
        **_electrons(entry),
    }
    return {field: _with_floor(entry, field, value) for field, value in found.items() if value is not None}


def _with_floor(entry: Entry, field: str, value: Number) -> Number:
    table = DEFAULT_SPREAD if entry.kind not in ("crystal", "liquid") else DEFAULT_SPREAD | CRYSTAL_SPREAD
    return Number(value.value, max(value.spread, table[field] * abs(value.value)), value.source)


def stiffness(entry: Entry) -> dict[str, float]:
    """Return the default elastic constants in GPa, ``{"c11": ...}``; empty if there are none."""
    return next(iter(_stiffness_sets(entry)), {})


def _constant_rows(entry: Entry) -> dict[str, list[Row]]:
    """Return the rows of each independent elastic constant the tables hold, the default first."""
    if entry.symmetry == "isotropic":
        return {}
    found = {c: rows("mechanical", entry.name, c) for c in constant_names(entry.symmetry)}
    return found if all(found.values()) else {}


def _stiffness_sets(entry: Entry) -> list[dict[str, float]]:
    """Return all complete sets of elastic constants, the default first, one per source."""
    found = _constant_rows(entry)
    complete = min((len(r) for r in found.values()), default=0)
    return [{c: float(r[i]["value"]) for c, r in found.items()} for i in range(complete)]


def _tensor(entry: Entry, constants: dict[str, float]) -> StiffnessTensor:
    return StiffnessTensor.from_constants(entry.symmetry, constants)


def _crystal_density(entry: Entry) -> Number:
    """Return the density the elastic constants belong to: the one printed with them, else the default."""
    found = rows("mechanical", entry.name, "density")
    row = next((r for r in found if r["form"] == "crystal"), found[0])
    return Number(float(row["value"]), 0.0, source_of(row))


def _constants_source(entry: Entry) -> str:
    return " and ".join(dict.fromkeys(source_of(r[0]) for r in _constant_rows(entry).values()))


def _velocity(entry: Entry, orientation: str | None) -> Number | None:
    if orientation is not None:
        return _crystal_velocity(entry, orientation)
    means = [
        float(averages(_tensor(entry, c)).longitudinal_velocity(_crystal_density(entry).value))
        for c in _stiffness_sets(entry)
    ]
    measured = rows("mechanical", entry.name, "velocity_longitudinal")
    values = [float(row["value"]) for row in measured]
    if measured and measured[0]["default"] == "yes":
        return Number(values[0], between(values + means[:1]), source_of(measured[0]))
    if not means:
        return None
    text = f"Voigt-Reuss-Hill average of single-crystal constants: {_constants_source(entry)}"
    return Number(means[0], between(means + values), text)


def _crystal_velocity(entry: Entry, orientation: str) -> Number | None:
    sets = _stiffness_sets(entry)
    if not sets:
        return None
    density = _crystal_density(entry)
    values = [_along(entry, c, density.value, orientation) for c in sets]
    direction = "the c axis" if orientation == "c" else f"[{orientation}]"
    text = f"along {direction}: elastic constants, {_constants_source(entry)}; density, {density.source}"
    return Number(values[0], max(between(values), _propagated(entry, density.value, orientation)), text)


def _along(entry: Entry, constants: dict[str, float], density: float, orientation: str) -> float:
    return float(longitudinal_velocity(_tensor(entry, constants), density, orientation))


def _propagated(entry: Entry, density: float, orientation: str) -> float:
    """Return the velocity's standard uncertainty from those printed with the elastic constants."""
    constants = stiffness(entry)
    centre = _along(entry, constants, density, orientation)
    steps = [
        _along(entry, constants | {c: constants[c] + printed}, density, orientation) - centre
        for c, found in _constant_rows(entry).items()
        if (printed := uncertainty(found[0]))
    ]
    return float(np.linalg.norm(steps))


def _heat_capacity(entry: Entry, density: Number | None) -> Number | None:
    """Return the lattice's volumetric heat capacity: specific heat x density, less the electrons' share."""
    specific = rows("thermal", entry.name, "specific_heat")
    molar = rows("thermal", entry.name, "molar_heat_capacity")
    if density is None or not specific + molar:
        return None
    values = [float(r["value"]) for r in specific] + [float(r["value"]) / entry.molar_mass for r in molar]
    text = source_of((specific + molar)[0])
    if not specific:
        text = f"{text}, over the molar mass {entry.molar_mass:g} g/mol ({entry.molar_mass_source})"
    electrons = _electrons(entry).get("electron_heat_capacity")
    share = electrons.value if electrons else 0.0
    less = f"; less the electrons' {share:.4g} J/cm3/K ({electrons.source})" if electrons else ""
    scaled = [v * density.value - share for v in values]
    return Number(
        scaled[0], between(scaled), f"specific heat x density: {text}; density: {density.source}{less}"
    )


def _isotropic_bulk_modulus(entry: Entry) -> Number | None:
    sets = _stiffness_sets(entry)
    if sets:
        moduli = [float(averages(_tensor(entry, c)).bulk) for c in sets]
        return Number(moduli[0], between(moduli), f"from elastic constants: {_constants_source(entry)}")
    fast = number("mechanical", entry.name, "velocity_longitudinal")
    slow = number("mechanical", entry.name, "velocity_transverse")
    density = number("mechanical", entry.name, "density")
    if fast is None or density is None or (slow is None and entry.kind != "liquid"):
        return None
    shear = slow.value**2 if slow else 0.0
    return Number(
        density.value * (fast.value**2 - 4 / 3 * shear), 0.0, f"density x (v_L^2 - 4/3 v_T^2): {fast.source}"
    )


def _isotropic_expansion(entry: Entry) -> dict[str, Number | None]:
    """Return expansion and bulk modulus where one number of each says it all."""
    expansion = number("thermal", entry.name, "expansion")
    modulus = _isotropic_bulk_modulus(entry)
    if expansion is None or modulus is None or (entry.kind == "crystal" and entry.symmetry != "cubic"):
        return {}
    return {"expansion": expansion, "bulk_modulus": modulus}


def _thermal_stress(entry: Entry, orientation: str | None) -> Number | None:
    """Return the stress along the depth per kelvin: 3 B alpha, or c33 alpha_c + 2 c13 alpha_a along c."""
    parts = _isotropic_expansion(entry)
    expansion, modulus = parts.get("expansion"), parts.get("bulk_modulus")
    if expansion is not None and modulus is not None:
        text = f"3 x bulk modulus ({modulus.source}) x linear expansion ({expansion.source})"
        return Number(3 * modulus.value * expansion.value, 0.0, text)
    along, across = (number("thermal", entry.name, "expansion", axis=a) for a in ("c", "a"))
    c = stiffness(entry)
    if orientation != "c" or along is None or across is None or "c33" not in c:
        return None
    text = f"c33 alpha_c + 2 c13 alpha_a: {_constants_source(entry)}; expansion: {along.source}"
    return Number(c["c33"] * along.value + 2 * c["c13"] * across.value, 0.0, text)


def _electrons(entry: Entry) -> dict[str, Number]:
    gamma = number("electrons", entry.name, "electron_heat_capacity_gamma")
    coupling = number("electrons", entry.name, "electron_phonon_coupling")
    if gamma is None or coupling is None:
        return {}
    text = f"gamma_e x {T0:g} K: {gamma.source}"
    scale = T0 * 1e-6  # J/m3/K2 -> J/cm3/K
    return {
        "electron_heat_capacity": Number(gamma.value * scale, gamma.spread * scale, text),
        "electron_phonon_coupling": coupling,
    }


def _photoelastic(material: str, constant: str) -> tuple[Number, float] | None:
    found = rows("photoelastic", material, constant)
    if not found:
        return None
    values = [float(row["value"]) for row in found]
    return Number(values[0], between(values), source_of(found[0])), float(found[0]["wavelength_nm"])


def _dn_dstrain(entry: Entry) -> Number | None:
    """Return dn/d(strain) along the depth for light across it: -n^3 p12 / 2, or -rho dn/drho in a liquid."""
    density_slope = _photoelastic(entry.name, "density_derivative")
    if density_slope is not None:
        slope, wavelength = density_slope
        return Number(-slope.value, slope.spread, f"-rho dn/drho at {wavelength:g} nm: {slope.source}")
    pockels = _photoelastic(entry.name, "p12")
    if pockels is None:
        return None
    p12, wavelength = pockels
    table = index_table(entry.name, None, 0.0)
    if table is None:
        return None
    n = table.at(wavelength).real
    factor = n**3 / 2
    return Number(
        -factor * p12.value,
        factor * p12.spread,
        f"-n^3 p12 / 2 at {wavelength:g} nm, n = {n:g}: {p12.source}",
    )
