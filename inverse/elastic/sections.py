"""Velocity, slowness and ray curves in a plane through a crystal: the data of the picture."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import permutations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from inverse.elastic.christoffel import PlaneWaves, plane_waves
from inverse.elastic.directions import crystal_direction, rotation_to_z
from inverse.elastic.tensor import StiffnessTensor
from inverse.elastic.voigt import FloatArray

__all__ = ["Section", "plane_section"]

_ORDERS = np.array(list(permutations(range(3))))


@dataclass(frozen=True, eq=False)
class Section:
    """Waves in every direction of one plane, each branch followed by its polarisation through crossings.

    Attributes
    ----------
    angle : ndarray, shape (points,)
        Degrees from `first` towards `second`.
    first, second, normal : ndarray, shape (3,)
        Right-handed unit vectors of the plane, along the crystal's axes.
    phase_velocity : ndarray, shape (points, 3)
        nm/ps, one column per branch, the most longitudinal first, the most nearly in-plane of the others
        next.
    group_velocity : ndarray, shape (points, 3, 3)
        nm/ps: branch, then components along `first`, `second`, `normal`.
    polarisation : ndarray, shape (points, 3, 3)
        Unit displacement: branch, then components along `first`, `second`, `normal`.
    labels : tuple of str
        A name for each branch.
    """

    angle: FloatArray
    first: FloatArray
    second: FloatArray
    normal: FloatArray
    phase_velocity: FloatArray
    group_velocity: FloatArray
    polarisation: FloatArray
    labels: tuple[str, ...]

    @property
    def slowness(self) -> FloatArray:
        """Reciprocal phase velocity, ps/nm, shape (points, 3)."""
        return 1.0 / self.phase_velocity

    def curve(self, quantity: str) -> FloatArray:
        """In-plane curve of each branch, shape (points, 3, 2), along `first` and `second`.

        Parameters
        ----------
        quantity : str
            "slowness" (ps/nm), "phase velocity" or "group velocity" (nm/ps).

        Returns
        -------
        ndarray, shape (points, 3, 2)

        Raises
        ------
        ValueError
            If the quantity is not one of the three.
        """
        if quantity == "group velocity":
            return self.group_velocity[..., :2]
        radii = {"slowness": self.slowness, "phase velocity": self.phase_velocity}
        if quantity not in radii:
            raise ValueError(
                f"quantity {quantity!r} is not known; expected 'slowness', 'phase velocity' or 'group "
                "velocity'."
            )
        theta = np.deg2rad(self.angle)
        unit = np.stack([np.cos(theta), np.sin(theta)], axis=-1)
        return radii[quantity][..., None] * unit[:, None, :]


def plane_section(
    tensor: StiffnessTensor,
    density: float,
    normal: str | ArrayLike,
    start: str | ArrayLike | None = None,
    points: int = 361,
) -> Section:
    """Waves in every direction of the plane with the given normal.

    Parameters
    ----------
    tensor : StiffnessTensor
        A single tensor.
    density : float
        g/cm3.
    normal : str or array_like, shape (3,)
        Normal of the plane, as `crystal_direction` takes it.
    start : str or array_like, shape (3,), optional
        Direction at angle zero (its part in the plane); see `rotation_to_z` for what is taken if left out.
    points : int
        Directions over the full turn, the last equal to the first.

    Returns
    -------
    Section

    Raises
    ------
    ValueError
        If the tensor is a batch, there are fewer than 4 points, or a direction is wrong.
    """
    if tensor.batch_shape or points < 4:
        raise ValueError(
            "a section takes one tensor and 4 points or more; it was given a batch of shape "
            f"{tensor.batch_shape} and "
            f"{points} points."
        )
    across = None if start is None else crystal_direction(start, tensor.symmetry)
    axes = rotation_to_z(crystal_direction(normal, tensor.symmetry), across)
    angle = np.linspace(0.0, 360.0, points)
    theta = np.deg2rad(angle)
    local = np.stack([np.cos(theta), np.sin(theta), np.zeros(points)], axis=-1)
    waves = plane_waves(tensor.rotated(axes), density, local, reference=(0.0, 0.0, 1.0))
    order = _order(waves)
    polarisation = _reordered(waves.polarisation, order)
    return Section(
        angle,
        first=axes[0],
        second=axes[1],
        normal=axes[2],
        phase_velocity=np.take_along_axis(waves.phase_velocity, order, axis=1),
        group_velocity=_reordered(waves.group_velocity, order),
        polarisation=polarisation,
        labels=_labels(polarisation, local),
    )


def _order(waves: PlaneWaves) -> NDArray[np.intp]:
    """Index of the wave of each branch at each point, shape (points, 3)."""
    order = _followed(_turning(waves.polarisation, waves.direction))
    followed = _reordered(waves.polarisation, order)
    longitudinal, out_of_plane = _parts(followed, waves.direction)
    first = int(np.argmax(longitudinal))
    others = sorted({0, 1, 2} - {first}, key=lambda branch: out_of_plane[branch])
    return order[:, [first, *others]]


def _turning(polarisation: FloatArray, direction: FloatArray) -> FloatArray:
    """Components along the direction, across it in the plane, and out of it: they change least on the way."""
    across = np.cross((0.0, 0.0, 1.0), direction)
    out = np.broadcast_to((0.0, 0.0, 1.0), direction.shape)
    return np.einsum("pmi,pai->pma", polarisation, np.stack([direction, across, out], axis=1))


def _followed(polarisation: FloatArray) -> NDArray[np.intp]:
    """Order that keeps each branch's polarisation as continuous as can be from point to point."""
    order = np.empty(polarisation.shape[:2], dtype=np.intp)
    order[0] = np.arange(3)
    for point in range(1, len(order)):
        overlap = (polarisation[point - 1, order[point - 1]] @ polarisation[point].T) ** 2
        order[point] = _ORDERS[np.argmax(overlap[np.arange(3), _ORDERS].sum(axis=1))]
    return order


def _reordered(vectors: FloatArray, order: NDArray[np.intp]) -> FloatArray:
    return np.take_along_axis(vectors, order[..., None], axis=1)


def _parts(polarisation: FloatArray, direction: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Mean longitudinal and mean out-of-plane part of each branch, shapes (3,)."""
    longitudinal = np.einsum("pmi,pi->pm", polarisation, direction) ** 2
    return longitudinal.mean(axis=0), (polarisation[..., 2] ** 2).mean(axis=0)


def _labels(polarisation: FloatArray, direction: FloatArray) -> tuple[str, str, str]:
    longitudinal, out_of_plane = _parts(polarisation, direction)
    prefix = "" if longitudinal[0] > 1.0 - 1e-9 else "quasi-"
    if out_of_plane[2] > 1.0 - 1e-9:
        return f"{prefix}longitudinal", f"{prefix}transverse, in plane", "transverse, out of plane"
    return (
        f"{prefix}longitudinal",
        "quasi-transverse, mostly in plane",
        "quasi-transverse, mostly out of plane",
    )
