"""How velocities depend on the independent constants, and which constants a set of velocities reaches."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from inverse.elastic.christoffel import PlaneWaves, plane_waves
from inverse.elastic.directions import crystal_direction
from inverse.elastic.symmetry import basis, linear_combination
from inverse.elastic.tensor import StiffnessTensor
from inverse.elastic.voigt import FloatArray, voigt_to_mandel, wave_strain

__all__ = ["Reach", "constants_reached", "measured_derivatives", "velocity_derivatives"]

Measurement = tuple[str | ArrayLike, str | int]
"""Direction, as `crystal_direction` takes it, and branch: one of `BRANCHES`, or 0 (fast) to 2 (slow)."""


@dataclass(frozen=True, eq=False)
class Reach:
    """What a set of measured velocities says about the independent constants, to first order.

    Attributes
    ----------
    names : tuple of str
        The independent constants, n of them.
    singular_values : ndarray, shape (n,)
        Of the derivatives of ln v by the constants over their root mean square; zeros are directions not
        reached.
    combinations : ndarray, shape (rank, n)
        Combinations of constants that the velocities fix, in reduced echelon form.
    unreached : ndarray, shape (n - rank, n)
        Orthonormal changes of the constants that leave every velocity as it is.
    sentences : tuple of str
        The same in words.
    """

    names: tuple[str, ...]
    singular_values: FloatArray
    combinations: FloatArray
    unreached: FloatArray
    sentences: tuple[str, ...]

    @property
    def complete(self) -> bool:
        """Whether every constant is reached by itself."""
        return len(self.unreached) == 0

    def __str__(self) -> str:
        return "\n".join(self.sentences)


def velocity_derivatives(
    tensor: StiffnessTensor, density: ArrayLike, direction: str | ArrayLike
) -> tuple[PlaneWaves, FloatArray]:
    """Phase velocities and their derivatives by the independent constants.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape B; the n constants are those of its symmetry.
    density : array_like
        g/cm3, one or one per tensor. The derivative by the density is -v / (2 density).
    direction : str or array_like, shape D + (3,)
        Propagation direction, as `crystal_direction` takes it.

    Returns
    -------
    waves : PlaneWaves
        The waves, fast to slow.
    derivatives : ndarray, shape B + D + (3, n)
        d v / d c_m = p_i n_j B^m_ijkl n_k p_l / (2 density v) in nm/ps/GPa, with B^m the tensor that c_m
        multiplies. Where `waves.degenerate`, it holds for changes that keep the velocities equal (as every
        change within the symmetry does on a symmetry axis); at an accidental crossing a velocity has no
        derivative.

    Raises
    ------
    ValueError
        If the density is not positive, a direction is wrong, or a tensor is unstable.
    """
    waves = plane_waves(tensor, density, direction)
    strain = np.einsum("...Ii,...mi->...mI", wave_strain(waves.direction), waves.polarisation)
    modulus = np.einsum("...mI,nIJ,...mJ->...mn", strain, voigt_to_mandel(basis(tensor.symmetry)), strain)
    rho = np.asarray(density, dtype=float).reshape(*np.shape(density), *(1,) * waves.direction.ndim)
    return waves, modulus / (2.0 * rho * waves.phase_velocity)[..., None]


def measured_derivatives(
    tensor: StiffnessTensor, density: ArrayLike, measurements: Sequence[Measurement]
) -> tuple[FloatArray, FloatArray]:
    """Velocities of given branches along given directions, and their derivatives by the constants.

    Parameters
    ----------
    tensor : StiffnessTensor
        Batch shape B.
    density : array_like
        g/cm3, one or one per tensor.
    measurements : sequence of (direction, branch), of length k
        The branch is one of `BRANCHES`, or an index from 0 (fast) to 2 (slow).

    Returns
    -------
    velocities : ndarray, shape B + (k,)
        nm/ps.
    derivatives : ndarray, shape B + (k, n)
        nm/ps/GPa.

    Raises
    ------
    ValueError
        If there are no measurements, or a direction or branch is wrong.
    """
    if not measurements:
        raise ValueError("no measurements were given; expected pairs such as ('100', 'longitudinal').")
    direction = np.stack([_single(orientation, tensor.symmetry) for orientation, _ in measurements])
    waves, derivatives = velocity_derivatives(tensor, density, direction)
    index = np.stack(
        [_branch_index(waves, branch)[..., row] for row, (_, branch) in enumerate(measurements)], axis=-1
    )
    velocities = np.take_along_axis(waves.phase_velocity, index[..., None], axis=-1)[..., 0]
    return velocities, np.take_along_axis(derivatives, index[..., None, None], axis=-2)[..., 0, :]


def _single(orientation: str | ArrayLike, symmetry: str) -> FloatArray:
    direction = crystal_direction(orientation, symmetry)
    if direction.ndim != 1:
        raise ValueError(
            f"a measurement has directions of shape {direction.shape}; expected one direction each."
        )
    return direction


def _branch_index(waves: PlaneWaves, branch: str | int) -> np.ndarray:
    if isinstance(branch, str):
        return waves.branch(branch)
    if branch not in (0, 1, 2):
        raise ValueError(f"branch {branch} is not known; expected 0 (fast), 1, 2 (slow) or a name.")
    return np.full(waves.phase_velocity.shape[:-1], branch)


def constants_reached(
    tensor: StiffnessTensor, measurements: Sequence[Measurement], tolerance: float = 1e-6
) -> Reach:
    """Which independent constants, or combinations of them, a set of velocities fixes.

    The answer is local: it holds for small changes around the tensor given. A constant that enters only in
    second order (c14 near zero, say) counts as not reached there.

    Parameters
    ----------
    tensor : StiffnessTensor
        A single tensor near the truth; the constants are those of its symmetry.
    measurements : sequence of (direction, branch)
        See `measured_derivatives`.
    tolerance : float
        Singular values below this fraction of the largest count as zero.

    Returns
    -------
    Reach

    Raises
    ------
    ValueError
        If the tensor is a batch, there are no measurements, or a direction or branch is wrong.

    Examples
    --------
    >>> silicon = StiffnessTensor.cubic(c11=165.78, c12=63.94, c44=79.62)
    >>> print(constants_reached(silicon, [("100", "longitudinal"), ("110", "longitudinal")]))
    c11 is reached.
    c12 and c44 are reached only as c12 + 2 c44.
    """
    if tensor.batch_shape:
        raise ValueError(f"expected one tensor; it was given a batch of shape {tensor.batch_shape}.")
    velocities, derivatives = measured_derivatives(tensor, 1.0, measurements)
    scale = np.sqrt(np.mean(tensor.vector**2))
    _, singular, rows = np.linalg.svd(scale * derivatives / velocities[:, None])
    rank = int(np.sum(singular > tolerance * singular[0]))
    names = tensor.constant_names
    singular = np.concatenate([singular, np.zeros(len(names))])[: len(names)]
    combinations = _echelon(rows[:rank], tolerance)
    sentences = _sentences(names, combinations, _described(measurements))
    return Reach(names, singular, combinations, rows[rank:], sentences)


def _echelon(rows: FloatArray, tolerance: float) -> FloatArray:
    """Reduced row echelon form: each row's first entry is 1 and the only one in its column."""
    matrix, done = rows.copy(), 0
    for column in range(matrix.shape[1]):
        if done == len(matrix):
            break
        pivot = done + int(np.argmax(np.abs(matrix[done:, column])))
        if abs(matrix[pivot, column]) <= tolerance:
            continue
        matrix[[done, pivot]] = matrix[[pivot, done]]
        matrix[done] /= matrix[done, column]
        others = np.arange(len(matrix)) != done
        matrix[others] -= np.outer(matrix[others, column], matrix[done])
        done += 1
    matrix[np.abs(matrix) <= tolerance] = 0.0
    return matrix


