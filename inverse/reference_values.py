"""From the rows of the reference tables to the constants a model needs, each with source and spread."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.reference_tables import Entry, Number, between, index_table, number, rows, source_of

__all__ = ["DEFAULT_SPREAD", "longitudinal_velocity", "reference_values", "stiffness"]

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
"""Least relative spread of a reference value, a choice of this project: 2 % for what differs between films and
bulk, 5 % for the conductivity, a factor of two for the electron-phonon coupling."""

CRYSTAL_SPREAD = {
    "density": 0.002,
    "velocity": 0.005,
    "heat_capacity": 0.02,
    "thermal_stress_coefficient": 0.05,
}
"""The same for single crystals and liquids, which are what the tables describe."""

_CONSTANTS = ("c11", "c12", "c13", "c14", "c33", "c44", "c66")


@dataclass(frozen=True)
class _Average:
    bulk_modulus: float
    shear_modulus: float


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
    found = {c: rows("mechanical", entry.name, c) for c in _CONSTANTS}
    return {c: float(r[0]["value"]) for c, r in found.items() if r}


def _stiffness_sets(entry: Entry) -> list[dict[str, float]]:
    """Return all sets of elastic constants, the default first, one per source."""
    found = {c: rows("mechanical", entry.name, c) for c in _CONSTANTS}
    count = max((len(r) for r in found.values()), default=0)
    sets = [{c: float(r[i]["value"]) for c, r in found.items() if len(r) > i} for i in range(count)]
    return [s for s in sets if len(s) == len(sets[0])]


def longitudinal_velocity(constants: dict[str, float], density: float, orientation: str) -> float:
    """Return the velocity of the longitudinal wave along a pure direction, in nm/ps.

    Cubic: rho v^2 = c11 along [100], (c11 + c12 + 2 c44) / 2 along [110], (c11 + 2 c12 + 4 c44) / 3 along
    [111]; c33 along the c axis of hexagonal and trigonal crystals.

    Parameters
    ----------
    constants : dict
        Elastic constants in GPa.
    density : float
        In g/cm3.
    orientation : {"100", "110", "111", "c"}
        Direction.

    Returns
    -------
    float
        Velocity in nm/ps.

    Raises
    ------
    ValueError
        If the direction is another.
    """
    c = constants
    moduli = {
        "100": lambda: c["c11"],
        "110": lambda: (c["c11"] + c["c12"] + 2 * c["c44"]) / 2,
        "111": lambda: (c["c11"] + 2 * c["c12"] + 4 * c["c44"]) / 3,
        "c": lambda: c["c33"],
    }
    if orientation not in moduli:
        raise ValueError(f"orientation = {orientation!r}; known directions are {', '.join(moduli)}.")
    return float(np.sqrt(moduli[orientation]() / density))


def _matrix(constants: dict[str, float], symmetry: str) -> NDArray[np.float64]:
    """Return the 6 x 6 stiffness in Voigt's notation."""
    c = dict(constants)
    if symmetry == "cubic":
        c |= {"c13": c["c12"], "c33": c["c11"], "c66": c["c44"]}
    c66 = c.get("c66", (c["c11"] - c["c12"]) / 2)
    matrix = np.diag([c["c11"], c["c11"], c["c33"], c["c44"], c["c44"], c66])
    matrix[0, 1] = matrix[1, 0] = c["c12"]
    matrix[[0, 1, 2, 2], [2, 2, 0, 1]] = c["c13"]
    for i, j, sign in ((0, 3, 1), (1, 3, -1), (4, 5, 1)):
        matrix[i, j] = matrix[j, i] = sign * c.get("c14", 0.0)
    return matrix


def _voigt_reuss_hill(constants: dict[str, float], symmetry: str) -> _Average:
    """Return the isotropic moduli of a polycrystal without texture (Hill's mean of Voigt's and Reuss's)."""
    c = _matrix(constants, symmetry)
    s = np.linalg.inv(c)
    diagonal, off = np.trace(c[:3, :3]), c[0, 1] + c[0, 2] + c[1, 2]
    voigt_k, voigt_g = (diagonal + 2 * off) / 9, (diagonal - off + 3 * np.trace(c[3:, 3:])) / 15
    diagonal, off = np.trace(s[:3, :3]), s[0, 1] + s[0, 2] + s[1, 2]
    reuss_k, reuss_g = 1 / (diagonal + 2 * off), 15 / (4 * diagonal - 4 * off + 3 * np.trace(s[3:, 3:]))
    return _Average(float(voigt_k + reuss_k) / 2, float(voigt_g + reuss_g) / 2)


def _crystal_density(entry: Entry) -> Number:
    """Return the density the elastic constants belong to: the one printed with them, else the default."""
    found = rows("mechanical", entry.name, "density")
    row = next((r for r in found if r["form"] == "crystal"), found[0])
    return Number(float(row["value"]), 0.0, source_of(row))


def _constants_source(entry: Entry) -> str:
    return " and ".join(
        dict.fromkeys(source_of(r[0]) for r in (rows("mechanical", entry.name, c) for c in _CONSTANTS) if r)
    )


def _velocity(entry: Entry, orientation: str | None) -> Number | None:
    if orientation is not None:
        return _crystal_velocity(entry, orientation)
    averages = [
        float(np.sqrt((a.bulk_modulus + 4 / 3 * a.shear_modulus) / _crystal_density(entry).value))
        for a in (_voigt_reuss_hill(c, entry.symmetry) for c in _stiffness_sets(entry))
    ]
    measured = rows("mechanical", entry.name, "velocity_longitudinal")
    values = [float(row["value"]) for row in measured]
    if measured and measured[0]["default"] == "yes":
        return Number(values[0], between(values + averages[:1]), source_of(measured[0]))
    if not averages:
        return None
    text = f"Voigt-Reuss-Hill average of single-crystal constants: {_constants_source(entry)}"
    return Number(averages[0], between(averages + values), text)


def _crystal_velocity(entry: Entry, orientation: str) -> Number | None:
    sets = _stiffness_sets(entry)
    if not sets:
        return None
    density = _crystal_density(entry)
    values = [longitudinal_velocity(c, density.value, orientation) for c in sets]
    direction = "the c axis" if orientation == "c" else f"[{orientation}]"
    text = f"closed form along {direction} from elastic constants ({_constants_source(entry)}) and density ({density.source})"
    return Number(values[0], between(values), text)


def _heat_capacity(entry: Entry, density: Number | None) -> Number | None:
    """Return the volumetric heat capacity of the lattice: specific heat x density, less the electrons' share."""
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
        averages = [_voigt_reuss_hill(c, entry.symmetry).bulk_modulus for c in sets]
        return Number(averages[0], between(averages), f"from elastic constants: {_constants_source(entry)}")
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
