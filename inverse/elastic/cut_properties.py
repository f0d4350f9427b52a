"""What a cut makes of second- and fourth-rank properties: thermal stress and shear seen by polarised light.

Sample axes: z is the depth, x and y as `rotation_to_z` lays them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from inverse.elastic.directions import crystal_direction, rotation_to_z
from inverse.elastic.tensor import StiffnessTensor
from inverse.elastic.voigt import FloatArray, mandel_to_full, voigt_to_mandel

__all__ = ["photoelastic_ratios", "thermal_stress"]


def _rotation(orientation: str | ArrayLike, in_plane: str | ArrayLike | None, symmetry: str) -> FloatArray:
    across = None if in_plane is None else crystal_direction(in_plane, symmetry)
    return rotation_to_z(crystal_direction(orientation, symmetry), across)


def thermal_stress(
    tensor: StiffnessTensor,
    expansion: ArrayLike,
    orientation: str | ArrayLike,
    in_plane: str | ArrayLike | None = None,
) -> FloatArray:
    """Stress on planes of constant depth per kelvin at zero strain, S_i3 = c_i3kl alpha_kl.

    Parameters
    ----------
    tensor : StiffnessTensor
        A single tensor, GPa.
    expansion : array_like
        Linear expansion in 1/K: one number (cubic), the principal values along x, y and z of the crystal, or the
        tensor, shape (3, 3).
    orientation : str or array_like, shape (3,)
        Crystal direction of the depth.
    in_plane : str or array_like, shape (3,), optional
        Crystal direction whose part across the depth becomes x; see `rotation_to_z`.

    Returns
    -------
    ndarray, shape (3,)
        S_xz, S_yz and S_zz in GPa/K, tension positive: ``thermal_stress_xz``, ``thermal_stress_yz`` and
        ``thermal_stress_coefficient`` of a layer.

    Raises
    ------
    ValueError
        If the expansion has another shape, or a direction means nothing.

    Examples
    --------
    >>> silicon = StiffnessTensor.cubic(c11=165.78, c12=63.94, c44=79.62)
    >>> (1e4 * thermal_stress(silicon, 2.6e-6, "100")).round(3)  # 3 x bulk modulus x expansion, in z
    array([0.   , 0.   , 7.635])
    """
    alpha = np.asarray(expansion, dtype=float)
    if alpha.shape not in ((), (3,), (3, 3)):
        raise ValueError(
            f"expansion has shape {alpha.shape}; give one number, three principal values or a 3 by 3 tensor, in 1/K."
        )
    alpha = alpha if alpha.ndim == 2 else np.diag(np.broadcast_to(alpha, 3))
    turn = _rotation(orientation, in_plane, tensor.symmetry)
    stress = np.einsum("ijkl,kl->ij", tensor.components, alpha)
    return np.asarray((turn @ stress @ turn.T)[:, 2], dtype=float)


def photoelastic_ratios(
    photoelastic: ArrayLike,
    symmetry: str,
    orientation: str | ArrayLike,
    polarisation: float = 0.0,
    in_plane: str | ArrayLike | None = None,
) -> tuple[float, float]:
    """Index change by shear over that by strain along the depth, for polarised light at normal incidence.

    Parameters
    ----------
    photoelastic : array_like, shape (6, 6)
        p_mn along the crystal's axes, Voigt order, engineering shear: not symmetric in general.
    symmetry : str
        A key of `SYMMETRIES`, for the names of directions.
    orientation : str or array_like, shape (3,)
        Crystal direction of the depth.
    polarisation : float
        Angle of the electric field from x towards y, degrees.
    in_plane : str or array_like, shape (3,), optional
        See `thermal_stress`.

    Returns
    -------
    xz, yz : float
        ``p_eexz / p_eezz`` and ``p_eeyz / p_eezz`` with e the polarisation: ``photoelastic_xz`` and
        ``photoelastic_yz`` of a layer.

    Raises
    ------
    ValueError
        If the matrix has another shape, a direction means nothing, or p_eezz is zero.
    """
    matrix = np.asarray(photoelastic, dtype=float)
    if matrix.shape != (6, 6):
        raise ValueError(f"photoelastic has shape {matrix.shape}; expected (6, 6), p_mn in Voigt order.")
    turn = _rotation(orientation, in_plane, symmetry)
    angle = np.deg2rad(polarisation)
    field = np.array([np.cos(angle), np.sin(angle), 0.0]) @ turn
    by_strain = (
        turn @ np.einsum("ijkl,i,j->kl", mandel_to_full(voigt_to_mandel(matrix)), field, field) @ turn.T
    )
    if by_strain[2, 2] == 0.0:
        raise ValueError(
            "Light of this polarisation is not changed by strain along the depth, so no ratio exists."
        )
    return float(by_strain[0, 2] / by_strain[2, 2]), float(by_strain[1, 2] / by_strain[2, 2])
