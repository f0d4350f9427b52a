"""Plane waves in an anisotropic solid: phase and group velocities and polarisations for any direction.

A wave p exp(i k (n . x - v t)) obeys Gamma p = rho v^2 p with the Christoffel matrix Gamma_il = c_ijkl n_j
n_k. With GPa, g/cm3 and nm/ps no factor enters: v = sqrt(eigenvalue / rho). The three waves of a direction
are ordered from fast to slow.

Every function here is batched: for tensors of batch shape B and directions of shape D + (3,), results have
shape B + D + (3, ...), all tensors with all directions. A density of shape B (or one that broadcasts against
it) goes with the tensors.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from inverse.elastic.directions import crystal_direction, unit_direction
from inverse.elastic.tensor import StiffnessTensor
from inverse.elastic.voigt import FloatArray, wave_strain

__all__ = [
    "BRANCHES",
    "PlaneWaves",
    "christoffel_matrix",
    "longitudinal_velocity",
    "phase_velocities",
    "plane_waves",
]

BRANCHES = ("longitudinal", "fast transverse", "slow transverse")
"""Names of branches: the wave polarised most nearly along its direction, then the faster and slower "
"others."""

# Eigenvalues closer than this fraction of the largest count as one: below it polarisations are rounding.
_DEGENERATE = 1e-9
# Longitudinal and transverse are pure when cos^2, or 1 - cos^2, of the angle to the direction is below this.
_PURE = 1e-10
# No symmetry axis or plane contains it, so it decides everywhere.
_REFERENCE = np.array([1.0, 0.61803398875, 0.3819660112])


@dataclass(frozen=True, eq=False)
class PlaneWaves:
    """The three plane waves of each direction, fast to slow.

    Attributes
    ----------
    direction : ndarray, shape D + (3,)
        Unit propagation directions n, along the axes of the tensor.
    phase_velocity : ndarray, shape B + D + (3,)
        nm/ps, descending.
    group_velocity : ndarray, shape B + D + (3, 3)
        Velocity of the energy, nm/ps: last axis x, y, z. Its component along n is the phase velocity.
    polarisation : ndarray, shape B + D + (3, 3)
        Unit displacement p, last axis x, y, z, with p . n >= 0.
    degenerate : ndarray of bool, shape B + D + (3,)
        Where the velocity is shared with another wave. Any combination of the two polarisations is a wave
        there; the ones given are the most longitudinal and those across it. The group velocity is theirs, and
        off a symmetry axis of order four or more it is one of a cone.
    """

    direction: FloatArray
    phase_velocity: FloatArray
    group_velocity: FloatArray
    polarisation: FloatArray
    degenerate: np.ndarray

    @property
    def slowness(self) -> FloatArray:
        """Reciprocal phase velocity, ps/nm, shape B + D + (3,)."""
        return 1.0 / self.phase_velocity

    @property
    def longitudinal_part(self) -> FloatArray:
        """(p . n)^2, shape B + D + (3,): 1 for a longitudinal wave, 0 for a transverse one."""
        return np.einsum("...mi,...i->...m", self.polarisation, self.direction) ** 2

    @property
    def kind(self) -> np.ndarray:
        """What each wave is, str, shape B + D + (3,).

        "longitudinal", "quasi-longitudinal", "quasi-transverse" or "transverse".
        """
        part = self.longitudinal_part
        quasi = np.where(
            np.arange(3) == self.branch("longitudinal")[..., None], "quasi-longitudinal", "quasi-transverse"
        )
        return np.where(part > 1.0 - _PURE, "longitudinal", np.where(part < _PURE, "transverse", quasi))

    def branch(self, name: str) -> np.ndarray:
        """Index (0 fast, 2 slow) of a branch by polarisation.

        Parameters
        ----------
        name : str
            One of `BRANCHES`. The quasi-longitudinal wave need not be the fastest.

        Returns
        -------
        ndarray of int, shape B + D

        Raises
        ------
        ValueError
            If the name is not one of `BRANCHES`.
        """
        if name not in BRANCHES:
            raise ValueError(f"branch {name!r} is not known; expected one of {', '.join(BRANCHES)}.")
        # Rounded: of two waves equally longitudinal the faster is taken, not the one the last bit favours.
        longitudinal = np.argmax(np.round(self.longitudinal_part, 12), axis=-1)
        if name == "longitudinal":
            return np.asarray(longitudinal)
        if name == "fast transverse":
            return np.where(longitudinal == 0, 1, 0)
        return np.where(longitudinal == 2, 1, 2)


