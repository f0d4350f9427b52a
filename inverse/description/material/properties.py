"""Materials: the constants of a medium, from the user or from the reference tables."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import KW_ONLY, dataclass, field, fields
from typing import Any

from inverse.description.material.reference_tables import Entry, find, index_table
from inverse.description.material.reference_values import DEFAULT_SPREAD, reference_values, stiffness
from inverse.description.material.refractive_index import IndexTable, check_index
from inverse.description.material.stiffness_values import checked_stiffness
from inverse.description.quantities import check
from inverse.description.unknowns import Unknown, is_unknown, shown, validate_prior

__all__ = ["Material", "material"]

_REAL = (
    "density",
    "velocity",
    "heat_capacity",
    "conductivity",
    "thermal_stress_coefficient",
    "expansion",
    "bulk_modulus",
    "electron_heat_capacity",
    "electron_phonon_coupling",
    "electron_gruneisen",
    "lattice_share",
    "band_gap",
    "deformation_potential",
    "carrier_diffusivity",
    "carrier_lifetime",
    "surface_recombination",
    "initial_stress",
    "initial_stress_lifetime",
    "attenuation_time",
    "attenuation_exponent",
    "quality_factor",
    "quality_frequency",
    "thermal_stress_xz",
    "thermal_stress_yz",
    "photoelastic_xz",
    "photoelastic_yz",
)
_COMPLEX = ("dn_dstrain", "dn_dT", "dn_dN")


@dataclass(frozen=True, eq=False)
class Material:
    """A medium and its constants; anything may stay out until it is needed.

    Each number may instead be a frozen ``scipy.stats`` distribution or an `Unknown`: then it is sought.
    A complex quantity takes a complex number, or a pair (real, imaginary) of numbers and unknowns.

    Parameters
    ----------
    name : str
        Name it goes by in results; without ``|``, ``#`` and ``/``.
    density : float
        Mass density in g/cm3.
    velocity : float
        Longitudinal sound velocity along the depth in nm/ps.
    n : complex, pair, mapping or IndexTable
        Refractive index n' + i n'' with n'' >= 0 (time factor e^{-i w t}): one value for all wavelengths, a
        mapping from vacuum wavelength in nm to values, or a table, such as `read_index` returns.
    heat_capacity : float
        Volumetric heat capacity of the lattice in J/cm3/K.
    conductivity : float
        Thermal conductivity in W/m/K.
    thermal_stress_coefficient : float
        Stress along the depth per kelvin at zero strain in GPa/K; 3 x bulk modulus x expansion if isotropic.
    expansion, bulk_modulus : float
        Linear expansion in 1/K and bulk modulus in GPa: the other way to give the thermal stress coefficient.
    dn_dstrain, dn_dT : complex
        Change of n with strain along the depth (dimensionless) and with temperature (1/K). Numbers are for
        `simulate`: a fit finds the coefficients by itself unless a part of the pair is a prior.
    dn_dN : complex
        Change of n per density of photo-carrier pairs in nm3 (1e-21 cm3), of a semiconductor with a band_gap;
        `simulate` takes 0 where it is left out.
    electron_heat_capacity : float
        Volumetric heat capacity of the electrons, gamma_e T_0, in J/cm3/K.
    electron_phonon_coupling : float
        In W/m3/K; inf asks for one temperature.
    electron_gruneisen : float
        Pressure of the electrons over their heat content; with it hot electrons press on the lattice by themselves.
    lattice_share : float
        What of the conductivity is the lattice's, 0 to 0.95, where it has two temperatures; the rest is the electrons'.
        0 by default. Heat passes interfaces with the electrons.
    band_gap, deformation_potential : float
        Of a semiconductor whose photo-carriers count: energy of a pair, and its change with strain along the depth,
        in eV. The gap shrinks under tension where the latter is negative; then pairs expand the lattice.
    carrier_diffusivity, carrier_lifetime, surface_recombination : float
        Ambipolar diffusivity in cm2/s, lifetime in ps (default inf), and the velocity of recombination at the top of
        the medium in cm/s (default 0).
    initial_stress, initial_stress_lifetime : float
        Stress that the pulse sets up by itself, screening a piezoelectric field for instance: GPa per J/m2 of incident
        fluence, positive where it expands the medium, and its lifetime in ps (default inf). See `stressed`.
    attenuation_time, attenuation_exponent : float
        Acoustic loss c = rho v^2 (1 + (s tau)^y): tau in ps and y from 0 to 1.
    quality_factor, quality_frequency : float
        Acoustic loss of constant Q: Q, and the frequency in THz at which the velocity holds.
    stiffness : mapping
        Elastic constants ``{"symmetry": "cubic", "c11": ...}`` in GPa, numbers or unknowns. Without a velocity
        the longitudinal one along the depth follows from them and the orientation.
    orientation : str or array_like, shape (3,)
        Crystal direction of the depth, as `inverse.elastic.crystal_direction` takes it.
    thermal_stress_xz, thermal_stress_yz : float
        Shear stress per kelvin at zero strain in GPa/K, in an obliquely cut layer (x and y as in
        `inverse.elastic.rotation_to_z`); 0 by default, as in every cubic crystal. See
        `inverse.elastic.thermal_stress`.
    photoelastic_xz, photoelastic_yz : float
        Index change by shear strain u_x' and u_y' over that by strain along the depth, for the probe's
        polarisation, in an obliquely cut layer; 0 by default: shear is not seen. See
        `inverse.elastic.photoelastic_ratios`.
    sources : mapping of str to str
        Text of the source of each field.
    spread : mapping of str to float
        Standard-deviation-like uncertainty of each field, in the field's unit; n's is in the `IndexTable`.

    Raises
    ------
    ValueError
        If a value is out of range or looks like another unit, n'' is negative, or a given thermal stress
        coefficient contradicts 3 x bulk modulus x expansion.

    Examples
    --------
    >>> film = Material("alloy", density=8.1, velocity=5.2, n={800: 3.1 + 4.0j})
    >>> film.index_at(800)
    (3.1+4j)
    """

    name: str
    _: KW_ONLY
    density: Any = None
    velocity: Any = None
    n: Any = None
    heat_capacity: Any = None
    conductivity: Any = None
    thermal_stress_coefficient: Any = None
    expansion: Any = None
    bulk_modulus: Any = None
    dn_dstrain: Any = None
    dn_dT: Any = None
    dn_dN: Any = None
    electron_heat_capacity: Any = None
    electron_phonon_coupling: Any = None
    electron_gruneisen: Any = None
    lattice_share: Any = None
    band_gap: Any = None
    deformation_potential: Any = None
    carrier_diffusivity: Any = None
    carrier_lifetime: Any = None
    surface_recombination: Any = None
    initial_stress: Any = None
    initial_stress_lifetime: Any = None
    attenuation_time: Any = None
    attenuation_exponent: Any = None
    quality_factor: Any = None
    quality_frequency: Any = None
    thermal_stress_xz: Any = None
    thermal_stress_yz: Any = None
    photoelastic_xz: Any = None
    photoelastic_yz: Any = None
    orientation: Any = None
    stiffness: Mapping[str, Any] | None = None
    sources: Mapping[str, str] = field(default_factory=dict, repr=False)
    spread: Mapping[str, float] = field(default_factory=dict, repr=False)

    def __post_init__(self) -> None:
        if not isinstance(self.name, str) or not self.name.strip() or set(self.name) & set("|#/"):
            raise ValueError(f"Material name {self.name!r}: give a non-empty text without '|', '#' and '/'.")
        for key in _REAL:
            self._set(key, _real(key, getattr(self, key), self.name))
        for key in _COMPLEX:
            self._set(key, _complex(key, getattr(self, key), self.name))
        self._set("n", _index(self.n, self.name))
        self._set("stiffness", checked_stiffness(self.stiffness, self.name))
        self._set("thermal_stress_coefficient", _thermal_stress(self))
        self._set("sources", dict(self.sources))
        self._set("spread", dict(self.spread))

    def __repr__(self) -> str:
        """Write the name and the fields that hold something."""
        held = {f.name: getattr(self, f.name) for f in fields(self) if f.repr and f.name != "name"}
        said = (f"{name}={shown(value)}" for name, value in held.items() if value is not None)
        return f"Material({', '.join([repr(self.name), *said])})"

    def _set(self, key: str, value: Any) -> None:
        object.__setattr__(self, key, value)

    def index_at(self, wavelength: float) -> Any:
        """Return the refractive index at a vacuum wavelength, linear between table points.

        Parameters
        ----------
        wavelength : float
            Vacuum wavelength in nm.

        Returns
        -------
        complex or tuple
            n' + i n''; a pair (real, imaginary) where a part is unknown.

        Raises
        ------
        ValueError
            If there is no index, the wavelength is outside the table, or unknown values would have to be
            interpolated.
        """
        wavelength = check("wavelength", wavelength, self.name)
        if self.n is None:
            raise ValueError(
                f"{self.name} has no refractive index; give n={{{wavelength:g}: complex}} or a table."
            )
        if isinstance(self.n, IndexTable):
            return self.n.at(wavelength)
        if not isinstance(self.n, Mapping):
            return self.n
        near = min(self.n, key=lambda w: abs(w - wavelength))
        if abs(near - wavelength) < 1e-9:
            return self.n[near]
        if any(isinstance(value, tuple) for value in self.n.values()):
            given = ", ".join(f"{w:g}" for w in self.n)
            raise ValueError(
                f"{self.name} has unknown refractive indices (given at {given} nm) and was asked at "
                f"{wavelength:g} nm; unknowns are not interpolated. Add n at {wavelength:g} nm."
            )
        return IndexTable(tuple(self.n), tuple(self.n.values()), source=self._source("n")).at(wavelength)

    def index_spread_at(self, wavelength: float) -> complex:
        """Return the spread of n' and n'' between sources at a wavelength in nm, as one complex number.

        It is 0 where the index came without a spread.
        """
        return self.n.spread_at(wavelength) if isinstance(self.n, IndexTable) else 0j

    def _source(self, key: str) -> str:
        return f"{self.name}, {self.sources.get(key, 'given by the user')}"


def _real(key: str, value: Any, where: str) -> Any:
    """Check one number or prior."""
    if value is None:
        return None
    if is_unknown(value):
        validate_prior(key, value.prior if isinstance(value, Unknown) else value, where)
        return value
    return check(key, value, where)


def _complex(key: str, value: Any, where: str) -> Any:
    """Check a complex number, or a pair whose members may be priors."""
    if value is None:
        return None
    if is_unknown(value):
        raise ValueError(
            f"{where}.{key} is complex: give a pair (real, imaginary), such as ({key}_prior, 0.0)."
        )
    if isinstance(value, tuple | list):
        if len(value) != 2:
            raise ValueError(f"{where}.{key} got {len(value)} parts; give a pair (real, imaginary).")
        parts = tuple(
            _real(f"{key}_{part}", v, where) for part, v in zip(("real", "imag"), value, strict=True)
        )
        return parts if any(is_unknown(p) for p in parts) else complex(*parts)
    try:
        number = complex(0 + value)  # a text would be parsed, but cannot be added to
    except (TypeError, ValueError):
        raise ValueError(
            f"{where}.{key} = {value!r} is not a complex number; write it like 1.5+0.2j."
        ) from None
    return complex(check(f"{key}_real", number.real, where), check(f"{key}_imag", number.imag, where))


def _index(value: Any, where: str) -> Any:
    """Check a refractive index in any of its forms."""
    if value is None or isinstance(value, IndexTable):
        return value
    if isinstance(value, Mapping):
        if not value:
            raise ValueError(f"{where}.n is an empty mapping; give wavelength in nm -> complex index.")
        checked = {check("wavelength", w, f"{where}.n"): v for w, v in value.items()}
        return {w: _index_value(checked[w], f"{where}.n at {w:g} nm") for w in sorted(checked)}
    return _index_value(value, f"{where}.n")


def _index_value(value: Any, where: str) -> Any:
    if is_unknown(value) or isinstance(value, tuple | list):
        return _complex("n", value, where)
    return check_index(value, where)


def _thermal_stress(given: Material) -> Any:
    """Return the coefficient, from expansion and bulk modulus where it is left out and both are numbers."""
    parts = (given.expansion, given.bulk_modulus)
    if any(p is None or is_unknown(p) for p in parts):
        return given.thermal_stress_coefficient
    product = 3 * given.expansion * given.bulk_modulus
    stated = given.thermal_stress_coefficient
    if stated is None:
        return check("thermal_stress_coefficient", product, given.name)
    if is_unknown(stated) or abs(stated - product) > 0.01 * abs(product):
        raise ValueError(
            f"{given.name} got thermal_stress_coefficient = {stated} GPa/K and also expansion and "
            f"bulk_modulus, whose 3 x bulk modulus x expansion is {product:g} GPa/K; give one or the other."
        )
    return stated


def material(name: str, orientation: str | None = None, *, index_series: str | None = None) -> Material:
    """Return a reference material, every number with its source and its spread.

    The values are those of the bulk. Deposited films differ by some per cent in velocity and density and by
    much more in conductivity: `film_prior` gives priors that admit it.

    Parameters
    ----------
    name : str
        Name or alias, whatever the case: ``"Al"``, ``"aluminium"``, ``"sapphire"``, ``"silica"``.
    orientation : str, optional
        Direction of the depth in the crystal: ``"100"``, ``"110"`` or ``"111"`` in cubic ones, ``"c"`` in
        hexagonal and trigonal ones. Single crystals need it; metals are polycrystals without it.
    index_series : str, optional
        Series of refractive index in place of the default (``reference_materials/optical_series.csv``).

    Returns
    -------
    Material
        `sources` begin with ``from memory`` where a number was recalled and not read in its source (inside
        the text where it is one of several inputs). `spread` holds the larger of the standard deviation
        between the table's sources and this project's least relative spread
        (`inverse.description.material.reference_values.DEFAULT_SPREAD`).

    Raises
    ------
    ValueError
        If the name is unknown (near ones are listed), or the orientation is missing or not in the table.

    Examples
    --------
    >>> silicon = material("Si", "100")
    >>> round(silicon.velocity, 3)
    8.436
    """
    entry = find(name)
    direction = _orientation(entry, orientation)
    values = reference_values(entry, direction)
    table = index_table(entry.name, index_series, DEFAULT_SPREAD["n"])
    sources = {key: value.source for key, value in values.items()}
    if table is not None:
        sources["n"] = table.source
    constants = stiffness(entry)
    return Material(
        entry.name,
        n=table,
        stiffness={"symmetry": entry.symmetry, **constants} if constants else None,
        orientation=direction,
        sources=sources,
        spread={key: value.spread for key, value in values.items()},
        **{key: value.value for key, value in values.items()},
    )


def _orientation(entry: Entry, given: str | None) -> str | None:
    """Return the orientation without brackets, checked against those of the table."""
    listed = ", ".join(f"'{o}'" for o in entry.orientations)
    if given is None:
        if entry.kind == "crystal":
            raise ValueError(f"'{entry.name}' is a single crystal; give its orientation, one of {listed}.")
        return None
    plain = str(given).strip().strip("[](){}<>").lower().removesuffix("-axis").removesuffix(" axis")
    if plain not in entry.orientations:
        mend = f"give one of {listed}" if listed else "it is isotropic, so give none"
        raise ValueError(f"'{entry.name}' has no orientation {given!r} in the tables; {mend}.")
    return plain
