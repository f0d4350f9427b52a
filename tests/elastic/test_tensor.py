"""Forms of a stiffness tensor, its constants by symmetry, its axes, and what is refused."""

import numpy as np
import pytest
from elastic_cases import (
    SAPPHIRE_CRC,
    constants,
    cubic,
    full_tensor,
    random_stable,
    stable_tensors,
    unit_vectors,
)
from hypothesis import given
from hypothesis import strategies as st

from inverse.elastic import (
    SYMMETRIES,
    StiffnessTensor,
    constant_names,
    crystal_direction,
    direction_from_c_axis,
    full_to_voigt,
    mandel_to_voigt,
    phase_velocities,
    rotation_about_axis,
    rotation_from_euler,
    rotation_to_z,
    unit_direction,
    voigt_to_mandel,
)

# Operations that generate the rotations of each symmetry: axis, degrees. Crystal physics (Nye), from memory.
GENERATORS = {
    "cubic": [("z", 90.0), ((1, 1, 1), 120.0)],
    "hexagonal": [("z", 60.0), ("x", 180.0)],
    "trigonal_6": [("z", 120.0), ("x", 180.0)],
    "trigonal_7": [("z", 120.0)],
    "tetragonal_6": [("z", 90.0), ("x", 180.0)],
    "tetragonal_7": [("z", 90.0)],
    "orthorhombic": [("x", 180.0), ("z", 180.0)],
    "monoclinic": [("y", 180.0)],
    "triclinic": [],
}
COUNTS = {
    "isotropic": 2,
    "cubic": 3,
    "hexagonal": 5,
    "trigonal_6": 6,
    "trigonal_7": 7,
    "tetragonal_6": 6,
    "tetragonal_7": 7,
    "orthorhombic": 9,
    "monoclinic": 13,
    "triclinic": 21,
}


def generators(symmetry: str) -> list[np.ndarray]:
    return [rotation_about_axis(crystal_direction(a, "cubic"), t) for a, t in GENERATORS[symmetry]]


@pytest.mark.parametrize("symmetry", sorted(SYMMETRIES))
def test_number_of_independent_constants(symmetry: str) -> None:
    assert len(constant_names(symmetry)) == COUNTS[symmetry]


@pytest.mark.parametrize("symmetry", sorted(GENERATORS))
def test_constants_are_unchanged_by_the_rotations_of_the_symmetry(symmetry: str) -> None:
    tensor = random_stable(symmetry, 11)
    for turn in generators(symmetry):
        np.testing.assert_allclose(tensor.rotated(turn).voigt, tensor.voigt, atol=1e-10)


@pytest.mark.parametrize("symmetry", sorted(GENERATORS))
def test_constants_are_all_that_the_rotations_leave_free(symmetry: str) -> None:
    # The invariant subspace of the 21 components, found without the tables: its dimension must be the count.
    units = np.eye(21)
    upper = np.triu_indices(6)
    rows = []
    for unit in units:
        voigt = np.zeros((6, 6))
        voigt[upper] = unit
        voigt = voigt + np.triu(voigt, 1).T
        base = StiffnessTensor.from_voigt(voigt, allow_unstable=True)
        rows.append([base.rotated(turn).voigt[upper] - unit for turn in generators(symmetry)])
    if symmetry == "triclinic":
        assert not any(rows)
        return
    change = np.array(rows).reshape(21, -1)
    assert 21 - np.linalg.matrix_rank(change, tol=1e-9) == COUNTS[symmetry]


def test_isotropic_stiffness_is_unchanged_by_any_rotation() -> None:
    tensor = StiffnessTensor.isotropic(c11=110.0, c44=27.0)
    turned = tensor.rotated(rotation_about_axis((1.0, 2.0, 3.0), 77.0))
    np.testing.assert_allclose(turned.voigt, tensor.voigt, atol=1e-12)
    assert turned.symmetry == "isotropic"
    assert tensor.voigt[0, 1] == 110.0 - 2 * 27.0


