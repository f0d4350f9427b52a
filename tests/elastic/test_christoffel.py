"""Plane waves against independent implementations, and the laws they obey."""

import numpy as np
import pytest
from elastic_cases import (
    SAPPHIRE_CRC,
    cubic,
    random_stable,
    slow_christoffel,
    slow_frequencies,
    stable_tensors,
    unit_vectors,
)
from hypothesis import assume, given
from hypothesis import strategies as st

from inverse.elastic import (
    SYMMETRIES,
    StiffnessTensor,
    christoffel_matrix,
    longitudinal_velocity,
    phase_velocities,
    plane_waves,
    rotation_about_axis,
)

DENSITY = 3.2


@pytest.mark.parametrize("symmetry", sorted(SYMMETRIES))
def test_velocities_agree_with_pymatgen(symmetry: str) -> None:
    elasticity = pytest.importorskip(
        "pymatgen.core.elasticity.elastic", reason="pymatgen-core: see the test extra"
    )
    directions = np.random.default_rng(7).normal(size=(6, 3))
    directions /= np.linalg.norm(directions, axis=1, keepdims=True)
    for seed in range(6):
        tensor = random_stable(symmetry, seed)
        reference = elasticity.ElasticTensor.from_voigt(tensor.voigt)
        matrices = np.array([reference.green_kristoffel(n) for n in directions])
        expected = np.sqrt(np.linalg.eigvalsh(matrices)[:, ::-1] / DENSITY)
        np.testing.assert_allclose(phase_velocities(tensor, DENSITY, directions), expected, rtol=1e-9)


@given(stable_tensors(), unit_vectors())
def test_christoffel_matrix_is_the_sum_over_all_components(tensor: StiffnessTensor, n: np.ndarray) -> None:
    expected = slow_christoffel(tensor.voigt, n)
    np.testing.assert_allclose(
        christoffel_matrix(tensor, n), expected, rtol=0, atol=1e-12 * np.abs(tensor.voigt).max()
    )


@given(stable_tensors(), unit_vectors())
def test_polarisations_are_orthonormal_eigenvectors(tensor: StiffnessTensor, n: np.ndarray) -> None:
    waves = plane_waves(tensor, DENSITY, n)
    p = waves.polarisation
    np.testing.assert_allclose(p @ p.T, np.eye(3), atol=1e-10)
    left = slow_christoffel(tensor.voigt, n) @ p.T
    right = p.T * (DENSITY * waves.phase_velocity**2)
    np.testing.assert_allclose(left, right, rtol=0, atol=1e-8 * np.abs(left).max())
    np.testing.assert_allclose(waves.phase_velocity, phase_velocities(tensor, DENSITY, n), rtol=1e-12)
    assert np.all(p @ n > -1e-9)


@given(stable_tensors(), unit_vectors())
def test_energy_travels_at_the_phase_velocity_along_the_direction(
    tensor: StiffnessTensor, n: np.ndarray
) -> None:
    waves = plane_waves(tensor, DENSITY, n)
    np.testing.assert_allclose(waves.group_velocity @ n, waves.phase_velocity, rtol=1e-8)


@given(stable_tensors(), unit_vectors())
def test_group_velocity_is_the_gradient_of_the_frequency(tensor: StiffnessTensor, n: np.ndarray) -> None:
    waves = plane_waves(tensor, DENSITY, n)
    gaps = -np.diff(waves.phase_velocity) / waves.phase_velocity[0]
    assume(gaps.min() > 1e-2)
    step = 1e-5
    gradient = np.stack(
        [
            slow_frequencies(tensor.voigt, DENSITY, n + step * axis)
            - slow_frequencies(tensor.voigt, DENSITY, n - step * axis)
            for axis in np.eye(3)
        ],
        axis=-1,
    ) / (2 * step)
    # The difference quotient errs by step^2 over the squared gap, and by rounding over the step.
    np.testing.assert_allclose(waves.group_velocity, gradient, rtol=0, atol=1e-5 * waves.phase_velocity[0])


@given(stable_tensors(), unit_vectors())
def test_trace_is_the_sum_of_the_squares(tensor: StiffnessTensor, n: np.ndarray) -> None:
    total = np.sum(DENSITY * phase_velocities(tensor, DENSITY, n) ** 2)
    assert total == pytest.approx(np.trace(slow_christoffel(tensor.voigt, n)), rel=1e-12)


