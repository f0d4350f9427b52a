"""Reference materials against published and independently computed numbers.

Numbers marked "computed" were evaluated outside this library from the published constants named; numbers
marked with a source were printed there.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from inverse.description.material.properties import Material, material
from inverse.description.material.reference_tables import find, read_table
from inverse.description.material.refractive_index import CoarseIndexWarning


def some_material(name: str, **keywords: str) -> Material:
    entry = find(name)
    return material(name, entry.orientations[0] if entry.kind == "crystal" else None, **keywords)


# --- optics -----------------------------------------------------------------------------------------------

# Reflectance at normal incidence, 400, 532, 800 nm (computed, the same with tmm 0.2.0), from published n, k.
REFLECTANCE = {
    ("Al", "Rakic"): (0.9238, 0.9165, 0.8682),  # Rakic 1995
    ("Au", "Johnson"): (0.4071, 0.7044, 0.9758),  # Johnson & Christy 1972
    ("Ag", "Johnson"): (0.9638, 0.9832, 0.9954),  # Johnson & Christy 1972
    ("Cu", "Johnson"): (0.4689, 0.6020, 0.9620),  # Johnson & Christy 1972
    ("W", "Weaver"): (0.4605, 0.4934, 0.4993),  # Weaver 1975
    ("Ni", "Johnson"): (0.5131, 0.6335, 0.7413),  # Johnson & Christy 1974
    ("Cr", "Johnson"): (0.5315, 0.5565, 0.5683),  # Johnson & Christy 1974
    ("Ti", "Johnson"): (0.5427, 0.5750, 0.6219),  # Johnson & Christy 1974
    ("Pt", "Rakic-LD"): (0.5567, 0.6322, 0.7112),  # Rakic 1998
    ("Si", "Aspnes"): (0.4855, 0.3744, 0.3294),  # Aspnes & Studna 1983
    ("Si", "Green-2008"): (0.4876, 0.3735, 0.3274),  # Green 2008
    ("GaAs", "Aspnes"): (0.4774, 0.3752, 0.3285),  # Aspnes 1986
    ("Ge", "Aspnes"): (0.4713, 0.5155, 0.4240),  # Aspnes & Studna 1983
    ("SiO2", "Malitson"): (0.0362, 0.0351, 0.0341),  # Malitson 1965
}

# Absorption depth lambda / (4 pi k) in nm at the same wavelengths (computed).
DEPTH = {
    ("Al", "Rakic"): (6.58, 6.60, 7.62),
    ("Au", "Johnson"): (16.30, 18.98, 12.97),
    ("Ag", "Johnson"): (15.13, 12.35, 11.43),
    ("Cu", "Johnson"): (14.94, 16.31, 12.70),
    ("W", "Weaver"): (13.18, 15.57, 23.24),
    ("Ni", "Johnson"): (12.28, 12.11, 13.01),
    ("Cr", "Johnson"): (11.17, 12.71, 18.40),
    ("Ti", "Johnson"): (10.77, 12.63, 15.88),
    ("Pt", "Rakic-LD"): (11.16, 11.75, 12.82),
    ("Si", "Aspnes"): (82.4, 818, 9729),
    ("Si", "Green-2008"): (107.5, 1301, 11760),
    ("GaAs", "Aspnes"): (14.8, 126, 743),
    ("Ge", "Aspnes"): (14.4, 17.9, 197.6),
}


@pytest.mark.parametrize(("name", "series"), REFLECTANCE)
def test_reflectance_of_the_bare_material(name: str, series: str) -> None:
    medium = some_material(name, index_series=series)
    n = np.array([medium.index_at(w) for w in (400, 532, 800)])
    assert abs((n - 1) / (n + 1)) ** 2 == pytest.approx(REFLECTANCE[name, series], abs=6e-5)


@pytest.mark.parametrize(("name", "series"), DEPTH)
def test_absorption_depth(name: str, series: str) -> None:
    medium = some_material(name, index_series=series)
    depth = [w / (4 * math.pi * medium.index_at(w).imag) for w in (400, 532, 800)]
    assert depth == pytest.approx(DEPTH[name, series], rel=4e-3)  # three printed digits


def test_blue_light_is_absorbed_within_about_ten_nanometres() -> None:
    """Common practice, no source: about 10 nm in Al and GaAs."""
    for name in ("Al", "GaAs"):
        depth = 400 / (4 * math.pi * some_material(name).index_at(400).imag)
        assert 5 < depth < 20


@pytest.mark.parametrize(
    ("name", "series"),
    [
        ("Al", "Rakic"),
        ("Si", "Green-2008"),  # ellipsometric k is 20 to 60 % too high
        ("W", "Weaver"),  # Werner: 1.13+9.20i against 3.67+2.74i at 800 nm
        ("SiO2", "Malitson"),
        ("GaAs", "Aspnes"),
    ],
)
def test_default_series(name: str, series: str) -> None:
    chosen, by_default = some_material(name, index_series=series), some_material(name)
    assert by_default.n == chosen.n
    assert by_default.index_at(800) == chosen.index_at(800)


def test_energy_loss_series_is_neither_default_nor_part_of_the_spread() -> None:
    for row in read_table("optical_series"):
        assert row["series"] != "Werner" or row["default"] == "no"
    # Weaver, Rakic and Ordal agree to 0.1 at 800 nm; Werner is 6 away.
    assert abs(material("W").index_spread_at(800)) < 0.2


def test_index_spread_is_the_deviation_between_series() -> None:
    # n' of Al at 800 nm by Rakic 1995, Rakic 1998, McPeak 2015, Cheng 2016.
    expected = np.std([2.76733, 2.67365, 2.37365, 1.83848], ddof=1)
    assert material("Al").index_spread_at(800).real == pytest.approx(expected, rel=1e-9)


def test_light_along_c_sees_the_ordinary_index() -> None:
    # Malitson & Dodge 1972 at 800 nm: ordinary 1.76013, extraordinary 1.7522.
    assert material("sapphire", "c").index_at(800) == pytest.approx(1.76013)


def test_index_between_table_points_is_linear() -> None:
    silica = material("silica")
    expected = silica.index_at(780) + 0.25 * (silica.index_at(800) - silica.index_at(780))
    assert silica.index_at(785) == pytest.approx(expected, rel=1e-12)


def test_index_far_between_table_points_warns() -> None:
    with pytest.warns(CoarseIndexWarning, match=r"at 450 nm is interpolated between 400 and 515 nm"):
        material("Al").index_at(450)


@pytest.mark.parametrize("wavelength", [399.0, 1065.0])
def test_index_outside_the_table_is_refused(wavelength: float) -> None:
    with pytest.raises(ValueError, match=rf"from 400 to 1064 nm and was asked at {wavelength:g} nm.*Give n="):
        material("Al").index_at(wavelength)


def test_an_unknown_series_is_refused() -> None:
    with pytest.raises(ValueError, match="no series of refractive index 'Palik'; it has Rakic"):
        material("Al", index_series="Palik")


# --- sound ------------------------------------------------------------------------------------------------

# Longitudinal velocities in m/s along [100], [110], [111] (computed from CRC constants and densities).
CUBIC = {
    "Si": (8435.8, 9136.9, 9358.9),
    "Ge": (4910.2, 5395.1, 5547.3),
    "GaAs": (4726.3, 5234.5, 5393.3),
    "Cu": (4340.8, 4968.0, 5160.1),
    "Al": (6291.3, 6441.9, 6491.3),
    "Au": (3159.1, 3375.5, 3444.6),
    "Ag": (3436.4, 3841.5, 3967.4),
    "W": (5208.4, 5216.2, 5218.8),
    "Ni": (5276.8, 6046.0, 6281.5),
    "Pt": (4015.7, 4177.5, 4230.0),
    "Mo": (6733.1, 6407.6, 6295.4),
    "Ta": (3956.0, 4175.3, 4245.9),
    "Cr": (6869.8, 6435.6, 6284.2),
    "MgO": (9115.5, 9934.2, 10192.5),
}


@pytest.mark.parametrize("name", CUBIC)
def test_velocities_along_cubic_directions(name: str) -> None:
    found = [1e3 * material(name, cut).velocity for cut in ("100", "110", "111")]
    assert found == pytest.approx(CUBIC[name], abs=0.06)


@pytest.mark.parametrize(
    ("name", "printed", "tolerance"),
    [
        ("diamond", (17.52, 18.32, 18.58), 0.005),  # Ioffe archive, diamond
        ("GaAs", (4.73, 5.24, 5.40), 0.0075),  # Ioffe archive, after Adachi 1985
        ("InP", (4.58, 5.08, 5.23), 0.0075),  # matprop.ru after the Ioffe archive
    ],
)
def test_velocities_printed_elsewhere(name: str, printed: tuple[float, ...], tolerance: float) -> None:
    found = [material(name, cut).velocity for cut in ("100", "110", "111")]
    assert found == pytest.approx(printed, abs=tolerance)


@pytest.mark.parametrize(
    ("name", "density", "metres_per_second"),
    [
        ("Al2O3", 3.986, 11178.7),  # Wachtman's constants, density from memory
        ("GaN", 6.10, 8077.5),
        ("AlN", 3.255, 10925.0),
        ("Ti", 4.506, 6332.6),
        ("Co", 8.836, 6366.1),
        ("graphite", 2.26, 4138.1),
    ],
)
def test_velocities_along_c(name: str, density: float, metres_per_second: float) -> None:
    """Computed from c33 and the density stated."""
    medium = material(name, "c")
    assert medium.stiffness is not None
    c33 = medium.stiffness["c33"]
    assert 1e3 * math.sqrt(c33 / density) == pytest.approx(metres_per_second, abs=0.06)
    assert 1e3 * medium.velocity == pytest.approx(metres_per_second, rel=1e-3)  # sapphire's density 3.98


@pytest.mark.parametrize(("name", "average"), [("Pt", 4133.3), ("Ta", 4116.6), ("Cr", 6500.9)])
def test_polycrystals_without_a_good_measurement_take_the_average(name: str, average: float) -> None:
    """Voigt-Reuss-Hill velocities in m/s (computed); Pt is the trap: a handbook prints 3260."""
    assert 1e3 * material(name).velocity == pytest.approx(average, abs=0.06)


@pytest.mark.parametrize(
    ("name", "printed"),
    # CRC Handbook, speed of sound (W: same table by another transcription), nm/ps.
    [
        ("Al", 6.42),
        ("Cu", 4.76),
        ("Au", 3.24),
        ("Ag", 3.65),
        ("Mo", 6.25),
        ("Ni", 6.04),
        ("Ti", 6.07),
        ("W", 5.22),
    ],
)
def test_polycrystal_velocities(name: str, printed: float) -> None:
    assert material(name).velocity == printed


# Acoustic impedances in MRayl (computed from density and velocity).
IMPEDANCE = {
    "Al": 17.334,
    "Au": 62.532,
    "Pt": 88.866,
    "Ni": 53.756,
    "Cr": 46.806,
    "Ti": 27.351,
    "Cu": 42.650,
    "Mo": 63.750,
    "SiO2": 13.130,
    "Si": 19.652,
    "GaAs": 25.129,
    "Ge": 26.139,
    "MgO": 32.670,
    "GaN": 49.273,
    "AlN": 35.561,
    "diamond": 61.585,
    "water": 1.480,
    "PMMA": 3.162,
}


@pytest.mark.parametrize("name", IMPEDANCE)
def test_impedance(name: str) -> None:
    medium = some_material(name)
    assert medium.density * medium.velocity == pytest.approx(IMPEDANCE[name], rel=4e-4)


# Brillouin frequency 2 n v / lambda in GHz at 400, 532 and 800 nm (computed from the n of the papers named).
BRILLOUIN = {
    "SiO2": (43.868, 32.773, 21.683),  # Malitson 1965
    "Si": (236.751, 131.396, 77.504),  # Green 2008, [100]
    "GaAs": (103.365, 73.438, 43.523),  # Aspnes 1986, [100]
    "water": (9.958, 7.442, 4.924),  # Daimon 2007
    "MgO": (80.317, 59.701, 39.370),
    "diamond": (215.517, 159.730, 105.334),  # Phillip & Taft 1964
    "GaN": (103.459, 73.595, 47.536),  # Barker & Ilegems 1973
    "AlN": (120.004, 88.790, 58.413),  # Pastrnak & Roskovcova 1966
}


@pytest.mark.parametrize("name", BRILLOUIN)
def test_brillouin_frequency(name: str) -> None:
    medium = some_material(name)
    found = [2e3 * medium.index_at(w).real * medium.velocity / w for w in (400, 532, 800)]
    assert found == pytest.approx(BRILLOUIN[name], rel=2e-4)


# --- heat, electrons, photoelasticity ----------------------------------------------------------------------


def test_lattice_and_electrons_together_hold_the_measured_heat() -> None:
    # CRC Handbook (2014): 0.897 J/g/K and 2.70 g/cm3 for Al, 0.444 and 8.90 for Ni.
    for name, specific, density in (("Al", 0.897, 2.70), ("Ni", 0.444, 8.90)):
        metal = material(name)
        assert metal.heat_capacity + metal.electron_heat_capacity == pytest.approx(
            specific * density, rel=1e-12
        )


def test_electron_heat_capacity_of_aluminium() -> None:
    # 2.7e4 J/m3/K is the value used with two temperatures on Al/Si traces.
    assert material("Al").electron_heat_capacity == pytest.approx(0.027, rel=0.02)
    assert material("Al").electron_phonon_coupling == 2.45e17


def test_sapphire_heat_capacity_is_not_the_vendors() -> None:
    # CRC: 79.45 J/mol/K = 0.779 J/g/K; a vendor prints 0.418, which is no room-temperature value.
    sapphire = material("sapphire", "c")
    assert sapphire.heat_capacity / sapphire.density == pytest.approx(0.779, abs=5e-4)


@pytest.mark.parametrize(("name", "series"), [("Al", 24.209), ("Cu", 24.442), ("W", 24.295), ("Si", 20.0)])
def test_specific_heats_agree_with_molar_ones(name: str, series: float) -> None:
    """NIST-JANAF molar heats at 298.15 K in J/mol/K against the handbook's specific heats."""
    medium, entry = some_material(name), find(name)
    total = medium.heat_capacity + (medium.electron_heat_capacity or 0.0)
    assert total / medium.density * entry.molar_mass == pytest.approx(series, rel=5e-3)