def christoffel_matrix(tensor: StiffnessTensor, direction: str | ArrayLike) -> FloatArray:
    """Christoffel matrix Gamma_il = c_ijkl n_j n_k.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape B.
    direction : str or array_like, shape D + (3,)
        Propagation direction, as `crystal_direction` takes it; scaled to length one.

    Returns
    -------
    ndarray, shape B + D + (3, 3)
        GPa.

    Raises
    ------
    ValueError
        If a direction means nothing or has zero length.
    """
    return _matrix(tensor, crystal_direction(direction, tensor.symmetry))


def _matrix(tensor: StiffnessTensor, unit: FloatArray) -> FloatArray:
    strain = wave_strain(unit)
    matrix = np.swapaxes(strain, -1, -2) @ _facing(tensor.mandel, unit) @ strain
    return np.asarray(0.5 * (matrix + np.swapaxes(matrix, -1, -2)), dtype=float)


def _facing(mandel: FloatArray, unit: FloatArray) -> FloatArray:
    """Give a batch of 6 by 6 matrices an axis of length one for each axis of the directions."""
    return mandel.reshape(*mandel.shape[:-2], *(1,) * (unit.ndim - 1), 6, 6)


def _density(density: ArrayLike, tensor: StiffnessTensor, unit: FloatArray) -> FloatArray:
    rho = np.asarray(density, dtype=float)
    if not np.all(np.isfinite(rho) & (rho > 0.0)):
        raise ValueError(f"density {rho} is not positive; expected g/cm3.")
    try:
        np.broadcast_shapes(rho.shape, tensor.batch_shape)
    except ValueError:
        raise ValueError(
            f"density of shape {rho.shape} does not go with stiffness tensors of batch shape "
            f"{tensor.batch_shape}; "
            "give one density, or one for each tensor."
        ) from None
    return rho.reshape(*rho.shape, *(1,) * unit.ndim)


def _moduli(eigenvalues: FloatArray) -> FloatArray:
    if not np.all(eigenvalues > 0.0):
        raise ValueError(
            f"a plane wave has the modulus {eigenvalues.min():.4g} GPa, which must be positive: the "
            "stiffness is unstable. "
            "Keep only tensors whose is_stable is true."
        )
    return eigenvalues


def phase_velocities(tensor: StiffnessTensor, density: ArrayLike, direction: str | ArrayLike) -> FloatArray:
    """Phase velocities of the three waves, fast to slow, without their polarisations.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape B.
    density : array_like
        g/cm3, one or one per tensor.
    direction : str or array_like, shape D + (3,)
        Propagation direction, as `crystal_direction` takes it.

    Returns
    -------
    ndarray, shape B + D + (3,)
        nm/ps, v = sqrt(eigenvalue of Gamma / density).

    Raises
    ------
    ValueError
        If the density is not positive, a direction is wrong, or a tensor is unstable.
    """
    unit = crystal_direction(direction, tensor.symmetry)
    eigenvalues = np.asarray(np.linalg.eigvalsh(_matrix(tensor, unit)), dtype=float)[..., ::-1]
    return np.sqrt(_moduli(eigenvalues) / _density(density, tensor, unit))


def plane_waves(
    tensor: StiffnessTensor,
    density: ArrayLike,
    direction: str | ArrayLike,
    *,
    reference: ArrayLike = _REFERENCE,
) -> PlaneWaves:
    """Phase velocities, group velocities and polarisations of the three waves of each direction.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape B.
    density : array_like
        g/cm3, one or one per tensor.
    direction : str or array_like, shape D + (3,)
        Propagation direction, as `crystal_direction` takes it.
    reference : array_like, shape (3,)
        Where two transverse waves share a velocity physics leaves their polarisations free: the first is
        taken as near to this direction as can be. Left out, it is an arbitrary but fixed one.

    Returns
    -------
    PlaneWaves
        The group velocity is d omega / d k_j = c_ijkl p_i n_k p_l / (density v).

    Raises
    ------
    ValueError
        If the density is not positive, a direction is wrong, or a tensor is unstable.

    Examples
    --------
    >>> silicon = StiffnessTensor.cubic(c11=165.78, c12=63.94, c44=79.62)
    >>> plane_waves(silicon, 2.3296, "110").phase_velocity.round(4)
    array([9.1369, 5.8462, 4.6752])
    """
    unit = crystal_direction(direction, tensor.symmetry)
    eigenvalues, polarisation, degenerate = _modes(_matrix(tensor, unit), unit, unit_direction(reference))
    rho = _density(density, tensor, unit)
    velocity = np.sqrt(eigenvalues / rho)
    polarisation, degenerate, _ = np.broadcast_arrays(
        polarisation, degenerate[..., None], velocity[..., None]
    )
    flux = _energy_flux(tensor, unit, polarisation)
    group = flux / (rho[..., None] * velocity[..., None])
    return PlaneWaves(unit, velocity, group, polarisation, degenerate[..., 0])


