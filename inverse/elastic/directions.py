"""Directions in a crystal and rotations that bring them to the depth axis.

Directions are unit vectors along the crystal's Cartesian axes (see `symmetry`). Angles are in degrees.
"""

from __future__ import annotations

import re

import numpy as np
from numpy.typing import ArrayLike

from inverse.elastic.symmetry import constant_names
from inverse.elastic.voigt import FloatArray

__all__ = [
    "crystal_direction",
    "direction_from_c_axis",
    "require_rotation",
    "rotation_about_axis",
    "rotation_from_euler",
    "rotation_to_z",
    "unit_direction",
]

_AXES = {"x": (1.0, 0.0, 0.0), "y": (0.0, 1.0, 0.0), "z": (0.0, 0.0, 1.0)}
_PRINCIPAL = {
    "c": "z",
    "0001": "z",
    "a": "x",
    "11-20": "x",
    "2-1-10": "x",
    "m": "y",
    "10-10": "y",
    "01-10": "y",
}


def unit_direction(direction: ArrayLike) -> FloatArray:
    """Return `direction`, of shape (..., 3), scaled to length one.

    Parameters
    ----------
    direction : array_like, shape (..., 3)
        Any length but zero.

    Returns
    -------
    ndarray, shape (..., 3)
        Unit vectors.

    Raises
    ------
    ValueError
        If the last axis is not three long, a component is not finite, or a vector has zero length.
    """
    vector = np.asarray(direction, dtype=float)
    if vector.ndim == 0 or vector.shape[-1] != 3:
        raise ValueError(
            f"direction has shape {vector.shape}; expected (..., 3), components along the crystal's x, y "
            "and z axes."
        )
    if not np.all(np.isfinite(vector)):
        raise ValueError(
            f"direction has a component that is not finite: {vector[~np.isfinite(vector).all(-1)][0]}."
        )
    largest = np.abs(vector).max(axis=-1, keepdims=True)
    if np.any(largest == 0.0):
        raise ValueError(
            f"direction of zero length {_where(largest[..., 0] == 0.0)}; give three components, not all zero."
        )
    # Scaled first: the square of a component near the end of the floating-point range is not finite.
    scaled = vector / largest
    return np.asarray(scaled / np.linalg.norm(scaled, axis=-1, keepdims=True), dtype=float)


def _where(mask: FloatArray) -> str:
    return f"at index {tuple(int(i) for i in np.argwhere(mask)[0])}" if np.ndim(mask) else "(0, 0, 0)"


def crystal_direction(orientation: str | ArrayLike, symmetry: str) -> FloatArray:
    """Return the unit vector of a crystal direction given by name, Miller indices or components.

    Parameters
    ----------
    orientation : str or array_like of shape (..., 3)
        "x", "y" or "z"; Miller indices such as "110", "1-10" or "[1 1 -2]" for cubic crystals (where the
        direction [hkl] and the normal of the plane (hkl) are one), and along the axes "100", "010", "001" for
        tetragonal and orthorhombic ones; "c" or "0001", "a" or "11-20", "m" or "10-10" for hexagonal and
        trigonal ones. Numbers are components along the crystal's Cartesian axes, whatever the symmetry.
    symmetry : str
        A key of `SYMMETRIES`.

    Returns
    -------
    ndarray, shape (..., 3)
        Unit vectors.

    Raises
    ------
    ValueError
        If the name means nothing in this symmetry or needs lattice parameters, or the length is zero.

    Examples
    --------
    >>> crystal_direction("001", "cubic")
    array([0., 0., 1.])
    >>> crystal_direction("a", "trigonal_6")
    array([1., 0., 0.])
    """
    constant_names(symmetry)
    if not isinstance(orientation, str):
        return unit_direction(orientation)
    name = orientation.strip().strip("[]()<>{}").strip()
    if name in _AXES:
        return np.array(_AXES[name])
    if symmetry == "hexagonal" or symmetry.startswith("trigonal"):
        return _principal_direction(name, symmetry)
    return _miller_direction(name, symmetry)


def _principal_direction(name: str, symmetry: str) -> FloatArray:
    key = re.sub(r"[\s,]", "", name)
    if key not in _PRINCIPAL:
        raise ValueError(
            f"orientation {name!r} is not known for a {symmetry} crystal; expected x, y, z or one of "
            f"{', '.join(_PRINCIPAL)}. For another cut use direction_from_c_axis(polar, azimuth) or three "
            "components."
        )
    return np.array(_AXES[_PRINCIPAL[key]])


def _miller_direction(name: str, symmetry: str) -> FloatArray:
    parts = re.split(r"[\s,]+", name) if re.search(r"[\s,]", name) else re.findall(r"-?\d", name)
    if (
        not re.fullmatch(r"[\d\s,-]+", name)
        or len(parts) != 3
        or not all(re.fullmatch(r"-?\d+", p) for p in parts)
    ):
        raise ValueError(
            f"orientation {name!r} is not known for a {symmetry} crystal; expected x, y, z, three Miller "
            "indices such as "
            "'110', '1-10' or '1 1 -2', or three components."
        )
    indices = np.array([float(part) for part in parts])
    along_axis = np.count_nonzero(indices) == 1 and symmetry in (
        "tetragonal_6",
        "tetragonal_7",
        "orthorhombic",
    )
    if np.any(indices) and not along_axis and symmetry not in ("cubic", "isotropic"):
        raise ValueError(
            f"orientation {name!r} of a {symmetry} crystal depends on its lattice parameters, which a "
            "stiffness tensor does "
            "not hold; give three components along the crystal's Cartesian axes."
        )
    return unit_direction(indices)


