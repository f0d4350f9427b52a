"""The recursion with 3 by 3 blocks: three displacement components, coupled where layers meet.

In each layer the field is a sum of modes, ``u = V a`` with the mode's polarisations as the columns of V, and every
mode obeys the scalar form ``a = A exp(-q z) + B exp(-q (d - z)) + a_p``,
``flux = V [y (A exp(-q z) - B exp(-q (d - z))) + f_p]``, Re q > 0. At an interface the flux is continuous and
``u(above) - u(below) = compliance * flux`` with one compliance per component. As in the scalar recursion a compliance
of zero, an open gap and a free surface are finite.

Shapes: modes and components stand last, (sets or 1, frequencies or 1, 3); matrices (sets or 1, frequencies or 1, 3, 3).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["BlockEnds", "BlockInterfaces", "ascend_blocks", "descend_blocks", "surface_amplitudes"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_ONE = np.eye(3)


@dataclass(frozen=True)
class BlockEnds:
    """Particular solution and flux of each mode at the top and bottom of a medium (bottom unused in a half-space)."""

    u_top: Complex
    f_top: Complex
    u_bottom: Complex
    f_bottom: Complex


@dataclass(frozen=True)
class BlockInterfaces:
    """What the upward sweep leaves, per layer from the top, in the modes of that layer.

    Attributes
    ----------
    reflection, source : tuple of arrays
        R and b of ``B = R A E + b`` at the bottom of each layer: a matrix and a vector.
    gamma, beta : tuple of arrays
        ``B E = gamma A + beta`` at the top of each medium, a half-space last (zeros).
    """

    reflection: tuple[Complex, ...]
    source: tuple[Complex, ...]
    gamma: tuple[Complex, ...]
    beta: tuple[Complex, ...]


def ascend_blocks(
    y: Sequence[Complex],
    decay: Sequence[Complex],
    modes: Sequence[Array],
    compliance: Sequence[Array],
    ends: Sequence[BlockEnds],
) -> BlockInterfaces:
    """Sweep from the half-space, or from a free back, to the top layer.

    Parameters
    ----------
    y : sequence of arrays
        Admittance of each mode of each medium, substrate last.
    decay : sequence of arrays
        ``exp(-q d)`` of each mode of each layer: one fewer than media, or as many where the last is free below.
    modes : sequence of arrays, shape (sets or 1, 1, 3, 3)
        Polarisations as columns, orthonormal, of each medium.
    compliance : sequence of arrays, shape (sets or 1, 1, 3)
        Per interface, of each component: zero, or up to `inverse.response.recursion.OPEN`.
    ends : sequence of BlockEnds

    Returns
    -------
    BlockInterfaces
    """
    gamma, beta = [np.zeros((1, 1, 3, 3), dtype=complex)], [np.zeros((1, 1, 3), dtype=complex)]
    reflection: list[Complex] = []
    source: list[Complex] = []
    if len(decay) == len(y):
        source = [ends[-1].f_bottom / y[-1]]
        reflection = [_diagonal(np.ones_like(source[0]))]
        gamma, beta = [_diagonal(decay[-1] * decay[-1])], [source[0] * decay[-1]]
    for j in range(len(y) - 2, -1, -1):
        seen = _below(y[j + 1], modes[j + 1], gamma[0])
        offset = _turned(modes[j + 1], ends[j + 1].u_top + beta[0])
        pushed = _turned(modes[j + 1], ends[j + 1].f_top - y[j + 1] * beta[0])
        through = np.linalg.inv(_ONE + seen * compliance[j][..., None, :])
        w = _into(modes[j], through @ seen)
        push = _back(modes[j], _apply(through, pushed))
        fixed = np.linalg.inv(_diagonal(y[j]) + w)
        reflection.insert(0, fixed @ (_diagonal(y[j]) - w))
        load = ends[j].f_bottom - _apply(w, ends[j].u_bottom - _back(modes[j], offset)) - push
        source.insert(0, _apply(fixed, load))
        gamma.insert(0, decay[j][..., :, None] * reflection[0] * decay[j][..., None, :])
        beta.insert(0, decay[j] * source[0])
    return BlockInterfaces(tuple(reflection), tuple(source), tuple(gamma), tuple(beta))


def surface_amplitudes(
    y: Complex, modes: Array, below: BlockInterfaces, ends: BlockEnds, load: Complex
) -> Complex:
    """Return A of the top medium's modes under a load.

    Parameters
    ----------
    y, modes, ends
        Of the top medium.
    below : BlockInterfaces
    load : array, shape (1, frequencies or 1, 3)
        Admittance of each component (``flux = -load * u``); zeros for a free surface, the acoustic impedance times s
        in z alone for a liquid.
    """
    gamma, beta = below.gamma[0], below.beta[0]
    felt = _into(modes, load[..., None] * _ONE)
    matrix = _diagonal(y) @ (_ONE - gamma) + felt @ (_ONE + gamma)
    return _solve(matrix, y * beta - ends.f_top - _apply(felt, beta + ends.u_top))


def descend_blocks(
    first: Complex,
    y: Sequence[Complex],
    decay: Sequence[Complex],
    modes: Sequence[Array],
    below: BlockInterfaces,
    ends: Sequence[BlockEnds],
) -> tuple[list[Complex], list[Complex]]:
    """Sweep down from the top medium's A and return (A, B) of every medium; B of the half-space is zero."""
    up: list[Complex] = []
    down = [first]
    for j, e in enumerate(decay):
        arriving = down[j] * e
        up.append(_apply(below.reflection[j], arriving) + below.source[j])
        if j == len(y) - 1:
            return down, up
        flux = _turned(modes[j], y[j] * (arriving - up[j]) + ends[j].f_bottom)
        flux = _back(modes[j + 1], flux) - ends[j + 1].f_top + y[j + 1] * below.beta[j + 1]
        down.append(_solve(_ONE - below.gamma[j + 1], flux / y[j + 1]))
    up.append(np.zeros((1, 1, 3), dtype=complex))
    return down, up


def _below(y: Complex, modes: Array, gamma: Complex) -> Complex:
    """Admittance matrix that the region below shows at its top, in components."""
    # The two factors commute, so the order of the solve does not matter.
    inner = y[..., :, None] * np.linalg.solve(_ONE + gamma, _ONE - gamma)
    return np.asarray(modes @ inner @ np.swapaxes(modes, -1, -2), dtype=complex)


def _into(modes: Array, matrix: Complex) -> Complex:
    """Express a matrix of components in modes."""
    return np.swapaxes(modes, -1, -2) @ matrix @ modes


def _turned(modes: Array, vector: Complex) -> Complex:
    """Turn mode amplitudes into components."""
    return np.asarray((modes @ vector[..., None])[..., 0], dtype=complex)


def _back(modes: Array, vector: Complex) -> Complex:
    """Turn components into mode amplitudes."""
    return (np.swapaxes(modes, -1, -2) @ vector[..., None])[..., 0]


def _apply(matrix: Any, vector: Any) -> Complex:
    return (matrix @ vector[..., None])[..., 0]


def _solve(matrix: Complex, vector: Complex) -> Complex:
    return np.asarray(np.linalg.solve(matrix, vector[..., None])[..., 0], dtype=complex)


def _diagonal(values: Complex) -> Complex:
    return values[..., :, None] * _ONE
