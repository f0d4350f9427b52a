"""Derivatives of velocities by the constants, and which constants a set of velocities reaches."""

import numpy as np
import pytest
from elastic_cases import SAPPHIRE_CRC, cubic, random_stable, stable_tensors, unit_vectors
from hypothesis import assume, given

from inverse.elastic import (
    SYMMETRIES,
    StiffnessTensor,
    constants_reached,
    measured_derivatives,
    phase_velocities,
    plane_waves,
    velocity_derivatives,
)

DENSITY = 3.2
GALLIUM_NITRIDE = StiffnessTensor.hexagonal(c11=390.0, c12=145.0, c13=106.0, c33=398.0, c44=105.0)
SAPPHIRE = StiffnessTensor.trigonal(**SAPPHIRE_CRC)


@given(stable_tensors(), unit_vectors())
def test_derivatives_are_finite_differences(tensor: StiffnessTensor, n: np.ndarray) -> None:
    waves, derivatives = velocity_derivatives(tensor, DENSITY, n)
    assume(-np.diff(waves.phase_velocity).max() / waves.phase_velocity[0] > 1e-2)
    step = 1e-4
    for index in range(len(tensor.vector)):
        change = step * np.eye(len(tensor.vector))[index]
        up, down = (
            StiffnessTensor.from_vector(tensor.symmetry, tensor.vector + sign * change, allow_unstable=True)
            for sign in (1, -1)
        )
        quotient = (phase_velocities(up, DENSITY, n) - phase_velocities(down, DENSITY, n)) / (2 * step)
        np.testing.assert_allclose(derivatives[:, index], quotient, rtol=0, atol=1e-6)


@given(stable_tensors(), unit_vectors())
def test_velocities_scale_as_the_root_of_the_constants(tensor: StiffnessTensor, n: np.ndarray) -> None:
    # v is homogeneous of degree 1/2 in the constants (Euler's theorem), degenerate or not.
    waves, derivatives = velocity_derivatives(tensor, DENSITY, n)
    np.testing.assert_allclose(derivatives @ tensor.vector, 0.5 * waves.phase_velocity, rtol=1e-8)


def test_derivative_of_the_longitudinal_wave_along_110() -> None:
    # v = sqrt((c11 + c12 + 2 c44) / (2 rho)): d v = (1, 1, 2) / (4 rho v).
    velocities, derivatives = measured_derivatives(cubic("Si"), 2.3296, [("110", "longitudinal")])
    np.testing.assert_allclose(derivatives[0], np.array([1, 1, 2]) / (4 * 2.3296 * velocities[0]), rtol=1e-12)


def test_derivatives_are_batched_over_tensors_and_directions() -> None:
    tensors = StiffnessTensor.cubic(c11=[160.0, 170.0], c12=60.0, c44=[80.0, 70.0])
    _, derivatives = velocity_derivatives(tensors, [2.0, 3.0], np.eye(3)[:, None, :] + 0.1)
    assert derivatives.shape == (2, 3, 1, 3, 3)
    velocities, rows = measured_derivatives(
        tensors, [2.0, 3.0], [("110", "longitudinal"), ((1, 2, 3), 2), ("110", "slow transverse")]
    )
    assert velocities.shape == (2, 3)
    assert rows.shape == (2, 3, 3)
    second = StiffnessTensor.cubic(c11=170.0, c12=60.0, c44=70.0)
    waves, single = velocity_derivatives(second, 3.0, (1, 2, 3))
    assert velocities[1, 1] == pytest.approx(waves.phase_velocity[2], rel=1e-13)
    np.testing.assert_allclose(rows[1, 1], single[2], rtol=1e-9)


def test_measured_branch_is_chosen_by_polarisation() -> None:
    stiff = StiffnessTensor.cubic(c11=100.0, c12=10.0, c44=150.0)
    velocities, derivatives = measured_derivatives(stiff, 2.0, [("100", "longitudinal"), ("100", 0)])
    np.testing.assert_allclose(velocities, np.sqrt([50.0, 75.0]), rtol=1e-13)
    assert np.argmax(derivatives, axis=1).tolist() == [0, 2]


@pytest.mark.parametrize(
    ("tensor", "measurements", "sentences"),
    [
        (
            cubic("Si"),
            [("100", "longitudinal")],
            ("c11 is reached.", "c12 and c44 are not reached by longitudinal waves along [100]."),
        ),
        (
            cubic("Si"),
            [("100", "longitudinal"), ("100", "fast transverse")],
            ("c11 and c44 are reached.", "c12 is not reached by any of the 2 velocities."),
        ),
        (
            cubic("Si"),
            [("100", "longitudinal"), ("111", "longitudinal")],
            ("c11 is reached.", "c12 and c44 are reached only as c12 + 2 c44."),
        ),
        (
            cubic("Si"),
            [("111", "longitudinal"), ("111", "slow transverse")],
            ("c11, c12 and c44 are reached only as c11 + 2 c44 and c12 + c44.",),
        ),
        (
            cubic("Si"),
            [("110", "longitudinal"), ("110", "fast transverse"), ("110", "slow transverse")],
            ("c11, c12 and c44 are reached.",),
        ),
        (
            GALLIUM_NITRIDE,
            [("c", "longitudinal")],
            ("c33 is reached.", "c11, c12, c13 and c44 are not reached by longitudinal waves along c."),
        ),
        (
            GALLIUM_NITRIDE,
            [("x", 0), ("x", 1), ("x", 2), ("c", 0)],
            ("c11, c12, c33 and c44 are reached.", "c13 is not reached by any of the 4 velocities."),
        ),
        (
            SAPPHIRE,
            [((0.0, 0.0, 2.0), "longitudinal")],
            (
                "c33 is reached.",
                "c11, c12, c13, c14 and c44 are not reached by longitudinal waves along [0 0 2].",
            ),
        ),
        (
            StiffnessTensor.isotropic(c11=110.0, c44=27.0),
            [("x", "longitudinal"), ("y", "longitudinal")],
            ("c11 is reached.", "c44 is not reached by longitudinal waves along x and y."),
        ),
    ],
)
def test_what_is_reached_in_words(
    tensor: StiffnessTensor, measurements: list[tuple[str, str | int]], sentences: tuple[str, ...]
) -> None:
    reach = constants_reached(tensor, measurements)
    assert reach.sentences == sentences
    assert str(reach) == "\n".join(sentences)
    assert reach.complete == (len(sentences) == 1 and "only" not in sentences[0])