@given(unit_vectors())
def test_trace_of_a_cubic_crystal_is_the_same_in_every_direction(n: np.ndarray) -> None:
    # c11 + 2 c44.
    total = np.sum(2.3296 * phase_velocities(cubic("Si"), 2.3296, n) ** 2)
    assert total == pytest.approx(165.78 + 2 * 79.62, rel=1e-12)


@given(stable_tensors(), unit_vectors(), unit_vectors(), st.floats(-180.0, 180.0))
def test_turning_crystal_and_direction_together_changes_nothing(
    tensor: StiffnessTensor, n: np.ndarray, axis: np.ndarray, angle: float
) -> None:
    turn = rotation_about_axis(axis, angle)
    turned = phase_velocities(tensor.rotated(turn), DENSITY, turn @ n)
    np.testing.assert_allclose(turned, phase_velocities(tensor, DENSITY, n), rtol=1e-9)


@given(stable_tensors(), unit_vectors())
def test_opposite_directions_have_the_same_velocities(tensor: StiffnessTensor, n: np.ndarray) -> None:
    np.testing.assert_allclose(
        phase_velocities(tensor, DENSITY, -n), phase_velocities(tensor, DENSITY, n), rtol=1e-12
    )


def test_tensors_and_directions_are_batched_all_with_all() -> None:
    tensors = StiffnessTensor.trigonal(
        **{name: value * np.linspace(0.9, 1.1, 6).reshape(2, 3) for name, value in SAPPHIRE_CRC.items()}
    )
    density = np.linspace(3.0, 4.0, 6).reshape(2, 3)
    directions = np.random.default_rng(3).normal(size=(4, 5, 3))
    waves = plane_waves(tensors, density, directions)
    assert waves.phase_velocity.shape == (2, 3, 4, 5, 3)
    assert waves.group_velocity.shape == waves.polarisation.shape == (2, 3, 4, 5, 3, 3)
    assert waves.degenerate.shape == waves.kind.shape == (2, 3, 4, 5, 3)
    for i, j, k, m in [(0, 0, 0, 0), (1, 2, 3, 4), (0, 1, 2, 3)]:
        single = StiffnessTensor.from_voigt(tensors.voigt[i, j], "trigonal_6")
        one = plane_waves(single, density[i, j], directions[k, m])
        np.testing.assert_allclose(waves.phase_velocity[i, j, k, m], one.phase_velocity, rtol=1e-13)
        np.testing.assert_allclose(waves.group_velocity[i, j, k, m], one.group_velocity, rtol=1e-9)
        np.testing.assert_allclose(waves.polarisation[i, j, k, m], one.polarisation, atol=1e-12)


def test_one_tensor_takes_many_densities() -> None:
    velocities = phase_velocities(cubic("Si"), [2.0, 8.0], [(1, 0, 0), (1, 1, 1)])
    assert velocities.shape == (2, 2, 3)
    np.testing.assert_allclose(velocities[0], 2.0 * velocities[1], rtol=1e-13)
    waves = plane_waves(cubic("Si"), [2.0, 8.0], "110")
    assert waves.polarisation.shape == (2, 3, 3)
    assert waves.degenerate.shape == (2, 3)


def test_kinds_along_and_off_the_axes() -> None:
    assert plane_waves(cubic("Si"), 2.33, "110").kind.tolist() == ["longitudinal", "transverse", "transverse"]
    assert plane_waves(cubic("Si"), 2.33, "112").kind.tolist() == [
        "quasi-longitudinal",
        "transverse",
        "quasi-transverse",
    ]


def test_longitudinal_wave_need_not_be_the_fastest() -> None:
    # c44 > c11: stable, and along [100] both transverse waves are faster.
    stiff = StiffnessTensor.cubic(c11=100.0, c12=10.0, c44=150.0)
    waves = plane_waves(stiff, 2.0, "100")
    assert waves.kind.tolist() == ["transverse", "transverse", "longitudinal"]
    branches = [int(waves.branch(name)) for name in ("longitudinal", "fast transverse", "slow transverse")]
    assert branches == [2, 0, 1]
    assert longitudinal_velocity(stiff, 2.0, "100") == pytest.approx(np.sqrt(50.0), rel=1e-13)


@pytest.mark.parametrize("direction", ["100", "010", "001"])
def test_degenerate_transverse_pair_is_named_and_transverse(direction: str) -> None:
    waves = plane_waves(cubic("Cu"), 8.932, direction)
    assert waves.degenerate.tolist() == [False, True, True]
    np.testing.assert_allclose(waves.longitudinal_part, [1.0, 0.0, 0.0], atol=1e-13)
    # Energy goes straight along a fourfold axis whatever the polarisation.
    np.testing.assert_allclose(
        waves.group_velocity, waves.phase_velocity[:, None] * waves.direction, atol=1e-12
    )


