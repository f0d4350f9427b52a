"""Averages and engineering moduli against closed forms, handbook values and an independent package."""

import numpy as np
import pytest
from elastic_cases import cubic, random_stable, stable_tensors, unit_vectors
from hypothesis import given
from hypothesis import strategies as st

from inverse.elastic import (
    SYMMETRIES,
    StiffnessTensor,
    averages,
    poisson_ratio,
    rotation_about_axis,
    rotation_to_z,
    young_modulus,
)


@pytest.mark.parametrize("symmetry", sorted(SYMMETRIES))
def test_averages_agree_with_pymatgen(symmetry: str) -> None:
    elasticity = pytest.importorskip("pymatgen.core.elasticity.elastic")
    for seed in range(4):
        tensor = random_stable(symmetry, seed)
        reference = elasticity.ElasticTensor.from_voigt(tensor.voigt)
        ours = averages(tensor)
        bounds = (ours.bulk_voigt, ours.bulk_reuss, ours.shear_voigt, ours.shear_reuss)
        expected = (reference.k_voigt, reference.k_reuss, reference.g_voigt, reference.g_reuss)
        np.testing.assert_allclose(bounds, expected, rtol=1e-9)
        assert float(ours.universal_anisotropy) == pytest.approx(
            reference.universal_anisotropy, rel=1e-9, abs=1e-9
        )
        assert float(ours.poisson) == pytest.approx(reference.homogeneous_poisson, rel=1e-9)


@pytest.mark.parametrize("name", ["Si", "Cu", "W", "Al", "MgO"])
def test_closed_forms_of_cubic_crystals(name: str) -> None:
    # K = (c11 + 2 c12)/3, G_V = (c11 - c12 + 3 c44)/5, G_R = 5 (c11 - c12) c44 / (4 c44 + 3 (c11 - c12)),
    # and with Zener's ratio A = 2 c44/(c11 - c12), A_U = 6/5 (sqrt A - 1/sqrt A)^2.
    c11, c12, c44 = (float(value) for value in cubic(name).vector)
    ours = averages(cubic(name))
    zener = 2 * c44 / (c11 - c12)
    np.testing.assert_allclose([ours.bulk_voigt, ours.bulk_reuss], (c11 + 2 * c12) / 3, rtol=1e-12)
    assert float(ours.shear_voigt) == pytest.approx((c11 - c12 + 3 * c44) / 5, rel=1e-12)
    assert float(ours.shear_reuss) == pytest.approx(
        5 * (c11 - c12) * c44 / (4 * c44 + 3 * (c11 - c12)), rel=1e-12
    )
    expected = 1.2 * (np.sqrt(zener) - 1 / np.sqrt(zener)) ** 2
    assert float(ours.universal_anisotropy) == pytest.approx(expected, rel=1e-9)


@given(stable_tensors())
def test_voigt_bounds_hill_bounds_reuss(tensor: StiffnessTensor) -> None:
    ours = averages(tensor)
    slack = 1 + 1e-9
    assert ours.bulk_reuss <= ours.bulk * slack <= ours.bulk_voigt * slack**2
    assert ours.shear_reuss <= ours.shear * slack <= ours.shear_voigt * slack**2
    assert ours.universal_anisotropy >= -1e-9


@given(stable_tensors(), unit_vectors(), st.floats(-180.0, 180.0))
def test_averages_do_not_depend_on_the_axes(tensor: StiffnessTensor, axis: np.ndarray, angle: float) -> None:
    turned = averages(tensor.rotated(rotation_about_axis(axis, angle)))
    ours = averages(tensor)
    for name in ("bulk", "shear", "bulk_voigt", "bulk_reuss", "shear_voigt", "shear_reuss"):
        assert float(getattr(turned, name)) == pytest.approx(float(getattr(ours, name)), rel=1e-8)


@given(st.floats(10.0, 500.0), st.floats(0.05, 0.7), unit_vectors())
def test_isotropic_moduli(c11: float, ratio: float, n: np.ndarray) -> None:
    c44 = ratio * c11
    tensor = StiffnessTensor.isotropic(c11=c11, c44=c44)
    ours = averages(tensor)
    young = c44 * (3 * c11 - 4 * c44) / (c11 - c44)
    assert float(ours.universal_anisotropy) == pytest.approx(0.0, abs=1e-9)
    assert float(ours.young) == pytest.approx(young, rel=1e-9)
    assert float(ours.poisson) == pytest.approx((c11 - 2 * c44) / (2 * (c11 - c44)), rel=1e-9, abs=1e-12)
    assert float(young_modulus(tensor, n)) == pytest.approx(young, rel=1e-9)
    across = rotation_to_z(n)[0]
    assert float(poisson_ratio(tensor, n, across)) == pytest.approx(float(ours.poisson), rel=1e-7, abs=1e-9)
    assert float(ours.longitudinal_velocity(4.0)) == pytest.approx(np.sqrt(c11 / 4.0), rel=1e-9)
    assert float(ours.transverse_velocity(4.0)) == pytest.approx(np.sqrt(c44 / 4.0), rel=1e-9)


def test_silicon_moduli_by_direction() -> None:
    # Common practice for silicon microstructures (from memory): E = 130, 169, 188 GPa along <100>, <110>,
    # <111>; Poisson's ratio 0.28 in (100) along <100>, 0.064 along <110>, 0.36 from <110> to <001>. The
    # constants in use differ by 0.1 GPa; the compliance along turned axes is held exactly below.
    silicon = cubic("Si")
    along = young_modulus(silicon, [(1, 0, 0), (1, 1, 0), (1, 1, 1)])
    np.testing.assert_allclose(along, [130.0, 169.0, 188.0], atol=0.6, rtol=0)
    assert float(poisson_ratio(silicon, "100", "010")) == pytest.approx(0.28, abs=0.005)
    assert float(poisson_ratio(silicon, "110", "1-10")) == pytest.approx(0.064, abs=0.005)
    assert float(poisson_ratio(silicon, "110", "001")) == pytest.approx(0.36, abs=0.005)


@given(stable_tensors(), unit_vectors())
def test_young_and_poisson_are_the_compliance_along_turned_axes(
    tensor: StiffnessTensor, n: np.ndarray
) -> None:
    axes = rotation_to_z(n)
    s = tensor.rotated(axes).compliance
    assert float(young_modulus(tensor, n)) == pytest.approx(1 / s[2, 2], rel=1e-8)
    assert float(poisson_ratio(tensor, n, axes[0])) == pytest.approx(-s[0, 2] / s[2, 2], rel=1e-7, abs=1e-8)


def test_moduli_are_batched_all_with_all() -> None:
    tensor = StiffnessTensor.cubic(c11=[160.0, 170.0], c12=60.0, c44=80.0)
    directions = [(1, 0, 0), (0, 1, 1), (1, 1, 1)]
    young = young_modulus(tensor, directions)
    assert young.shape == (2, 3)
    second = StiffnessTensor.cubic(c11=170.0, c12=60.0, c44=80.0)
    np.testing.assert_allclose(young[1], young_modulus(second, directions), rtol=1e-13)
    assert poisson_ratio(tensor, directions[:2], (0, 1, -1)).shape == (2, 2)
    assert averages(tensor).bulk.shape == (2,)


def test_directions_that_are_not_perpendicular_are_refused() -> None:
    with pytest.raises(
        ValueError, match=r"not perpendicular: their cosine is 0\.707; Poisson's ratio needs 0"
    ):
        poisson_ratio(cubic("Si"), "100", "110")
    with pytest.raises(ValueError, match="zero length"):
        young_modulus(cubic("Si"), (0, 0, 0))