@pytest.mark.parametrize("symmetry", sorted(SYMMETRIES))
def test_constants_go_in_and_come_out(symmetry: str) -> None:
    tensor = random_stable(symmetry, 5)
    assert StiffnessTensor.from_vector(symmetry, tensor.vector).constants == tensor.constants
    by_name = StiffnessTensor.from_constants(symmetry, tensor.constants)
    np.testing.assert_allclose(by_name.voigt, tensor.voigt, rtol=1e-14)
    assert tuple(tensor.constants) == tensor.constant_names == constant_names(symmetry)


def test_constructors_by_symmetry_place_each_constant() -> None:
    seven = StiffnessTensor.trigonal(c11=90.0, c12=7.0, c13=12.0, c14=-18.0, c15=5.0, c33=107.0, c44=58.0)
    expected = [
        [90, 7, 12, -18, 5, 0],
        [7, 90, 12, 18, -5, 0],
        [12, 12, 107, 0, 0, 0],
        [-18, 18, 0, 58, 0, -5],
        [5, -5, 0, 0, 58, -18],
        [0, 0, 0, -5, -18, 41.5],
    ]
    np.testing.assert_array_equal(seven.voigt, expected)
    assert seven.symmetry == "trigonal_7"
    six = StiffnessTensor.trigonal(c11=90.0, c12=7.0, c13=12.0, c14=-18.0, c33=107.0, c44=58.0)
    assert six.symmetry == "trigonal_6"
    assert six.voigt[0, 4] == 0.0
    tetragonal = StiffnessTensor.tetragonal(
        c11=100.0, c12=20.0, c13=30.0, c33=80.0, c44=40.0, c66=50.0, c16=9.0
    )
    assert tetragonal.symmetry == "tetragonal_7"
    np.testing.assert_array_equal(tetragonal.voigt[5], [9, -9, 0, 0, 0, 50])
    values = dict(zip(constant_names("orthorhombic"), (90, 20, 25, 95, 30, 100, 40, 45, 50), strict=True))
    orthorhombic = StiffnessTensor.orthorhombic(**values)
    assert {name: float(value) for name, value in orthorhombic.constants.items()} == values
    monoclinic = StiffnessTensor.monoclinic(random_stable("monoclinic", 2).constants)
    assert monoclinic.voigt[3, 5] == monoclinic.constants["c46"] != 0.0
    triclinic = StiffnessTensor.triclinic(random_stable("triclinic", 2).constants)
    assert triclinic.voigt[1, 4] == triclinic.constants["c25"]


@given(stable_tensors())
def test_mandel_and_voigt_and_full_forms_are_one_tensor(tensor: StiffnessTensor) -> None:
    scale = np.abs(tensor.voigt).max()
    np.testing.assert_allclose(tensor.components, full_tensor(tensor.voigt), atol=1e-13 * scale)
    np.testing.assert_allclose(full_to_voigt(tensor.components), tensor.voigt, atol=1e-13 * scale)
    np.testing.assert_allclose(mandel_to_voigt(voigt_to_mandel(tensor.voigt)), tensor.voigt, rtol=1e-15)
    again = StiffnessTensor.from_mandel(tensor.mandel, tensor.symmetry)
    np.testing.assert_allclose(again.voigt, tensor.voigt, rtol=1e-14)
    # The norm over all 81 components is the norm of the Mandel matrix, not of the Voigt matrix.
    assert np.sum(tensor.mandel**2) == pytest.approx(np.sum(full_tensor(tensor.voigt) ** 2), rel=1e-12)


@given(stable_tensors())
def test_compliance_is_the_inverse(tensor: StiffnessTensor) -> None:
    np.testing.assert_allclose(tensor.compliance @ tensor.voigt, np.eye(6), atol=1e-9)


def test_compliance_of_a_cubic_crystal_in_closed_form() -> None:
    # s11 = (c11 + c12) / ((c11 - c12)(c11 + 2 c12)), s12 = -c12 / (the same), s44 = 1 / c44.
    c11, c12, c44 = 165.78, 63.94, 79.62
    below = (c11 - c12) * (c11 + 2 * c12)
    s = cubic("Si").compliance
    np.testing.assert_allclose(
        [s[0, 0], s[0, 1], s[3, 3]], [(c11 + c12) / below, -c12 / below, 1 / c44], rtol=1e-13
    )


