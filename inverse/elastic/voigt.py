"""Voigt and Mandel forms of fourth-rank elastic tensors, and plane-wave strains in them.

Pairs of axes are numbered 1 to 6 as 11, 22, 33, 23, 13, 12. In the Mandel form a symmetric second-rank tensor
is its six components on an orthonormal basis (shears times the square root of 2), so a stiffness is an
ordinary symmetric matrix: its inverse is the compliance, its eigenvalues are moduli, a rotation of the axes
is an orthogonal 6 by 6 matrix. In the Voigt form strains carry the factor 2 of engineering shear, stresses do
not.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = [
    "FloatArray",
    "full_to_voigt",
    "mandel_rotation",
    "mandel_to_full",
    "mandel_to_voigt",
    "uniaxial",
    "voigt_to_mandel",
    "wave_strain",
]

FloatArray = NDArray[np.float64]

_PAIRS = ((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))
_WEIGHT = np.array([1.0, 1.0, 1.0, np.sqrt(2.0), np.sqrt(2.0), np.sqrt(2.0)])
_WEIGHTS = np.outer(_WEIGHT, _WEIGHT)


def _orthonormal_basis() -> FloatArray:
    basis = np.zeros((6, 3, 3))
    for row, (i, j) in enumerate(_PAIRS):
        basis[row, i, j] = basis[row, j, i] = 1.0 / _WEIGHT[row]
    return basis


_BASIS = _orthonormal_basis()


def voigt_to_mandel(voigt: ArrayLike) -> FloatArray:
    """Mandel form of a stiffness from its Voigt form, both of shape (..., 6, 6) in GPa."""
    return np.asarray(voigt, dtype=float) * _WEIGHTS


def mandel_to_voigt(mandel: ArrayLike) -> FloatArray:
    """Voigt form of a stiffness from its Mandel form, both of shape (..., 6, 6) in GPa."""
    return np.asarray(mandel, dtype=float) / _WEIGHTS


def mandel_to_full(mandel: ArrayLike) -> FloatArray:
    """Components c_ijkl, shape (..., 3, 3, 3, 3), from the Mandel form, shape (..., 6, 6)."""
    return np.einsum("Iij,...IJ,Jkl->...ijkl", _BASIS, np.asarray(mandel, dtype=float), _BASIS)


def full_to_voigt(full: ArrayLike) -> FloatArray:
    """Voigt form of a stiffness, shape (..., 6, 6), from its components c_ijkl, shape (..., 3, 3, 3, 3)."""
    mandel = np.einsum("Iij,...ijkl,Jkl->...IJ", _BASIS, np.asarray(full, dtype=float), _BASIS)
    return mandel_to_voigt(mandel)


def mandel_rotation(rotation: ArrayLike) -> FloatArray:
    """Return the orthogonal 6 by 6 matrix that rotates Mandel vectors as `rotation` rotates axes.

    Parameters
    ----------
    rotation : array_like, shape (..., 3, 3)
        Orthogonal matrix; component i along the new axes is rotation[i, a] times component a along the old.

    Returns
    -------
    ndarray, shape (..., 6, 6)
        Q, with which a stiffness in Mandel form becomes Q M Q^T.
    """
    matrix = np.asarray(rotation, dtype=float)
    return np.einsum("Iij,...ia,...jb,Jab->...IJ", _BASIS, matrix, matrix, _BASIS)


def wave_strain(direction: ArrayLike) -> FloatArray:
    """Mandel strain of a plane wave along `direction` per unit displacement along each axis.

    Parameters
    ----------
    direction : array_like, shape (..., 3)
        Unit propagation direction n.

    Returns
    -------
    ndarray, shape (..., 6, 3)
        A(n) with A p = the Mandel vector of (n p + p n) / 2, so that the Christoffel matrix is A^T M A.
    """
    return np.einsum("Iij,...j->...Ii", _BASIS, np.asarray(direction, dtype=float))


def uniaxial(direction: ArrayLike) -> FloatArray:
    """Mandel vector of n n, shape (..., 6), for a unit direction n of shape (..., 3)."""
    unit = np.asarray(direction, dtype=float)
    return np.einsum("Iij,...i,...j->...I", _BASIS, unit, unit)