def direction_from_c_axis(polar: ArrayLike, azimuth: ArrayLike = 0.0) -> FloatArray:
    """Return the unit vector at an angle from the c axis (z).

    Parameters
    ----------
    polar : array_like
        Angle from z in degrees.
    azimuth : array_like
        Angle of the projection on the basal plane from x (the a axis) towards y, in degrees.

    Returns
    -------
    ndarray, shape (..., 3)
        (sin polar cos azimuth, sin polar sin azimuth, cos polar).
    """
    theta, phi = np.broadcast_arrays(np.deg2rad(polar), np.deg2rad(azimuth))
    return np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=-1)


def rotation_about_axis(axis: ArrayLike, angle: ArrayLike) -> FloatArray:
    """Rotation matrix that turns vectors right-handedly about an axis (Rodrigues' formula).

    Parameters
    ----------
    axis : array_like, shape (..., 3)
        Any length but zero.
    angle : array_like
        Degrees; broadcasts against the axis.

    Returns
    -------
    ndarray, shape (..., 3, 3)
        R = cos a I + sin a [axis x] + (1 - cos a) axis axis.

    Raises
    ------
    ValueError
        If an axis has zero length.
    """
    unit = unit_direction(axis)
    theta = np.deg2rad(angle)[..., None, None] if np.ndim(angle) else np.deg2rad(angle)
    cross = np.cross(np.eye(3), unit[..., None, :])
    outer = unit[..., :, None] * unit[..., None, :]
    return np.asarray(
        np.cos(theta) * np.eye(3) + np.sin(theta) * cross + (1.0 - np.cos(theta)) * outer, dtype=float
    )


def rotation_from_euler(phi1: ArrayLike, polar: ArrayLike, phi2: ArrayLike) -> FloatArray:
    """Rotation matrix from Euler angles about z, then the new x, then the new z.

    Parameters
    ----------
    phi1, polar, phi2 : array_like
        Degrees; shapes that broadcast.

    Returns
    -------
    ndarray, shape (..., 3, 3)
        Rz(phi1) Rx(polar) Rz(phi2): it takes components along the crystal's axes to components along the
        sample's, for a crystal turned from the sample's axes by phi1 about z, `polar` about its own x and
        phi2 about its own z.
    """
    first, second, third = np.broadcast_arrays(phi1, polar, phi2)
    x, z = _AXES["x"], _AXES["z"]
    return rotation_about_axis(z, first) @ rotation_about_axis(x, second) @ rotation_about_axis(z, third)


def rotation_to_z(direction: ArrayLike, in_plane: ArrayLike | None = None) -> FloatArray:
    """Rotation matrix after which a crystal direction lies along z.

    Parameters
    ----------
    direction : array_like, shape (..., 3)
        Crystal direction that becomes z.
    in_plane : array_like, shape (..., 3), optional
        Crystal direction whose part perpendicular to `direction` becomes x. Left out, it is the crystal axis
        farthest from `direction`, x before y before z where they are equally far.

    Returns
    -------
    ndarray, shape (..., 3, 3)
        Rows are the new x, y, z axes in the crystal's components.

    Raises
    ------
    ValueError
        If a direction has zero length or `in_plane` is parallel to `direction`.
    """
    depth = unit_direction(direction)
    reference = _farthest_axis(depth) if in_plane is None else unit_direction(in_plane)
    across = reference - np.sum(reference * depth, axis=-1, keepdims=True) * depth
    if np.any(np.linalg.norm(across, axis=-1) < 1e-8):
        raise ValueError(
            f"in_plane {np.asarray(in_plane)} is parallel to the direction {np.asarray(direction)} that "
            "becomes z; "
            "give a direction that is not, or leave it out."
        )
    first = unit_direction(across)
    depth, first = np.broadcast_arrays(depth, first)
    return np.stack([first, np.cross(depth, first), depth], axis=-2)


def _farthest_axis(depth: FloatArray) -> FloatArray:
    # Rounded: [111] must not choose its axis by the last bit.
    return np.eye(3)[np.argmin(np.round(np.abs(depth), 9), axis=-1)]


def require_rotation(rotation: ArrayLike) -> FloatArray:
    """Return `rotation` as an array of shape (..., 3, 3), or raise ValueError if it is not orthogonal."""
    matrix = np.asarray(rotation, dtype=float)
    if matrix.ndim < 2 or matrix.shape[-2:] != (3, 3):
        raise ValueError(f"rotation has shape {matrix.shape}; expected (..., 3, 3).")
    error = np.abs(matrix @ np.swapaxes(matrix, -1, -2) - np.eye(3)).max(initial=0.0)
    if not error < 1e-8:
        raise ValueError(
            f"rotation is not orthogonal: R R^T differs from the identity by {error:.3g}; expected less "
            "than 1e-8. "
            "Build it with rotation_about_axis, rotation_from_euler or rotation_to_z."
        )
    return matrix
