"""Engineering moduli: polycrystal averages, and Young's modulus and Poisson's ratio by direction."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from inverse.elastic.directions import crystal_direction
from inverse.elastic.tensor import StiffnessTensor
from inverse.elastic.voigt import FloatArray, uniaxial

__all__ = ["Averages", "averages", "poisson_ratio", "young_modulus"]


@dataclass(frozen=True, eq=False)
class Averages:
    """Moduli of a polycrystal without texture, bounded by Voigt (uniform strain) and Reuss (uniform stress).

    Attributes
    ----------
    bulk_voigt, bulk_reuss, shear_voigt, shear_reuss : ndarray, shape (...)
        The bounds, GPa.
    """

    bulk_voigt: FloatArray
    bulk_reuss: FloatArray
    shear_voigt: FloatArray
    shear_reuss: FloatArray

    @property
    def bulk(self) -> FloatArray:
        """Hill's bulk modulus K, the mean of the bounds, GPa."""
        return 0.5 * (self.bulk_voigt + self.bulk_reuss)

    @property
    def shear(self) -> FloatArray:
        """Hill's shear modulus G, the mean of the bounds, GPa."""
        return 0.5 * (self.shear_voigt + self.shear_reuss)

    @property
    def young(self) -> FloatArray:
        """Young's modulus 9 K G / (3 K + G) of Hill's moduli, GPa."""
        return 9.0 * self.bulk * self.shear / (3.0 * self.bulk + self.shear)

    @property
    def poisson(self) -> FloatArray:
        """Poisson's ratio (3 K - 2 G) / (6 K + 2 G) of Hill's moduli."""
        return (3.0 * self.bulk - 2.0 * self.shear) / (6.0 * self.bulk + 2.0 * self.shear)

    @property
    def universal_anisotropy(self) -> FloatArray:
        """A_U = 5 G_V / G_R + K_V / K_R - 6, zero when isotropic.

        Ranganathan and Ostoja-Starzewski 2008, cited from memory.
        """
        return 5.0 * self.shear_voigt / self.shear_reuss + self.bulk_voigt / self.bulk_reuss - 6.0

    def longitudinal_velocity(self, density: ArrayLike) -> FloatArray:
        """sqrt((K + 4 G / 3) / density) in nm/ps, density in g/cm3, with Hill's moduli."""
        return np.sqrt((self.bulk + 4.0 * self.shear / 3.0) / np.asarray(density, dtype=float))

    def transverse_velocity(self, density: ArrayLike) -> FloatArray:
        """sqrt(G / density) in nm/ps, density in g/cm3, with Hill's modulus."""
        return np.sqrt(self.shear / np.asarray(density, dtype=float))


def averages(tensor: StiffnessTensor) -> Averages:
    """Voigt, Reuss and Hill averages of a stiffness.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape (...).

    Returns
    -------
    Averages
        9 K_V = sum of c_ij over i, j <= 3, 1 / K_R = the same sum of compliances;
        15 G_V = (c11 + c22 + c33) - (c12 + c13 + c23) + 3 (c44 + c55 + c66),
        15 / G_R = 4 (s11 + s22 + s33) - 4 (s12 + s13 + s23) + 3 (s44 + s55 + s66).
    """
    axial, cross, shear = _sums(tensor.voigt)
    s_axial, s_cross, s_shear = _sums(tensor.compliance)
    return Averages(
        bulk_voigt=(axial + 2.0 * cross) / 9.0,
        bulk_reuss=1.0 / (s_axial + 2.0 * s_cross),
        shear_voigt=(axial - cross + 3.0 * shear) / 15.0,
        shear_reuss=15.0 / (4.0 * s_axial - 4.0 * s_cross + 3.0 * s_shear),
    )


def _sums(m: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    axial = m[..., 0, 0] + m[..., 1, 1] + m[..., 2, 2]
    cross = m[..., 0, 1] + m[..., 0, 2] + m[..., 1, 2]
    return axial, cross, m[..., 3, 3] + m[..., 4, 4] + m[..., 5, 5]


def young_modulus(tensor: StiffnessTensor, direction: str | ArrayLike) -> FloatArray:
    """Young's modulus for uniaxial stress along a direction.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape B.
    direction : str or array_like, shape D + (3,)
        Crystal direction n, as `crystal_direction` takes it.

    Returns
    -------
    ndarray, shape B + D
        E = 1 / (n n : S : n n) in GPa.

    Raises
    ------
    ValueError
        If a direction means nothing or has zero length.
    """
    along = uniaxial(crystal_direction(direction, tensor.symmetry))
    return 1.0 / _contract(tensor, along, along)


def poisson_ratio(
    tensor: StiffnessTensor, direction: str | ArrayLike, transverse: str | ArrayLike
) -> FloatArray:
    """Poisson's ratio: contraction along `transverse` per extension along `direction` under stress along it.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape B.
    direction, transverse : str or array_like, shape D + (3,)
        Perpendicular crystal directions n and m, as `crystal_direction` takes them.

    Returns
    -------
    ndarray, shape B + D
        -(m m : S : n n) / (n n : S : n n).

    Raises
    ------
    ValueError
        If the directions are not perpendicular, mean nothing, or have zero length.
    """
    n = crystal_direction(direction, tensor.symmetry)
    m = crystal_direction(transverse, tensor.symmetry)
    cosine = np.abs(np.sum(n * m, axis=-1)).max()
    if cosine > 1e-8:
        raise ValueError(
            f"direction and transverse are not perpendicular: their cosine is {cosine:.3g}; Poisson's ratio "
            "needs 0."
        )
    along, across = np.broadcast_arrays(uniaxial(n), uniaxial(m))
    return -_contract(tensor, across, along) / _contract(tensor, along, along)


def _contract(tensor: StiffnessTensor, left: FloatArray, right: FloatArray) -> FloatArray:
    response = np.tensordot(np.linalg.inv(tensor.mandel), right, axes=(-1, -1))
    # tensordot leaves the strain's axis between the batch's and the directions'.
    strain = np.moveaxis(response, len(tensor.batch_shape), -1)
    return np.asarray(np.sum(left * strain, axis=-1), dtype=float)