@given(stable_tensors(), unit_vectors(), st.floats(-180.0, 180.0))
def test_rotation_is_the_fourfold_sum(tensor: StiffnessTensor, axis: np.ndarray, angle: float) -> None:
    r = rotation_about_axis(axis, angle)
    full = np.einsum("ia,jb,kc,ld,abcd->ijkl", r, r, r, r, full_tensor(tensor.voigt))
    np.testing.assert_allclose(tensor.rotated(r).components, full, atol=1e-12 * np.abs(tensor.voigt).max())


@given(stable_tensors(), unit_vectors())
def test_oriented_puts_the_direction_along_z(tensor: StiffnessTensor, n: np.ndarray) -> None:
    np.testing.assert_allclose(
        phase_velocities(tensor.oriented(n), 3.0, "z"), phase_velocities(tensor, 3.0, n), rtol=1e-9
    )


def test_oriented_takes_an_in_plane_direction() -> None:
    # (111) silicon with x along [1 -1 0]: rho v^2 along x is (c11 + c12 + 2 c44) / 2.
    wafer = cubic("Si").oriented("111", "1-10")
    assert wafer.voigt[0, 0] == pytest.approx((165.78 + 63.94 + 2 * 79.62) / 2, rel=1e-13)
    assert wafer.voigt[2, 2] == pytest.approx((165.78 + 2 * 63.94 + 4 * 79.62) / 3, rel=1e-13)
    assert wafer.symmetry == "triclinic"


def test_batches_turn_by_one_rotation_or_one_each() -> None:
    tensor = StiffnessTensor.cubic(c11=[160.0, 170.0, 180.0], c12=60.0, c44=[80.0, 80.0, 70.0])
    assert tensor.batch_shape == (3,)
    cuts = tensor.oriented([(1.0, 0.0, 0.0), (1.0, 1.0, 0.0), (1.0, 1.0, 1.0)])
    assert cuts.batch_shape == (3,)
    for index, cut in enumerate(("100", "110", "111")):
        one = StiffnessTensor.from_voigt(tensor.voigt[index], "cubic").oriented(cut)
        np.testing.assert_allclose(cuts.voigt[index], one.voigt, atol=1e-12)
    assert tensor.oriented("110").batch_shape == (3,)


def test_rotation_about_an_axis_is_right_handed() -> None:
    np.testing.assert_allclose(rotation_about_axis((0, 0, 2), 90.0) @ [1, 0, 0], [0, 1, 0], atol=1e-15)
    np.testing.assert_allclose(rotation_about_axis((1, 0, 0), 90.0) @ [0, 1, 0], [0, 0, 1], atol=1e-15)
    assert rotation_about_axis((0, 0, 1), [10.0, 20.0]).shape == (2, 3, 3)


def test_euler_angles_turn_about_z_then_x_then_z() -> None:
    turn = rotation_from_euler(30.0, 50.0, 70.0)
    phi, polar = np.deg2rad([30.0, 50.0])
    # Where the crystal's c axis points in the sample: phi2 cannot move it.
    expected = [np.sin(phi) * np.sin(polar), -np.cos(phi) * np.sin(polar), np.cos(polar)]
    np.testing.assert_allclose(turn @ [0, 0, 1], expected, atol=1e-15)
    np.testing.assert_allclose(
        rotation_from_euler(30.0, 0.0, 40.0), rotation_about_axis((0, 0, 1), 70.0), atol=1e-15
    )


@given(unit_vectors())
def test_rotation_to_z_is_a_proper_rotation(n: np.ndarray) -> None:
    turn = rotation_to_z(n)
    np.testing.assert_allclose(turn @ n, [0, 0, 1], atol=1e-12)
    np.testing.assert_allclose(turn @ turn.T, np.eye(3), atol=1e-12)
    assert np.linalg.det(turn) == pytest.approx(1.0)


def test_rotation_to_z_of_z_is_the_identity() -> None:
    np.testing.assert_array_equal(rotation_to_z((0, 0, 3)), np.eye(3))


