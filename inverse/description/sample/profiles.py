"""Layers with a profile of their own."""

from __future__ import annotations

from typing import Any

from inverse.description.material.properties import Material
from inverse.description.sample.parts import Layer

__all__ = ["stressed"]


def stressed(material: str | Material, thickness: float, stress: Any, **fields: Any) -> tuple[Layer, ...]:
    """Cut a layer into slices with a given initial stress each.

    Parameters
    ----------
    material : str or Material
        As for `Layer`.
    thickness : float
        Of the whole, nm.
    stress : array, shape (slices,)
        GPa per J/m2 of incident fluence from the top down, positive where it expands the medium.
    **fields
        As for `Layer`.

    Returns
    -------
    tuple of Layer
        Welded slices of equal thickness, to be put into a `Stack` with ``*``.

    Raises
    ------
    ValueError
        If a stress or the slices' thickness is out of range.
    """
    values = [float(value) for value in stress]
    depth = thickness / max(len(values), 1)
    return tuple(Layer(material, thickness=depth, initial_stress=value, **fields) for value in values)
