"""The one table of named quantities: unit, symbol, allowed range, meaning and factor to the coherent system.

It drives validation at the door, axis labels, attrs of results, report columns and the conversion
from the units people write to the coherent system nm, ps, g/cm3, GPa in which the model computes.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

__all__ = ["QUANTITIES", "Quantity", "check", "quantity"]


@dataclass(frozen=True)
class Quantity:
    """A named quantity of the model.

    Attributes
    ----------
    name : str
        Field name as users write it.
    unit : str
        Unit at the public face.
    symbol : str
        Symbol for labels, in mathtext without dollar signs.
    low, high : float
        Values outside [low, high] are refused.
    meaning : str
        One line for documentation and results.
    to_coherent : float
        Factor to the coherent system nm, ps, g/cm3, GPa, K.
    suspect : str
        The unit a value outside the range was probably written in, for the error message.
    """

    name: str
    unit: str
    symbol: str
    low: float
    high: float
    meaning: str
    to_coherent: float = 1.0
    suspect: str = ""


_INF = float("inf")


def _elastic_constants() -> tuple[Quantity, ...]:
    """List the 21 constants of a crystal along its own axes; the diagonal holds moduli of single strains."""
    return tuple(
        Quantity(
            f"c{i}{j}",
            "GPa",
            f"c_{{{i}{j}}}",
            0.0 if i == j else -2e3,
            2e3,
            _constant_meaning(i, j),
            suspect="Pa or MPa",
        )
        for i in range(1, 7)
        for j in range(i, 7)
    )


def _constant_meaning(i: int, j: int) -> str:
    if (i, j) == (3, 3):
        return "elastic stiffness constant (of a layer known by its velocity: density x velocity squared)"
    return "elastic stiffness constant"


QUANTITIES: dict[str, Quantity] = {
    q.name: q
    for q in (
        Quantity("thickness", "nm", "d", 0.1, 1e6, "layer thickness", suspect="m or um"),
        Quantity(
            "thickness_spread",
            "nm",
            r"\sigma_d",
            0.0,
            1e3,
            "rms of the thickness under the spot",
            suspect="m",
        ),
        Quantity(
            "velocity", "nm/ps", "v", 0.1, 50.0, "longitudinal sound velocity along the depth", suspect="m/s"
        ),
        Quantity("density", "g/cm3", r"\rho", 1e-3, 30.0, "mass density", suspect="kg/m3"),
        Quantity("density_ratio", "1", r"\rho/\rho_s", 1e-3, 1e3, "mass density over the substrate's"),
        Quantity(
            "heat_capacity",
            "J/cm3/K",
            "C",
            1e-4,
            20.0,
            "volumetric heat capacity of the lattice",
            1e-3,
            "J/m3/K",
        ),
        Quantity("conductivity", "W/m/K", r"\kappa", 1e-5, 1e4, "thermal conductivity", 1e-3, "W/cm/K"),
        Quantity(
            "thermal_stress_coefficient",
            "GPa/K",
            r"\beta",
            -0.1,
            0.1,
            "stress per kelvin at zero strain, 3 x bulk modulus x linear expansion",
            suspect="Pa/K or MPa/K",
        ),
        Quantity(
            "photoelastic_xz", "1", "p_{xz}/p_{zz}", -1e3, 1e3, "index change by shear xz over strain zz"
        ),
        Quantity(
            "photoelastic_yz", "1", "p_{yz}/p_{zz}", -1e3, 1e3, "index change by shear yz over strain zz"
        ),
        Quantity("thermal_stress_xz", "GPa/K", r"\beta_{xz}", -0.1, 0.1, "shear stress in xz per kelvin"),
        Quantity("thermal_stress_yz", "GPa/K", r"\beta_{yz}", -0.1, 0.1, "shear stress in yz per kelvin"),
        Quantity("expansion", "1/K", r"\alpha", -1e-3, 1e-3, "linear thermal expansion", suspect="1e-6/K"),
        Quantity("bulk_modulus", "GPa", "B", 1e-3, 2e3, "bulk modulus", suspect="Pa"),
        Quantity(
            "electron_heat_capacity",
            "J/cm3/K",
            "C_e",
            1e-5,
            1.0,
            "volumetric heat capacity of the electrons",
            1e-3,
            "J/m3/K",
        ),
        Quantity(
            "electron_phonon_coupling",
            "W/m3/K",
            "g",
            1e13,
            _INF,
            "electron-phonon coupling",
            1e-21,
            "W/cm3/K",
        ),
        Quantity(
            "lattice_share", "1", r"\kappa_l/\kappa", 0.0, 0.95, "what of the conductivity is the lattice's"
        ),
        Quantity(
            "electron_gruneisen",
            "1",
            r"\gamma_e",
            -10.0,
            10.0,
            "electron pressure over the electrons' heat content",
        ),
        Quantity("band_gap", "eV", "E_g", 0.01, 15.0, "energy of an electron-hole pair", 0.1602176634),
        Quantity("photon_energy", "eV", r"h\nu", 0.01, 200.0, "energy of a photon of the pump", 0.1602176634),
        Quantity(
            "deformation_potential",
            "eV",
            "a",
            -100.0,
            100.0,
            "change of the band gap with strain",
            0.1602176634,
        ),
        Quantity(
            "carrier_diffusivity", "cm2/s", "D", 1e-4, 1e4, "ambipolar diffusivity of the carriers", 100.0
        ),
        Quantity(
            "carrier_lifetime", "ps", r"\tau_c", 1e-2, _INF, "lifetime of the carriers", suspect="s or ns"
        ),
        Quantity(
            "surface_recombination", "cm/s", "S", 0.0, 1e9, "velocity of recombination at the top", 1e-5
        ),
        Quantity(
            "initial_stress",
            "GPa m2/J",
            "S_0",
            -1e6,
            1e6,
            "stress that the pulse sets up, per incident fluence",
        ),
        Quantity(
            "initial_stress_lifetime",
            "ps",
            r"\tau_S",
            1e-2,
            _INF,
            "lifetime of the initial stress",
            suspect="s",
        ),
        Quantity(
            "attenuation_time", "ps", r"\tau_a", 0.0, 1e3, "time constant of the acoustic loss", suspect="s"
        ),
        Quantity("attenuation_exponent", "1", "y", 0.0, 1.0, "loss modulus grows as frequency to this power"),
        Quantity(
            "quality_factor", "1", "Q", 1.0, _INF, "acoustic quality factor, constant above quality_frequency"
        ),
        Quantity(
            "quality_frequency",
            "THz",
            "f_0",
            1e-5,
            10.0,
            "frequency at which the modulus is stated",
            2 * np.pi,
        ),
        Quantity("n_real", "1", "n'", 0.0, 20.0, "refractive index"),
        Quantity("n_imag", "1", "n''", 0.0, 30.0, "extinction coefficient"),
        Quantity("dn_dstrain_real", "1", r"\mathrm{Re}\,P", -1e4, 1e4, "real part of dn/d(strain)"),
        Quantity("dn_dstrain_imag", "1", r"\mathrm{Im}\,P", -1e4, 1e4, "imaginary part of dn/d(strain)"),
        Quantity("dn_dT_real", "1/K", r"\mathrm{Re}\,Q", -1.0, 1.0, "real part of dn/dT"),
        Quantity(
            "dn_dN_real", "nm3", r"\mathrm{Re}\,N", -1e4, 1e4, "real part of dn per carrier pair density"
        ),
        Quantity(
            "dn_dN_imag", "nm3", r"\mathrm{Im}\,N", -1e4, 1e4, "imaginary part of dn per carrier pair density"
        ),
        Quantity("dn_dT_imag", "1/K", r"\mathrm{Im}\,Q", -1.0, 1.0, "imaginary part of dn/dT"),
        Quantity(
            "tangential_compliance", "nm/GPa", "1/K_t", 0.0, _INF, "compliance of the bond along its plane"
        ),
        Quantity("compliance", "nm/GPa", "1/K", 0.0, _INF, "compliance of the bond; 0 is a perfect bond"),
        Quantity(
            "boundary_conductance", "MW/m2/K", "G", 0.0, _INF, "thermal boundary conductance", 1e-6, "W/m2/K"
        ),
        Quantity("roughness", "nm", "h", 0.0, 100.0, "rms roughness of the interface", suspect="m"),
        Quantity("areal_mass", "mg/m2", "m", 0.0, 1e4, "mass per area in the interface", suspect="kg/m2"),
        Quantity(
            "pulse_rms",
            "ps",
            r"\tau",
            1e-3,
            50.0,
            "rms width of the pump-probe cross-correlation",
            suspect="fs",
        ),
        Quantity("wavelength", "nm", r"\lambda", 10.0, 2e4, "vacuum wavelength", suspect="m or um"),
        Quantity("angle", "degrees", r"\theta", 0.0, 89.9, "angle of incidence"),
        Quantity("fluence", "J/m2", "F", 1e-9, 1e6, "incident pump fluence"),
        Quantity(
            "spot_radius", "um", "w", 0.1, 1e4, "radius at 1/e2 of the peak intensity", suspect="m or mm"
        ),
        Quantity(
            "probe_offset", "um", "x", 0.0, 1e4, "distance of the probe from the pump", suspect="m or mm"
        ),
        Quantity("power", "mW", "P", 1e-6, 1e5, "average power on the sample", suspect="W"),
        Quantity("repetition_rate", "MHz", "f_r", 1e-6, 1e5, "pulses per time", suspect="Hz or kHz"),
        Quantity(
            "modulation_frequency",
            "MHz",
            "f_m",
            0.0,
            1e3,
            "frequency of the pump's modulation",
            suspect="Hz or kHz",
        ),
        Quantity(
            "stage_scale",
            "1",
            r"\epsilon",
            -0.1,
            0.1,
            "elapsed time over the delay that the stage says, less one",
        ),
        Quantity(
            "overlap_drift",
            "1/ns",
            "c",
            -10.0,
            10.0,
            "relative growth of the signal per delay as the spots part",
        ),
        Quantity("time_zero", "ps", "t_0", -1e5, 1e5, "delay at which pump and probe coincide", suspect="s"),
        Quantity("noise.white", "1", r"\sigma", 0.0, _INF, "white noise, standard deviation per point"),
        Quantity("noise.discrepancy", "1", "a", 0.0, _INF, "correlated discrepancy, standard deviation"),
        Quantity("noise.correlation_time", "ps", r"\ell", 0.0, _INF, "correlation time of the discrepancy"),
        Quantity("longitudinal_modulus", "GPa", r"\rho v^2", 0.0, _INF, "density x velocity squared"),
        Quantity("round_trip", "ps", "2d/v", 0.0, _INF, "acoustic round-trip time"),
        Quantity(
            "impedance_ratio", "1", "Z/Z'", 0.0, _INF, "acoustic impedance over that of the medium below"
        ),
        Quantity("stiffness", "GPa/nm", "K", 0.0, _INF, "interface stiffness (1 GPa/nm = 1e18 N/m3)"),
        Quantity(
            "equivalent_thickness",
            "nm",
            r"d_\mathrm{eq}",
            0.0,
            _INF,
            "thickness of an interlayer that acts the same",
        ),
        Quantity("reflection", "1", "|R|", 0.0, 1.0, "magnitude of the displacement reflection coefficient"),
        *_elastic_constants(),
        Quantity("shear_modulus", "GPa", "G", 0.0, _INF, "shear modulus of the polycrystal (Hill)"),
        Quantity("young_modulus", "GPa", "E", 0.0, _INF, "Young's modulus of the polycrystal (Hill)"),
        Quantity("poisson_ratio", "1", r"\nu", -1.0, 0.5, "Poisson's ratio of the polycrystal (Hill)"),
        Quantity("universal_anisotropy", "1", "A_U", 0.0, _INF, "5 G_V/G_R + K_V/K_R - 6, zero if isotropic"),
        Quantity("brillouin_shift", "THz", "f", 1e-6, 10.0, "Brillouin shift", suspect="GHz or Hz"),
        Quantity("echo_time", "ps", "t", 1e-3, 1e6, "time of the round trip through a layer", suspect="s"),
        Quantity("scattering_angle", "degrees", r"\theta", 1e-3, 180.0, "angle of scattering of the light"),
    )
}


def quantity(unknown: str) -> Quantity:
    """Return the quantity that an unknown's dotted name refers to.

    Parameters
    ----------
    unknown : str
        ``Al.thickness``, ``Al|Si.compliance``, ``Al.n_real_800``, ``noise.white`` or a bare field.

    Raises
    ------
    ValueError
        If no part of the name is in the table.
    """
    if unknown in QUANTITIES:
        return QUANTITIES[unknown]
    field = unknown.rsplit(".", 1)[-1]
    for candidate in (field, field.rsplit("_", 1)[0]):
        if candidate in QUANTITIES:
            return QUANTITIES[candidate]
    raise ValueError(f"'{unknown}' names no known quantity; known are {', '.join(QUANTITIES)}.")


def check(name: str, value: float, where: str = "") -> float:
    """Return `value` as a float if it is a sensible value of quantity `name`.

    Parameters
    ----------
    name : str
        A key of `QUANTITIES` (or a dotted name that ends in one).
    value : float
        Value in the public unit.
    where : str
        Place, for the message, such as ``Al``.

    Raises
    ------
    ValueError
        If the value is not a number or lies outside the allowed range.
    """
    q = quantity(name)
    label = f"{where}.{name}" if where else name
    try:
        number = float(_plain(value))
    except (TypeError, ValueError):
        raise ValueError(f"{label} = {_shown(value)}; give a number in {q.unit}{_or_prior(value)}.") from None
    if np.isnan(number) or not q.low <= number <= q.high:
        hint = f" It looks like {q.suspect}; convert it to {q.unit}." if q.suspect else ""
        raise ValueError(
            f"{label} = {number:g} is outside {q.low:g} to {q.high:g} {q.unit} ({q.meaning}).{hint}"
        )
    return number


def _plain(value: Any) -> Any:
    """Refuse what float() takes and nobody means: True, and a text."""
    if isinstance(value, bool | np.bool_ | str | bytes):
        raise TypeError
    return value


def _or_prior(value: object) -> str:
    return "" if _is_prior(value) else " or a frozen continuous scipy.stats distribution"


def _is_prior(value: object) -> bool:
    return hasattr(value, "dist") and hasattr(value, "logpdf")


def _shown(value: Any) -> str:
    """Say what was given in place of a number."""
    family = getattr(value, "name", None) if callable(value) and hasattr(value, "ppf") else None
    if family is not None:
        return f"stats.{family} is a family of distributions, not yet one of them: call it with its numbers"
    if _is_prior(value):
        return f"a prior, {value.dist.name}, where only a number can stand"
    return f"{value!r} is not a number"