def _sentences(names: tuple[str, ...], combinations: FloatArray, by: str) -> tuple[str, ...]:
    entries = combinations != 0.0
    alone = entries[entries.sum(axis=1) == 1].any(axis=0)
    absent = ~entries.any(axis=0)
    sentences = []
    if alone.any():
        sentences.append(f"{_listed(names, alone)} {_verb(alone)} reached.")
    for group in _groups(entries[entries.sum(axis=1) > 1]):
        mixed = [
            _combination(names, row) for row in combinations if row[group].any() and np.sum(row != 0.0) > 1
        ]
        sentences.append(f"{_listed(names, group)} are reached only as {_joined(mixed)}.")
    if absent.any():
        sentences.append(f"{_listed(names, absent)} {_verb(absent)} not reached by {by}.")
    return tuple(sentences)


def _groups(entries: np.ndarray) -> list[np.ndarray]:
    """Merge rows that share a constant: each group's constants are mixed with one another only."""
    groups: list[np.ndarray] = []
    for row in entries:
        touching = [group for group in groups if (group & row).any()]
        groups = [group for group in groups if not (group & row).any()]
        groups.append(np.logical_or.reduce([row, *touching]))
    return groups


def _combination(names: tuple[str, ...], row: FloatArray) -> str:
    return linear_combination([(float(value), name) for value, name in zip(row, names, strict=True) if value])


def _listed(names: tuple[str, ...], mask: np.ndarray) -> str:
    return _joined([name for name, chosen in zip(names, mask, strict=True) if chosen])


def _joined(items: list[str]) -> str:
    return items[0] if len(items) == 1 else f"{', '.join(items[:-1])} and {items[-1]}"


def _verb(mask: np.ndarray) -> str:
    return "is" if mask.sum() == 1 else "are"


def _described(measurements: Sequence[Measurement]) -> str:
    branches = list(dict.fromkeys(branch for _, branch in measurements))
    directions = list(dict.fromkeys(_direction_text(orientation) for orientation, _ in measurements))
    if len(branches) > 1 or len(directions) > 4:
        return f"any of the {len(measurements)} velocities"
    wave = branches[0] if isinstance(branches[0], str) else f"branch {branches[0]}"
    return f"{wave} waves along {_joined(directions)}"


def _direction_text(orientation: str | ArrayLike) -> str:
    if isinstance(orientation, str):
        name = orientation.strip().strip("[]()<>{}")
        return f"[{name}]" if any(character.isdigit() for character in name) else name
    return "[" + " ".join(f"{component:.4g}" for component in np.asarray(orientation, dtype=float)) + "]"