def test_oblique_quasi_longitudinal_wave_completes_a_hexagonal_set() -> None:
    measurements = [("x", 0), ("x", 1), ("x", 2), ("c", 0), ((1, 0, 1), "longitudinal")]
    assert constants_reached(GALLIUM_NITRIDE, measurements).complete


@pytest.mark.parametrize("symmetry", sorted(SYMMETRIES))
def test_many_velocities_reach_every_constant(symmetry: str) -> None:
    directions = np.random.default_rng(4).normal(size=(12, 3))
    measurements = [(tuple(direction), branch) for direction in directions for branch in range(3)]
    reach = constants_reached(random_stable(symmetry, 9), measurements)
    assert reach.complete
    np.testing.assert_allclose(reach.combinations, np.eye(len(reach.names)), atol=1e-12)


def test_unreached_changes_leave_the_velocities_and_reached_ones_do_not() -> None:
    measurements = [("a", 0), ("a", 1), ("m", 0), ("c", 0)]
    reach = constants_reached(SAPPHIRE, measurements)
    directions = [(1, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1)]
    branches = [0, 1, 0, 0]

    def velocities(vector: np.ndarray) -> np.ndarray:
        waves = phase_velocities(StiffnessTensor.from_vector("trigonal_6", vector), 3.99, directions)
        return waves[np.arange(4), branches]

    assert reach.combinations.shape[0] + reach.unreached.shape[0] == 6
    np.testing.assert_allclose(reach.combinations @ reach.unreached.T, 0.0, atol=1e-10)
    start = velocities(SAPPHIRE.vector)
    for change in reach.unreached:
        # To first order: what is left falls with the square of the step.
        moved = velocities(SAPPHIRE.vector + 1e-3 * change) - start
        assert np.abs(moved).max() < 1e-8
    for change in reach.combinations:
        moved = velocities(SAPPHIRE.vector + 1e-3 * change / np.linalg.norm(change)) - start
        assert np.abs(moved).max() > 1e-6


def test_constant_that_enters_in_second_order_is_not_reached_there() -> None:
    # Along y the fast velocity depends on c14^2: at c14 = 0 its derivative vanishes.
    none = StiffnessTensor.trigonal(**{**SAPPHIRE_CRC, "c14": 0.0})
    assert "c14" in constants_reached(none, [("y", "longitudinal")]).sentences[-1].split(" not reached")[0]
    assert "c14" not in constants_reached(SAPPHIRE, [("y", "longitudinal")]).sentences[-1]


def test_singular_values_tell_a_weak_reach() -> None:
    strong = constants_reached(cubic("Si"), [("100", 0), ("100", 1), ("110", 2)])
    near = constants_reached(cubic("Si"), [("100", 0), ("100", 1), ((1.0, 0.02, 0.0), 0)])
    assert strong.complete and near.complete
    assert near.singular_values[-1] < 1e-2 * strong.singular_values[-1]
    missing = constants_reached(cubic("Si"), [("100", 0), ("100", 1)])
    assert missing.singular_values.shape == (3,)
    assert missing.singular_values[-1] == 0.0


def test_degenerate_pair_of_a_symmetry_axis_has_one_derivative() -> None:
    waves, derivatives = velocity_derivatives(cubic("Si"), 2.3296, "111")
    assert plane_waves(cubic("Si"), 2.3296, "111").degenerate.tolist() == waves.degenerate.tolist()
    # v_T^2 = (c11 - c12 + c44) / (3 rho) for both.
    expected = np.array([1, -1, 1]) / (6 * 2.3296 * waves.phase_velocity[1])
    np.testing.assert_allclose(derivatives[1:], [expected, expected], atol=1e-15)


def test_wrong_measurements_are_refused() -> None:
    with pytest.raises(ValueError, match=r"no measurements were given; expected pairs such as \('100'"):
        constants_reached(cubic("Si"), [])
    with pytest.raises(
        ValueError, match=r"branch 3 is not known; expected 0 \(fast\), 1, 2 \(slow\) or a name"
    ):
        constants_reached(cubic("Si"), [("100", 3)])
    with pytest.raises(ValueError, match=r"branch 'P' is not known; expected one of longitudinal"):
        constants_reached(cubic("Si"), [("100", "P")])
    with pytest.raises(ValueError, match=r"directions of shape \(2, 3\); expected one direction each"):
        constants_reached(cubic("Si"), [(np.eye(3)[:2], 0)])
    with pytest.raises(ValueError, match=r"expected one tensor; it was given a batch of shape \(2,\)"):
        constants_reached(StiffnessTensor.cubic(c11=[160.0, 170.0], c12=60.0, c44=80.0), [("100", 0)])
    with pytest.raises(ValueError, match="zero length"):
        constants_reached(cubic("Si"), [((0.0, 0.0, 0.0), 0)])
