"""Plane-wave velocities against published numbers, in km/s (= nm/ps), and the traps in published tables."""

import numpy as np
import pytest
from elastic_cases import CUBIC_CRC, SAPPHIRE_CRC, SAPPHIRE_WACHTMAN, cubic

from inverse.elastic import StiffnessTensor, averages, longitudinal_velocity, phase_velocities

DIAMOND = {"c11": 1079.0, "c12": 124.0, "c44": 578.0}  # McSkimin and Andreatch 1972

# Computed outside this library from the same constants, m/s:
# [100] L T, [110] L T1 T2, [111] L T, Hill L T.
COMPUTED = {
    "Si": (8435.8, 5846.2, 9136.9, 5846.2, 4675.2, 9358.9, 5095.5, 8950.5, 5345.1),
    "Ge": (4910.2, 3538.7, 5395.1, 3538.7, 2743.2, 5547.3, 3031.6, 5262.0, 3195.1),
    "GaAs": (4726.3, 3343.6, 5234.5, 3343.6, 2473.3, 5393.3, 2793.7, 5087.7, 2962.6),
    "Cu": (4340.8, 2911.2, 4968.0, 2911.2, 1623.8, 5160.1, 2140.7, 4734.6, 2305.9),
    "Al": (6291.3, 3241.6, 6441.9, 3241.6, 2931.0, 6491.3, 3038.1, 6407.2, 3113.5),
    "Au": (3159.1, 1475.8, 3375.5, 1475.8, 874.0, 3444.6, 1111.4, 3297.0, 1196.6),
    "Ag": (3436.4, 2095.8, 3841.5, 2095.8, 1201.6, 3967.4, 1557.8, 3692.9, 1677.9),
    "W": (5208.4, 2887.7, 5216.2, 2887.7, 2873.5, 5218.8, 2878.3, 5214.6, 2882.0),
    "Ni": (5276.8, 3733.5, 6046.0, 3733.5, 2286.9, 6281.5, 2851.9, 5781.0, 3067.7),
    "Pt": (4015.7, 1886.3, 4177.5, 1886.3, 1494.2, 4230.0, 1635.4, 4133.3, 1718.0),
    "Mo": (6733.1, 3267.4, 6407.6, 3867.0, 3267.4, 6295.4, 3678.0, 6456.9, 3495.9),
    "Ta": (3956.0, 2228.3, 4175.3, 2228.3, 1783.7, 4245.9, 1943.2, 4116.6, 2038.1),
    "Cr": (6869.8, 3708.1, 6435.6, 4419.0, 3708.1, 6284.2, 4195.5, 6500.9, 3978.5),
    "MgO": (9115.5, 6603.8, 9934.2, 6603.8, 5292.8, 10192.5, 5763.0, 9717.7, 6043.1),
}

# name: density, constants, L and T along c in m/s, computed outside this library too.
AXIAL = {
    "sapphire, CRC": (3.99, SAPPHIRE_CRC, 11184.4, 6077.8),
    "sapphire, Wachtman 1960": (3.986, SAPPHIRE_WACHTMAN, 11178.7, 6081.1),  # density from memory
    "GaN, Brillouin scattering 1996": (
        6.10,
        {"c11": 390.0, "c12": 145.0, "c13": 106.0, "c33": 398.0, "c44": 105.0},
        8077.5,
        4148.9,
    ),
    "AlN, McNeil 1993": (
        3.255,
        {"c11": 410.0, "c12": 148.5, "c13": 98.9, "c33": 388.5, "c44": 124.6},
        10925.0,
        6187.0,
    ),
    "Ti, CRC": (
        4.506,
        {"c11": 162.4, "c12": 92.0, "c13": 69.0, "c33": 180.7, "c44": 46.7},
        6332.6,
        3219.3,
    ),
    "Co, CRC": (
        8.836,
        {"c11": 307.1, "c12": 165.0, "c13": 102.7, "c33": 358.1, "c44": 75.5},
        6366.1,
        2923.1,
    ),
    "graphite, Bosak 2007": (  # density from memory
        2.26,
        {"c11": 1109.0, "c12": 139.0, "c13": 0.0, "c33": 38.7, "c44": 4.95},
        4138.1,
        1480.0,
    ),
}