@pytest.mark.parametrize(
    ("name", "symmetry", "expected"),
    [
        ("100", "cubic", (1, 0, 0)),
        ("1-10", "cubic", (1, -1, 0)),
        ("[1 1 -2]", "cubic", (1, 1, -2)),
        ("(-1, 0, 12)", "cubic", (-1, 0, 12)),
        ("001", "tetragonal_6", (0, 0, 1)),
        ("y", "monoclinic", (0, 1, 0)),
        ("c", "hexagonal", (0, 0, 1)),
        ("0001", "trigonal_6", (0, 0, 1)),
        ("11-20", "hexagonal", (1, 0, 0)),
        ("1 0 -1 0", "trigonal_6", (0, 1, 0)),
        ((3.0, 0.0, 4.0), "triclinic", (3, 0, 4)),
    ],
)
def test_names_of_directions(name: str, symmetry: str, expected: tuple[int, int, int]) -> None:
    np.testing.assert_allclose(crystal_direction(name, symmetry), unit_direction(expected), atol=1e-15)


def test_equivalent_directions_of_sapphire_are_equally_fast() -> None:
    tensor = StiffnessTensor.trigonal(**SAPPHIRE_CRC)
    a, m = (phase_velocities(tensor, 3.99, name) for name in "am")
    for azimuth in range(0, 360, 60):
        np.testing.assert_allclose(
            phase_velocities(tensor, 3.99, direction_from_c_axis(90.0, azimuth)), a, rtol=1e-12
        )
        np.testing.assert_allclose(
            phase_velocities(tensor, 3.99, direction_from_c_axis(90.0, azimuth + 30)), m, rtol=1e-12
        )


def test_direction_from_the_c_axis() -> None:
    np.testing.assert_allclose(direction_from_c_axis(30.0, 90.0), [0, 0.5, np.sqrt(0.75)], atol=1e-15)
    assert direction_from_c_axis([10.0, 20.0, 30.0]).shape == (3, 3)


def test_directions_near_the_ends_of_the_floating_point_range() -> None:
    for size in (1e-300, 1e300):
        np.testing.assert_allclose(
            unit_direction([size, size, 0.0]), [np.sqrt(0.5), np.sqrt(0.5), 0], rtol=1e-15
        )