def test_wave_degenerate_with_a_transverse_one_is_still_longitudinal() -> None:
    # Along x: rho v^2 = c11, c66, c44. Two or all three equal.
    two = StiffnessTensor.tetragonal(c11=100.0, c12=20.0, c13=30.0, c33=150.0, c44=40.0, c66=100.0)
    waves = plane_waves(two, 2.0, "x")
    assert waves.degenerate.tolist() == [True, True, False]
    assert sorted(waves.kind.tolist()) == ["longitudinal", "transverse", "transverse"]
    three = StiffnessTensor.cubic(c11=100.0, c12=10.0, c44=100.0)
    waves = plane_waves(three, 2.0, "x")
    assert waves.degenerate.all()
    assert waves.kind.tolist() == ["longitudinal", "transverse", "transverse"]
    np.testing.assert_allclose(waves.polarisation @ waves.polarisation.T, np.eye(3), atol=1e-13)


def test_reference_turns_a_degenerate_pair_and_nothing_else() -> None:
    towards = plane_waves(cubic("Cu"), 8.932, "z", reference=(1.0, 1.0, 0.0))
    np.testing.assert_allclose(towards.polarisation[1], np.array([1.0, 1.0, 0.0]) / np.sqrt(2), atol=1e-12)
    free, turned = (plane_waves(cubic("Cu"), 8.932, "112", reference=r) for r in ((1, 0, 0), (0, 0, 1)))
    np.testing.assert_array_equal(free.polarisation, turned.polarisation)
    along = plane_waves(cubic("Cu"), 8.932, "z", reference=(0, 0, 1))
    np.testing.assert_allclose(along.polarisation @ along.polarisation.T, np.eye(3), atol=1e-13)


def test_transverse_rays_along_the_threefold_axis_of_a_cubic_crystal_lie_on_a_cone() -> None:
    # Internal conical refraction, from memory:
    # tan(half angle) = |c11 - c12 - 2 c44| / (sqrt(2) (c11 - c12 + c44)).
    waves = plane_waves(cubic("Si"), 2.3296, "111")
    assert waves.degenerate.tolist() == [False, True, True]
    across = waves.group_velocity - waves.phase_velocity[:, None] * waves.direction
    tangent = np.linalg.norm(across, axis=1)[1:] / waves.phase_velocity[1:]
    difference = 165.78 - 63.94
    expected = abs(difference - 2 * 79.62) / (np.sqrt(2) * (difference + 79.62))
    np.testing.assert_allclose(tangent, expected, rtol=1e-12)


def test_slowness_is_the_reciprocal() -> None:
    waves = plane_waves(cubic("W"), 19.257, "110")
    np.testing.assert_allclose(waves.slowness * waves.phase_velocity, 1.0, rtol=1e-15)


@pytest.mark.parametrize("function", [phase_velocities, plane_waves, longitudinal_velocity])
def test_wrong_input_is_refused(function: object) -> None:
    assert callable(function)
    with pytest.raises(ValueError, match=r"zero length \(0, 0, 0\); give three components"):
        function(cubic("Si"), 2.33, (0.0, 0.0, 0.0))
    with pytest.raises(ValueError, match=r"zero length at index \(1,\)"):
        function(cubic("Si"), 2.33, [(1.0, 0.0, 0.0), (0.0, 0.0, 0.0)])
    with pytest.raises(ValueError, match=r"direction has shape \(2,\); expected \(\.\.\., 3\)"):
        function(cubic("Si"), 2.33, (1.0, 0.0))
    with pytest.raises(ValueError, match=r"density -2\.33 is not positive; expected g/cm3"):
        function(cubic("Si"), -2.33, "100")
    with pytest.raises(ValueError, match=r"density of shape \(3,\) does not go .* batch shape \(2,\)"):
        function(StiffnessTensor.cubic(c11=[170.0, 160.0], c12=60.0, c44=80.0), [2.0, 2.0, 2.0], "100")
    unstable = StiffnessTensor.from_vector("cubic", [100.0, 120.0, 50.0], allow_unstable=True)
    with pytest.raises(
        ValueError, match=r"modulus -10 GPa, which must be positive: the stiffness is unstable"
    ):
        function(unstable, 2.33, "110")


def test_unknown_branch_is_refused() -> None:
    with pytest.raises(ValueError, match=r"branch 'shear' is not known; expected one of longitudinal, fast"):
        plane_waves(cubic("Si"), 2.33, "100").branch("shear")
