"""Curves of the three waves in a plane of a crystal."""

import numpy as np
import pytest
from elastic_cases import SAPPHIRE_CRC, cubic, random_stable

from inverse.elastic import StiffnessTensor, phase_velocities, plane_section


def test_cubic_face_in_closed_form() -> None:
    # In (001) at angle t: the out-of-plane wave has rho v^2 = c44; the in-plane pair has the sum
    # c11 + c44 and the difference sqrt((c11 - c44)^2 cos^2 2t + (c12 + c44)^2 sin^2 2t).
    c11, c12, c44 = 168.3, 121.2, 75.7
    section = plane_section(cubic("Cu"), 8.932, "001", points=181)
    twice = 2 * np.deg2rad(section.angle)
    split = np.sqrt((c11 - c44) ** 2 * np.cos(twice) ** 2 + (c12 + c44) ** 2 * np.sin(twice) ** 2)
    moduli = [(c11 + c44 + split) / 2, (c11 + c44 - split) / 2, np.full(181, c44)]
    np.testing.assert_allclose(section.phase_velocity, np.sqrt(np.array(moduli).T / 8.932), rtol=1e-12)
    assert section.labels == (
        "quasi-longitudinal",
        "quasi-transverse, in plane",
        "transverse, out of plane",
    )
    np.testing.assert_array_equal(np.stack([section.first, section.second, section.normal]), np.eye(3))


def test_branches_are_followed_through_crossings() -> None:
    # In (1 -1 0) the two transverse curves touch or cross along [001] and [111]; each must stay smooth.
    section = plane_section(cubic("Cu"), 8.932, "1-10", "001", points=721)
    for curve in section.phase_velocity.T:
        assert np.abs(np.diff(curve, 2)).max() < 1e-3 * curve.max()
    overlap = np.abs(np.sum(section.polarisation[1:] * section.polarisation[:-1], axis=-1))
    assert overlap.min() > 0.99
    ordered = -np.sort(-section.phase_velocity, axis=1)
    assert np.any(ordered != section.phase_velocity)


def test_every_point_is_a_wave_of_its_direction() -> None:
    tensor = random_stable("triclinic", 6)
    section = plane_section(tensor, 3.0, (1.0, 2.0, 3.0), points=37)
    theta = np.deg2rad(section.angle)[:, None]
    directions = np.cos(theta) * section.first + np.sin(theta) * section.second
    expected = phase_velocities(tensor, 3.0, directions)
    np.testing.assert_allclose(-np.sort(-section.phase_velocity, axis=1), expected, rtol=1e-10)
    np.testing.assert_allclose(section.slowness, 1.0 / section.phase_velocity, rtol=1e-15)
    assert section.labels[1:] == (
        "quasi-transverse, mostly in plane",
        "quasi-transverse, mostly out of plane",
    )


def test_curves_are_radii_and_rays() -> None:
    section = plane_section(cubic("Si"), 2.3296, "001", points=41)
    radius = np.linalg.norm(section.curve("slowness"), axis=-1)
    np.testing.assert_allclose(radius, section.slowness, rtol=1e-13)
    np.testing.assert_allclose(
        section.curve("phase velocity")[10], [[0, v] for v in section.phase_velocity[10]], atol=1e-12
    )
    # The slowness times the ray is one: the two curves are polar to each other.
    product = np.sum(section.curve("group velocity") * section.curve("slowness"), axis=-1)
    np.testing.assert_allclose(product, 1.0, rtol=1e-10)


def test_start_turns_the_zero_of_the_angle() -> None:
    sapphire = StiffnessTensor.trigonal(**SAPPHIRE_CRC)
    section = plane_section(sapphire, 3.99, "x", "c", points=5)
    np.testing.assert_allclose(section.first, [0, 0, 1], atol=1e-15)
    np.testing.assert_allclose(section.second, [0, -1, 0], atol=1e-15)
    assert section.phase_velocity[0, 0] == pytest.approx(11.1844, abs=1e-4)
    assert section.phase_velocity[1, 0] == pytest.approx(11.1824, abs=1e-4)


def test_isotropic_solid_has_pure_waves_and_one_transverse_velocity() -> None:
    section = plane_section(StiffnessTensor.isotropic(c11=110.0, c44=27.0), 2.7, (1, 2, 3), points=13)
    assert section.labels == ("longitudinal", "transverse, in plane", "transverse, out of plane")
    np.testing.assert_allclose(section.phase_velocity[:, 1:], np.sqrt(10.0), rtol=1e-12)
    np.testing.assert_allclose(section.group_velocity[..., 2], 0.0, atol=1e-12)


def test_wrong_sections_are_refused() -> None:
    with pytest.raises(
        ValueError, match=r"quantity 'speed' is not known; expected 'slowness', 'phase velocity'"
    ):
        plane_section(cubic("Si"), 2.33, "001").curve("speed")
    with pytest.raises(ValueError, match=r"one tensor and 4 points or more; .* shape \(\) and 3 points"):
        plane_section(cubic("Si"), 2.33, "001", points=3)
    batch = StiffnessTensor.cubic(c11=[160.0, 170.0], c12=60.0, c44=80.0)
    with pytest.raises(ValueError, match=r"batch of shape \(2,\)"):
        plane_section(batch, 2.33, "001")
    with pytest.raises(ValueError, match=r"in_plane .* is parallel"):
        plane_section(cubic("Si"), 2.33, "001", "001")
