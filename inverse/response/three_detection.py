"""What the probe sees of three displacement components at normal incidence.

Strain along the depth and the displacement of boundaries act as in `detection`: they are sums over the waves of a
medium. Shear in a plane that contains the depth, ``gamma_iz = u_i'`` (i = x, y), changes the index for a stated
polarisation by ``dn/dgamma_iz``, from the photoelastic tensor: for light polarised along x,
``dn = -(n^3 / 2) (p_13 eta_zz + p_15 gamma_xz + p_14 gamma_yz)`` along the sample's axes.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from inverse.response.detection import Detected, medium_response
from inverse.response.heat import HeatField
from inverse.response.light import Absorption, LightField
from inverse.response.three_sound import ThreeSound

__all__ = ["shear_response", "three_response"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


def three_response(
    light: LightField, medium: int, thickness: Array, profile: Absorption, heat: HeatField, sound: ThreeSound
) -> Detected:
    """Return the response of one medium to strain along the depth and to temperature.

    Parameters
    ----------
    light, medium, thickness, profile, heat
        As in `inverse.response.detection.medium_response`.
    sound : ThreeSound
    """
    parts = _by_wave(light, medium, thickness, profile, heat, sound)
    return Detected(_summed(parts, sound, 2), parts[0].heat)


def shear_response(
    light: LightField,
    medium: int,
    thickness: Array,
    profile: Absorption,
    heat: HeatField,
    sound: ThreeSound,
    axis: int,
) -> Complex:
    """Return the response of one medium to the shear ``u_x'`` or ``u_y'`` per unit dn/dgamma.

    Parameters
    ----------
    light, medium, thickness, profile, heat, sound
        As in `three_response`.
    axis : int
        0 for x, 1 for y.

    Returns
    -------
    complex array, shape (sets, 2, frequencies)
        Of the real and the imaginary part in time, as `Detected.strain`.
    """
    return _summed(_by_wave(light, medium, thickness, profile, heat, sound), sound, axis)


def _by_wave(
    light: LightField, medium: int, thickness: Array, profile: Absorption, heat: HeatField, sound: ThreeSound
) -> list[Detected]:
    return [medium_response(light, medium, thickness, profile, heat, mode) for mode in sound.modes]


def _summed(parts: list[Detected], sound: ThreeSound, axis: int) -> Complex:
    (a, b, c), (first, second, third) = sound.component(axis), (part.strain for part in parts)
    return np.asarray(a[..., None] * first + b[..., None] * second + c[..., None] * third)