def three_directions(tensor: StiffnessTensor, density: float) -> np.ndarray:
    """[100] L T, [110] L T1 T2, [111] L T."""
    v100, v110, v111 = (phase_velocities(tensor, density, name) for name in ("100", "110", "111"))
    return np.array([*v100[:2], *v110, *v111[:2]])


def test_diamond_agrees_with_every_digit_printed() -> None:
    # Ioffe Institute, NSM archive, diamond: mechanical properties.
    printed = [17.52, 12.82, 18.32, 12.82, 11.66, 18.58, 12.06]
    velocities = three_directions(StiffnessTensor.cubic(**DIAMOND), 3.515)
    np.testing.assert_allclose(velocities, printed, atol=0.0051, rtol=0)


def test_gallium_arsenide_agrees_with_published_velocities() -> None:
    # Ioffe Institute, NSM archive, AlGaAs at x = 0 (Adachi 1985).
    printed = [4.73, 3.34, 5.24, 3.34, 2.47, 5.40, 2.79]
    np.testing.assert_allclose(three_directions(cubic("GaAs"), 5.3169), printed, atol=0.0075, rtol=0)


def test_indium_phosphide_agrees_with_published_velocities() -> None:
    # matprop.ru, GaInP at x = 0 (Ioffe data), constants and density from the same source.
    printed = [4.58, 3.08, 5.08, 3.08, 2.16, 5.23, 2.51]
    tensor = StiffnessTensor.cubic(c11=101.1, c12=56.1, c44=45.6)
    np.testing.assert_allclose(three_directions(tensor, 4.81), printed, atol=0.0075, rtol=0)


def test_silicon_agrees_with_published_velocities() -> None:
    # Wikipedia, speeds of sound: c11 = 165.64, c44 = 79.51, density 2.329 give 8.433 and 5.843.
    tensor = StiffnessTensor.cubic(c11=165.64, c12=63.94, c44=79.51)
    np.testing.assert_allclose(phase_velocities(tensor, 2.329, "100")[:2], [8.433, 5.843], atol=6e-4, rtol=0)


@pytest.mark.parametrize("name", sorted(COMPUTED))
def test_cubic_crystals_along_the_three_axes(name: str) -> None:
    density = CUBIC_CRC[name][0]
    velocities = 1e3 * three_directions(cubic(name), density)
    np.testing.assert_allclose(velocities, COMPUTED[name][:7], atol=0.051, rtol=0)


@pytest.mark.parametrize("name", sorted(COMPUTED))
def test_hill_velocities_of_cubic_polycrystals(name: str) -> None:
    density = CUBIC_CRC[name][0]
    hill = averages(cubic(name))
    velocities = [hill.longitudinal_velocity(density), hill.transverse_velocity(density)]
    np.testing.assert_allclose(1e3 * np.array(velocities), COMPUTED[name][7:], atol=0.051, rtol=0)


@pytest.mark.parametrize("name", sorted(AXIAL))
def test_axial_crystals_along_c(name: str) -> None:
    density, given, longitudinal, transverse = AXIAL[name]
    tensor = StiffnessTensor.trigonal(**given) if "c14" in given else StiffnessTensor.hexagonal(**given)
    velocities = 1e3 * phase_velocities(tensor, density, "c")
    np.testing.assert_allclose(velocities, [longitudinal, transverse, transverse], atol=0.051, rtol=0)


def test_sapphire_along_x_and_y_differs_because_of_c14() -> None:
    tensor = StiffnessTensor.trigonal(**SAPPHIRE_CRC)
    x, y = (1e3 * phase_velocities(tensor, 3.99, axis) for axis in ("a", "m"))
    np.testing.assert_allclose(x, [11164.6, 6763.4, 5742.2], atol=0.051, rtol=0)
    np.testing.assert_allclose(y, [11182.4, 6463.5, 6045.1], atol=0.051, rtol=0)
    hexagonal = StiffnessTensor.hexagonal(**{k: v for k, v in SAPPHIRE_CRC.items() if k != "c14"})
    np.testing.assert_allclose(
        phase_velocities(hexagonal, 3.99, "x"), phase_velocities(hexagonal, 3.99, "y"), rtol=1e-12
    )


