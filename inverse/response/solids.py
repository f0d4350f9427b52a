"""What three-component sound needs of solids and bonds, along the sample's axes."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

__all__ = ["DepthElastic", "depth_elastic", "interface_compliance"]

Array = NDArray[np.float64]

# Voigt places of the pairs (1, 3), (2, 3), (3, 3).
_DEPTH = (4, 3, 2)


@dataclass(frozen=True, eq=False)
class DepthElastic:
    """What waves along the depth and their thermal launching need of a medium, along the sample's axes.

    Attributes
    ----------
    stiffness : array, shape (sets or 1, 3, 3)
        c_{i3k3} in GPa, symmetric and positive definite.
    stress : array, shape (sets or 1, 3)
        Thermal stress S_i3 per kelvin at zero strain in GPa/K, tension positive.
    photoelastic : array, shape (sets or 1, 3)
        Index change by u_x', u_y' and u_z' over that by u_z', for the probe's polarisation: the last is 1.
    """

    stiffness: Array
    stress: Array
    photoelastic: Array = field(default_factory=lambda: np.array([[0.0, 0.0, 1.0]]))


def depth_elastic(voigt: Array, stress: Array) -> DepthElastic:
    """Take the depth's part of a stiffness.

    Parameters
    ----------
    voigt : array, shape (sets or 1, 6, 6)
        Voigt matrix along the sample's axes (z the depth), GPa.
    stress : array, shape (sets or 1, 3) or (sets or 1, 6)
        Thermal stress per kelvin, GPa/K: S_13, S_23 and S_33; or the six components of the linear expansion in Voigt
        order (engineering shear), from which ``S = C alpha`` follows.

    Returns
    -------
    DepthElastic
    """
    if stress.shape[-1] == 6:
        stress = (voigt @ stress[..., None])[..., list(_DEPTH), 0]
    return DepthElastic(voigt[..., list(_DEPTH), :][..., list(_DEPTH)], stress)


def interface_compliance(normal: Array, tangential: Array | None = None) -> Array:
    """Put the compliance of an interface into components.

    Parameters
    ----------
    normal, tangential : array, shape (sets or 1, 1)
        nm/GPa; without a tangential one, the normal one holds for all components.

    Returns
    -------
    array, shape (sets or 1, 1, 3)
    """
    tangential = normal if tangential is None else tangential
    return np.stack(np.broadcast_arrays(tangential, tangential, normal), axis=-1)
