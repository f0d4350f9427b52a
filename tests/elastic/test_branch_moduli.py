"""The sampler's short cut to branch moduli against the plane waves it stands for."""

import numpy as np
import pytest
from elastic_cases import SAPPHIRE_CRC, random_stable
from hypothesis import given
from hypothesis import strategies as st

from inverse.elastic import BRANCHES, SYMMETRIES, StiffnessTensor, branch_moduli, plane_waves, unit_direction


@given(st.sampled_from(sorted(SYMMETRIES)), st.integers(0, 10_000))
def test_moduli_are_density_times_velocity_squared_of_the_named_branches(symmetry: str, seed: int) -> None:
    tensor = random_stable(symmetry, seed)
    directions = unit_direction(np.random.default_rng(seed).standard_normal((5, 3)))
    moduli = branch_moduli(symmetry, directions)(tensor.vector[None])[0]
    waves = plane_waves(tensor, 2.5, directions)
    for column, name in enumerate(BRANCHES):
        velocity = np.take_along_axis(waves.phase_velocity, waves.branch(name)[:, None], axis=1)[:, 0]
        np.testing.assert_allclose(moduli[:, column], 2.5 * velocity**2, rtol=1e-9)


def test_a_longitudinal_wave_that_is_not_the_fastest_stays_the_first_branch() -> None:
    # c11 < c44 is stable with c12 < 0: along [100] both transverse waves outrun the longitudinal one.
    slow = StiffnessTensor.cubic(c11=50.0, c12=-10.0, c44=80.0)
    moduli = branch_moduli("cubic", [[1.0, 0.0, 0.0], [1.0, 1.0, 0.0] / np.sqrt(2)])(slow.vector[None])[0]
    # Closed forms: [110] has (c11 + c12 + 2 c44) / 2 longitudinal, c44 and (c11 - c12) / 2 transverse.
    np.testing.assert_allclose(moduli, [[50.0, 80.0, 80.0], [100.0, 80.0, 30.0]], rtol=1e-12)


def test_a_batch_is_row_by_row_and_an_unstable_row_raises_nothing() -> None:
    good = StiffnessTensor.trigonal(**SAPPHIRE_CRC).vector
    moduli = branch_moduli("trigonal_6", np.eye(3))(np.stack([good, -good, 2 * good]))
    np.testing.assert_allclose(moduli[2], 2 * moduli[0], rtol=1e-12)
    assert np.all(moduli[1] < 0)


def test_an_unknown_symmetry_is_named() -> None:
    with pytest.raises(ValueError, match="symmetry 'kubic' is not known"):
        branch_moduli("kubic", np.eye(3))
