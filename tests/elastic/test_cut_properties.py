"""Thermal stress and photoelastic ratios of cuts against explicit sums and special cases."""

import numpy as np
import pytest
from elastic_cases import SAPPHIRE_CRC, full_tensor

from inverse.elastic import (
    StiffnessTensor,
    averages,
    crystal_direction,
    photoelastic_ratios,
    rotation_to_z,
    thermal_stress,
)

SAPPHIRE = StiffnessTensor.trigonal(**SAPPHIRE_CRC)


def test_isotropic_expansion_of_a_cubic_crystal_pushes_along_the_depth_whatever_the_cut() -> None:
    silicon = StiffnessTensor.cubic(c11=165.78, c12=63.94, c44=79.62)
    expected = 3 * float(averages(silicon).bulk) * 2.6e-6
    for cut in ("100", "112", [1, 2, 5]):
        np.testing.assert_allclose(thermal_stress(silicon, 2.6e-6, cut), [0, 0, expected], atol=1e-15)


def test_along_c_it_is_the_formula_of_hexagonal_and_trigonal_crystals() -> None:
    # c33 alpha_c + 2 c13 alpha_a.
    found = thermal_stress(SAPPHIRE, [5.0e-6, 5.0e-6, 5.9e-6], "c")
    np.testing.assert_allclose(found, [0, 0, 499.11 * 5.9e-6 + 2 * 112.2 * 5.0e-6], atol=1e-15)


def test_a_tilted_cut_agrees_with_sums_along_the_samples_axes() -> None:
    turn = rotation_to_z(crystal_direction([1, 0, 2], "trigonal_6"))
    tensor = full_tensor(SAPPHIRE.rotated(turn).voigt)
    alpha = turn @ np.diag([5.0e-6, 5.0e-6, 5.9e-6]) @ turn.T
    expected = [sum(tensor[i, 2, k, m] * alpha[k, m] for k in range(3) for m in range(3)) for i in range(3)]
    found = thermal_stress(SAPPHIRE, np.diag([5.0e-6, 5.0e-6, 5.9e-6]), [1, 0, 2])
    np.testing.assert_allclose(found, expected, atol=1e-15)
    assert np.abs(found[:2]).max() > 1e-6


def isotropic_photoelastic(p11: float, p12: float) -> np.ndarray:
    p = np.diag([p11] * 3 + [(p11 - p12) / 2] * 3)
    p[:3, :3] += p12 * (1 - np.eye(3))
    return p


def test_shear_along_the_depth_is_not_seen_in_a_glass() -> None:
    # p_15 = p_14 = 0 for every axis of an isotropic medium.
    for cut in ("100", [1, 2, 3]):
        found = photoelastic_ratios(isotropic_photoelastic(0.12, 0.27), "isotropic", cut, polarisation=31.0)
        assert np.abs(found).max() < 1e-12


@pytest.mark.parametrize("polarisation", [0.0, 90.0, 25.0])
def test_ratios_agree_with_explicit_sums(polarisation: float) -> None:
    p = np.random.default_rng(4).normal(size=(6, 6))
    turn = rotation_to_z(crystal_direction([1, 2, 3], "triclinic"))
    angle = np.deg2rad(polarisation)
    e = np.array([np.cos(angle), np.sin(angle), 0.0])
    full = np.einsum("ia,jb,kc,md,abcd->ijkm", turn, turn, turn, turn, full_tensor_of(p))
    seen = np.einsum("i,j,ijkm->km", e, e, full)
    found = photoelastic_ratios(p, "triclinic", [1, 2, 3], polarisation)
    np.testing.assert_allclose(found, [seen[0, 2] / seen[2, 2], seen[1, 2] / seen[2, 2]], rtol=1e-10)


def full_tensor_of(p: np.ndarray) -> np.ndarray:
    """p_ijkl from a Voigt matrix that is not symmetric, one component at a time."""
    index = {(0, 0): 0, (1, 1): 1, (2, 2): 2, (1, 2): 3, (0, 2): 4, (0, 1): 5}
    full = np.empty((3, 3, 3, 3))
    for i, j, k, m in np.ndindex(3, 3, 3, 3):
        full[i, j, k, m] = p[index[min(i, j), max(i, j)], index[min(k, m), max(k, m)]]
    return full


def test_what_makes_no_sense_is_refused() -> None:
    with pytest.raises(ValueError, match=r"expansion has shape \(2,\); give one number"):
        thermal_stress(SAPPHIRE, [5e-6, 5.9e-6], "c")
    with pytest.raises(ValueError, match=r"photoelastic has shape \(3, 3\); expected \(6, 6\)"):
        photoelastic_ratios(np.eye(3), "cubic", "100")
    with pytest.raises(ValueError, match="not changed by strain along the depth"):
        photoelastic_ratios(np.zeros((6, 6)), "cubic", "100")
