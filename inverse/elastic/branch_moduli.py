"""Moduli of the three waves along fixed directions, straight from vectors of constants: for samplers.

The Christoffel matrix is linear in the constants, so its matrices along the directions are laid out once.
Nothing is refused here: an unstable vector has a modulus that is not positive.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from inverse.elastic.symmetry import basis, constant_names
from inverse.elastic.voigt import FloatArray, voigt_to_mandel, wave_strain

__all__ = ["BranchModuli", "branch_moduli"]


@dataclass(frozen=True, eq=False)
class BranchModuli:
    """Density x velocity squared of each branch along each direction.

    Attributes
    ----------
    symmetry : str
        A key of `SYMMETRIES`.
    directions : ndarray, shape (k, 3)
        Unit vectors.
    matrices : ndarray, shape (n, k, 3, 3)
        Christoffel matrix along each direction per unit of each constant.
    """

    symmetry: str
    directions: FloatArray
    matrices: FloatArray

    def __call__(self, vector: ArrayLike) -> FloatArray:
        """Return the moduli.

        Parameters
        ----------
        vector : array_like, shape (s, n)
            Independent constants in the order of `constant_names`, GPa.

        Returns
        -------
        ndarray, shape (s, k, 3)
            GPa, in the order of `BRANCHES`: the wave polarised most nearly along its direction, then the
            faster and the slower other.
        """
        matrix = np.tensordot(np.asarray(vector, dtype=float), self.matrices, axes=1)
        values, columns = np.linalg.eigh(matrix)
        along = np.einsum("skim,ki->skm", columns, self.directions) ** 2
        # Rounded as in `PlaneWaves.branch`: of two waves equally longitudinal the faster is taken.
        longitudinal = np.argmax(np.round(along[..., ::-1], 12), axis=-1)
        descending = values[..., ::-1].copy()
        for position in (1, 2):
            moved = longitudinal == position
            first = descending[moved, position].copy()
            descending[moved, 1 : position + 1] = descending[moved, :position]
            descending[moved, 0] = first
        return descending


def branch_moduli(symmetry: str, directions: ArrayLike) -> BranchModuli:
    """Lay out the Christoffel matrices of a symmetry along directions.

    Parameters
    ----------
    symmetry : str
        A key of `SYMMETRIES`.
    directions : array_like, shape (k, 3)
        Unit vectors along the crystal's Cartesian axes.

    Returns
    -------
    BranchModuli

    Raises
    ------
    ValueError
        If the symmetry is not known.

    Examples
    --------
    >>> branch_moduli("cubic", [[0.0, 0.0, 1.0]])([[165.78, 63.94, 79.62]]).round(6)
    array([[[165.78,  79.62,  79.62]]])
    """
    constant_names(symmetry)
    unit = np.asarray(directions, dtype=float)
    strain = wave_strain(unit)
    stiffness = voigt_to_mandel(basis(symmetry))
    return BranchModuli(symmetry, unit, np.einsum("kIi,nIJ,kJj->nkij", strain, stiffness, strain))