@pytest.mark.parametrize("name", sorted(CUBIC_CRC))
def test_closed_forms_of_cubic_crystals(name: str) -> None:
    # Printed on the pages above; they misprint the direction of the second row as [100], it is [110].
    density, c11, c12, c44 = CUBIC_CRC[name]
    squares = [
        [c11, c44, c44],
        [(c11 + c12 + 2 * c44) / 2, c44, (c11 - c12) / 2],
        [(c11 + 2 * c12 + 4 * c44) / 3, (c11 - c12 + c44) / 3, (c11 - c12 + c44) / 3],
    ]
    directions = [[1, 0, 0], [1, 1, 0], [1, 1, 1]]
    expected = -np.sort(-np.sqrt(np.array(squares) / density), axis=1)
    np.testing.assert_allclose(phase_velocities(cubic(name), density, directions), expected, rtol=1e-12)


def test_trap_platinum_polycrystal_velocity_is_not_that_of_its_own_crystal() -> None:
    # CRC prints 3260 m/s for polycrystalline Pt; its single-crystal constants give 4133, 27 % more.
    hill = 1e3 * float(averages(cubic("Pt")).longitudinal_velocity(21.5))
    assert hill / 3260.0 == pytest.approx(1.27, abs=0.005)


def test_trap_a_tabulated_velocity_of_sound_may_be_that_of_a_rod() -> None:
    # Tables print 5100 m/s for Al: sqrt(E / density) of a thin rod, not the 6407 m/s of a film's depth.
    hill = averages(cubic("Al"))
    rod = 1e3 * np.sqrt(float(hill.young) / 2.697)
    assert rod == pytest.approx(5100.0, rel=0.005)
    assert 1e3 * float(hill.longitudinal_velocity(2.697)) == pytest.approx(1.25 * rod, rel=0.01)


def test_trap_copper_c12_of_the_82nd_edition() -> None:
    # The 82nd edition prints c12 = 122.1, later ones 121.2: 2 % in the slow transverse wave along [110].
    old = StiffnessTensor.cubic(c11=168.3, c12=122.1, c44=75.7)
    slow = phase_velocities(old, 8.932, "110")[2] / phase_velocities(cubic("Cu"), 8.932, "110")[2]
    assert slow == pytest.approx(np.sqrt((168.3 - 122.1) / (168.3 - 121.2)), rel=1e-12)


def test_trap_molybdenum_rigidity_is_not_20_GPa() -> None:
    # A table gives 20 GPa, others 124: the crystal's own constants decide.
    assert float(averages(cubic("Mo")).shear) == pytest.approx(124.0, abs=1.5)


def test_trap_aluminium_nitride_c66_of_a_database_record_is_refused() -> None:
    # A database record prints c66 = 229.25; (c11 - c12) / 2 is 130.75.
    given = AXIAL["AlN, McNeil 1993"][1]
    with pytest.raises(
        ValueError, match=r"c66 = 229\.25 GPa contradicts .* 0\.5 c11 - 0\.5 c12 = 130\.75 GPa"
    ):
        StiffnessTensor.hexagonal(**given, c66=229.25)
    assert StiffnessTensor.hexagonal(**given, c66=130.75).voigt[5, 5] == 130.75


def test_trap_diamond_constants_of_an_optics_handbook_miss_the_published_velocity() -> None:
    # Handbook of Optical Materials (2003) has 1040, 170, 550; the published 17.52 km/s needs 1079.
    wrong = StiffnessTensor.cubic(c11=1040.0, c12=170.0, c44=550.0)
    assert longitudinal_velocity(wrong, 3.515, "100") == pytest.approx(17.20, abs=0.005)


def test_trap_sign_of_sapphire_c14_is_a_choice_of_axes() -> None:
    # -23.5 (Wachtman), "positive" (Arakawa 2008): half a turn about c changes it, and swaps y+z and y-z.
    tensor = StiffnessTensor.trigonal(**SAPPHIRE_WACHTMAN)
    flipped = StiffnessTensor.trigonal(**{**SAPPHIRE_WACHTMAN, "c14": 23.5})
    np.testing.assert_allclose(tensor.rotated(np.diag([-1.0, -1.0, 1.0])).voigt, flipped.voigt, atol=1e-10)
    for axis in "xyz":
        np.testing.assert_allclose(
            phase_velocities(tensor, 3.99, axis), phase_velocities(flipped, 3.99, axis), rtol=1e-12
        )
    up, down = phase_velocities(tensor, 3.99, [[0, 1, 1], [0, 1, -1]])
    assert abs(up[0] / down[0] - 1.0) > 0.02
    np.testing.assert_allclose(phase_velocities(flipped, 3.99, [0, 1, 1]), down, rtol=1e-12)