@pytest.mark.parametrize(
    ("name", "symmetry", "message"),
    [
        (
            "r",
            "trigonal_6",
            r"'r' is not known for a trigonal_6 crystal; expected x, y, z or one of c, 0001, a",
        ),
        ("110", "hexagonal", r"'110' is not known for a hexagonal crystal"),
        ("11", "cubic", r"'11' is not known for a cubic crystal; expected x, y, z, three Miller indices"),
        ("1-1", "cubic", r"three Miller indices such as '110', '1-10'"),
        ("1 1 --2", "cubic", r"three Miller indices"),
        ("fast", "cubic", r"'fast' is not known"),
        ("000", "cubic", r"direction of zero length \(0, 0, 0\)"),
        ("111", "orthorhombic", r"'111' of a orthorhombic crystal depends on its lattice parameters"),
        ("100", "triclinic", r"lattice parameters, which a stiffness tensor does not hold"),
        ((np.nan, 0.0, 1.0), "cubic", r"not finite: \[nan"),
        ("100", "quasicrystal", r"'quasicrystal' is not known; expected one of isotropic, cubic, hexagonal"),
    ],
)
def test_directions_that_mean_nothing_are_refused(name: str, symmetry: str, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        crystal_direction(name, symmetry)


def test_rotations_that_are_none_are_refused() -> None:
    with pytest.raises(ValueError, match=r"not orthogonal: .* by 3; expected less than 1e-8"):
        cubic("Si").rotated(2.0 * np.eye(3))
    with pytest.raises(ValueError, match=r"rotation has shape \(2, 2\); expected \(\.\.\., 3, 3\)"):
        cubic("Si").rotated(np.eye(2))
    with pytest.raises(ValueError, match=r"not orthogonal: .* by nan"):
        cubic("Si").rotated(np.full((3, 3), np.nan))
    with pytest.raises(ValueError, match=r"in_plane .* is parallel to the direction"):
        rotation_to_z((1, 1, 1), (2, 2, 2))


@pytest.mark.parametrize("symmetry", ["cubic", "trigonal_7", "triclinic"])
def test_wrong_number_of_constants_names_those_expected(symmetry: str) -> None:
    names = constant_names(symmetry)
    with pytest.raises(
        ValueError, match=f"given 4 constants; expected {len(names)}, in this order: {', '.join(names)}"
    ):
        StiffnessTensor.from_vector(symmetry, np.ones(4))
    with pytest.raises(
        ValueError, match=rf"given 1 constants \(c11\): missing .*c12.* Expected the {len(names)} constants"
    ):
        StiffnessTensor.from_constants(symmetry, {"c11": 100.0})


def test_names_that_are_no_constants_are_refused() -> None:
    with pytest.raises(
        ValueError, match=r"not a constant: C44, c21\. Expected the 3 constants c11, c12, c44"
    ):
        StiffnessTensor.from_constants("cubic", {"c11": 1.0, "c12": 0.1, "c44": 1.0, "C44": 1.0, "c21": 1.0})


def test_contradictory_dependent_constants_are_refused() -> None:
    given_constants = {"c11": 390.0, "c12": 145.0, "c13": 106.0, "c33": 398.0, "c44": 105.0}
    with pytest.raises(
        ValueError, match=r"c66 = 123 GPa contradicts .* c66 = 0\.5 c11 - 0\.5 c12 = 122\.5 GPa"
    ):
        StiffnessTensor.hexagonal(**given_constants, c66=123.0)
    tolerant = StiffnessTensor.from_constants("hexagonal", {**given_constants, "c66": 123.0}, tolerance=2e-3)
    assert tolerant.voigt[5, 5] == 122.5
    with pytest.raises(ValueError, match=r"c14 = 5 GPa contradicts .* hexagonal crystal: c14 = 0 GPa there"):
        StiffnessTensor.from_constants("hexagonal", {**given_constants, "c14": 5.0})
    with pytest.raises(ValueError, match=r"c24 = -23\.58 GPa contradicts .* c24 = -c14 = 23\.58 GPa"):
        StiffnessTensor.from_constants("trigonal_6", {**SAPPHIRE_CRC, "c24": -23.58})
    with pytest.raises(ValueError, match=r"c66 = 130 GPa contradicts"):
        StiffnessTensor.hexagonal(**given_constants, c66=[122.5, 130.0])


def test_matrix_that_contradicts_its_symmetry_is_refused() -> None:
    sapphire = StiffnessTensor.trigonal(**SAPPHIRE_CRC).voigt
    with pytest.raises(
        ValueError, match=r"not hexagonal: c14 = -23\.58 GPa, but in that symmetry it is zero"
    ):
        StiffnessTensor.from_voigt(sapphire, "hexagonal")
    with pytest.raises(ValueError, match=r"not isotropic: c12 = .*it is c11 - 2 c44 = "):
        StiffnessTensor.from_voigt(cubic("Si").voigt, "isotropic")


def test_misshapen_matrices_are_refused() -> None:
    with pytest.raises(ValueError, match=r"stiffness has shape \(3, 3\); expected \(\.\.\., 6, 6\)"):
        StiffnessTensor.from_voigt(np.eye(3))
    with pytest.raises(ValueError, match=r"stiffness has shape \(36,\)"):
        StiffnessTensor.from_mandel(np.ones(36))
    skew = np.array(cubic("Si").voigt)
    skew[0, 3] = 2.0
    with pytest.raises(ValueError, match=r"not symmetric: c14 and c41 differ by 2 GPa"):
        StiffnessTensor.from_voigt(skew)
    hole = np.array(cubic("Si").voigt)
    hole[2, 2] = np.nan
    with pytest.raises(ValueError, match=r"not finite; give all of them as numbers in GPa"):
        StiffnessTensor.from_voigt(hole)


def test_tensor_is_frozen_and_keeps_its_own_copy() -> None:
    given_matrix = np.array(cubic("Si").voigt)
    tensor = StiffnessTensor.from_voigt(given_matrix, "cubic")
    given_matrix[0, 0] = 1.0
    assert tensor.voigt[0, 0] == 165.78
    with pytest.raises(ValueError, match="read-only"):
        tensor.voigt[0, 0] = 1.0


@given(constants("triclinic"))
def test_triclinic_voigt_matrix_reads_row_by_row(vector: np.ndarray) -> None:
    tensor = StiffnessTensor.from_vector("triclinic", vector, allow_unstable=True)
    np.testing.assert_array_equal(tensor.voigt[np.triu_indices(6)], vector)