def _energy_flux(tensor: StiffnessTensor, unit: FloatArray, polarisation: FloatArray) -> FloatArray:
    """c_ijkl p_i n_k p_l: the stress of each wave times its displacement, shape B + D + (3 waves, 3)."""
    strain = np.einsum("...Ii,...mi->...mI", wave_strain(unit), polarisation)
    stress = strain @ _facing(tensor.mandel, unit)
    # A(p) n = A(n) p, so sigma_ij p_i is the stress on column j of A(p).
    return np.asarray(np.einsum("...mI,...mIj->...mj", stress, wave_strain(polarisation)), dtype=float)


def _modes(
    matrix: FloatArray, unit: FloatArray, reference: FloatArray
) -> tuple[FloatArray, FloatArray, np.ndarray]:
    """Eigenvalues (descending), polarisations (rows) and degeneracy of Christoffel matrices."""
    ascending, columns = np.linalg.eigh(matrix)
    eigenvalues = _moduli(ascending[..., ::-1])
    polarisation = np.ascontiguousarray(np.swapaxes(columns[..., ::-1], -1, -2))
    gap = eigenvalues[..., :-1] - eigenvalues[..., 1:]
    joined = gap <= _DEGENERATE * eigenvalues[..., :1]
    upper, lower = joined[..., 0], joined[..., 1]
    for mask, start, stop in ((upper & lower, 0, 3), (upper & ~lower, 0, 2), (lower & ~upper, 1, 3)):
        if mask.any():
            normal = np.broadcast_to(unit, (*mask.shape, 3))[mask]
            polarisation[mask, start:stop] = _canonical(polarisation[mask, start:stop], normal, reference)
    degenerate = np.stack([upper, upper | lower, lower], axis=-1)
    return eigenvalues, _signed(polarisation, unit), degenerate


def _canonical(vectors: FloatArray, normal: FloatArray, reference: FloatArray) -> FloatArray:
    """Turn the polarisations (rows) of one velocity: the most longitudinal first, then by the reference."""
    along = vectors @ normal[..., None]
    aside = vectors @ reference[:, None]
    # Made perpendicular to `along`, so that the reference decides only what the direction leaves free.
    square = np.sum(along**2, axis=-2, keepdims=True)
    overlap = np.sum(along * aside, axis=-2, keepdims=True)
    aside = aside - along * np.divide(overlap, square, out=np.zeros_like(square), where=square > 1e-12)
    weight = along @ np.swapaxes(along, -1, -2) + 1e-6 * aside @ np.swapaxes(aside, -1, -2)
    _, turn = np.linalg.eigh(weight)
    return np.asarray(np.swapaxes(turn[..., ::-1], -1, -2) @ vectors, dtype=float)


def _signed(polarisation: FloatArray, unit: FloatArray) -> FloatArray:
    along = np.einsum("...mi,...i->...m", polarisation, unit)
    largest = np.take_along_axis(polarisation, np.argmax(np.abs(polarisation), axis=-1)[..., None], axis=-1)
    leading = np.where(np.abs(along) > 1e-9, along, largest[..., 0])
    return np.where(leading[..., None] < 0.0, -polarisation, polarisation)


def longitudinal_velocity(
    tensor: StiffnessTensor, density: ArrayLike, direction: str | ArrayLike
) -> FloatArray:
    """Phase velocity of the longitudinal or quasi-longitudinal wave along a direction.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape B.
    density : array_like
        g/cm3, one or one per tensor.
    direction : str or array_like, shape D + (3,)
        Propagation direction, as `crystal_direction` takes it: the cut of a wafer or the texture of a film.

    Returns
    -------
    ndarray, shape B + D
        nm/ps.

    Raises
    ------
    ValueError
        If the density is not positive, a direction is wrong, or a tensor is unstable.

    Examples
    --------
    >>> silicon = StiffnessTensor.cubic(c11=165.78, c12=63.94, c44=79.62)
    >>> round(float(longitudinal_velocity(silicon, 2.3296, "100")), 4)
    8.4358
    """
    waves = plane_waves(tensor, density, direction)
    index = waves.branch("longitudinal")[..., None]
    return np.take_along_axis(waves.phase_velocity, index, axis=-1)[..., 0]
