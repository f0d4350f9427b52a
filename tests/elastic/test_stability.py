"""Born stability: eigenvalues and inequalities tell the same, and messages say what is broken."""

import numpy as np
import pytest
from elastic_cases import SAPPHIRE_CRC, cubic, stable_tensors
from hypothesis import given
from hypothesis import strategies as st

from inverse.elastic import SYMMETRIES, StiffnessTensor, born_criteria, constant_names, is_stable


@pytest.mark.parametrize("symmetry", sorted(SYMMETRIES))
def test_criteria_hold_exactly_when_every_eigenvalue_is_positive(symmetry: str) -> None:
    # Off-diagonal constants of all sizes, so that each criterion is the deciding one somewhere.
    names = constant_names(symmetry)
    diagonal = np.array([name[1] == name[2] for name in names])
    random = np.random.default_rng(2)
    vectors = random.uniform(-100.0, 100.0, (20000, len(names))) * random.uniform(0.0, 1.0, (20000, 1))
    vectors = np.where(diagonal, random.uniform(-10.0, 100.0, vectors.shape), vectors)
    tensors = StiffnessTensor.from_vector(symmetry, vectors, allow_unstable=True)
    positive = np.linalg.eigvalsh(tensors.mandel)[:, 0] > 0.0
    assert 200 < positive.sum() < 19800
    satisfied = np.stack([criterion.satisfied for criterion in tensors.born_criteria])
    np.testing.assert_array_equal(satisfied.all(axis=0), positive)
    np.testing.assert_array_equal(tensors.is_stable, positive)


@given(stable_tensors(), st.integers(0, 2**32 - 1))
def test_stable_tensor_stores_energy_for_every_strain(tensor: StiffnessTensor, seed: int) -> None:
    strain = np.random.default_rng(seed).normal(size=(3, 3))
    strain = strain + strain.T
    assert np.einsum("ij,ijkl,kl", strain, tensor.components, strain) > 0.0


@pytest.mark.parametrize(
    ("changes", "broken"),
    [
        ({"c12": 500.0}, r"c11 - c12 > 0 \(it is -2\.65\)"),
        ({"c13": 500.0}, r"c33 \(c11 \+ c12\) - 2 c13\^2 > 0 \(it is -1\.699e\+05\)"),
        ({"c14": 160.0}, r"c44 \(c11 - c12\) - 2 c14\^2 > 0 \(it is -2063\)"),
        ({"c44": -1.0}, r"c44 > 0 \(it is -1\)"),
    ],
)
def test_unstable_sapphire_names_the_criterion(changes: dict[str, float], broken: str) -> None:
    with pytest.raises(
        ValueError, match=rf"unstable trigonal_6 stiffness: the smallest eigenvalue is -.*{broken}"
    ):
        StiffnessTensor.trigonal(**{**SAPPHIRE_CRC, **changes})


def test_unstable_batch_names_the_first() -> None:
    with pytest.raises(
        ValueError, match=r"in 2 of 3 tensors, first at index \(1,\): .* c11 - c12 > 0 \(it is -20\)"
    ):
        StiffnessTensor.cubic(c11=100.0, c12=[60.0, 120.0, 130.0], c44=30.0)


def test_singular_tensor_is_unstable() -> None:
    with pytest.raises(ValueError, match=r"unstable cubic stiffness: .* c44 > 0 \(it is 0\)"):
        StiffnessTensor.cubic(c11=2.2, c12=2.1, c44=0.0)
    # One eigenvalue is zero to rounding, on either side.
    vectors = np.random.default_rng(1).normal(size=(5, 6))
    with pytest.raises(ValueError, match="unstable triclinic stiffness"):
        StiffnessTensor.from_mandel(vectors.T @ vectors)


def test_wrong_unit_of_one_constant_is_refused() -> None:
    with pytest.raises(ValueError, match=r"Check the constants, their order and their unit \(GPa\)"):
        StiffnessTensor.cubic(c11=1.6578, c12=63.94, c44=79.62)


def test_sampler_sees_which_of_its_tensors_are_stable() -> None:
    vectors = [[165.78, 63.94, 79.62], [60.0, 63.94, 79.62], [165.78, -90.0, 79.62]]
    batch = StiffnessTensor.from_vector("cubic", vectors, allow_unstable=True)
    assert batch.is_stable.tolist() == [True, False, False]
    kept = StiffnessTensor.from_vector("cubic", np.array(vectors)[batch.is_stable])
    np.testing.assert_array_equal(kept.voigt[0], cubic("Si").voigt)


def test_matrix_with_a_hole_is_not_stable() -> None:
    holed = np.stack([cubic("Si").voigt, cubic("Si").voigt])
    holed[1, 0, 0] = np.nan
    assert is_stable(holed).tolist() == [True, False]


def test_criteria_carry_their_values() -> None:
    criteria = {c.text: float(c.value) for c in born_criteria(cubic("Cu").voigt, "cubic")}
    assert criteria == pytest.approx({"c11 - c12 > 0": 47.1, "c11 + 2 c12 > 0": 410.7, "c44 > 0": 75.7})
    texts = [c.text for c in born_criteria(cubic("Cu").voigt, "monoclinic")]
    assert texts[0] == "c11 > 0"
    assert texts[3] == "determinant of rows and columns 1, 2, 3, 5 > 0"
    assert texts[4:] == ["c44 > 0", "determinant of rows and columns 4, 6 > 0"]