def test_thermal_stress_of_a_cubic_metal() -> None:
    # Al: (c11 + 2 c12) / 3 of CRC 106.75 and 60.41 GPa, expansion 23.1e-6 / K.
    expected = 3 * (106.75 + 2 * 60.41) / 3 * 23.1e-6
    assert material("Al").thermal_stress_coefficient == pytest.approx(expected, rel=1e-12)
    assert material("Al", "111").thermal_stress_coefficient == pytest.approx(expected, rel=1e-12)


def test_thermal_stress_along_c() -> None:
    # Sapphire: Wachtman's c33 = 498.1, c13 = 110.9 GPa; 5.6e-6 / K along c, 5.0e-6 across.
    assert material("Al2O3", "c").thermal_stress_coefficient == pytest.approx(
        498.1 * 5.6e-6 + 2 * 110.9 * 5.0e-6
    )


def test_thermal_stress_of_glass() -> None:
    # Fused silica: 2.2 g/cm3, 5.968 and 3.764 km/s (CRC table) make a bulk modulus of 36.8 GPa.
    silica = material("silica")
    assert silica.bulk_modulus == pytest.approx(36.8, abs=0.05)
    assert silica.thermal_stress_coefficient == pytest.approx(3 * 36.8 * 0.55e-6, rel=2e-3)


def test_strain_optic_coefficient_of_water_agrees_with_its_pressure_dependence() -> None:
    # IAPWS, 532 nm, 20 C: dn/dp at constant entropy is 1.4901e-4 / MPa; strain = -dp / (rho v^2).
    water = material("water")
    modulus = 1e3 * water.density * water.velocity**2  # MPa
    assert water.dn_dstrain.real == pytest.approx(
        -1.4901e-4 * modulus, rel=6e-3
    )  # isothermal against isentropic


def test_strain_optic_coefficient_of_silica() -> None:
    # p12 = 0.27 (from memory) and n = 1.45702 (Malitson 1965) at 633 nm.
    assert material("silica").dn_dstrain == pytest.approx(-(1.45702**3) * 0.27 / 2, rel=1e-4)
