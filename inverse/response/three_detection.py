"""What the probe sees of three displacement components at normal incidence.

Strain along the depth and the displacement of boundaries act as in `detection`: they are sums over the waves of a
medium. Shear in a plane that contains the depth, ``gamma_iz = u_i'`` (i = x, y), changes the index for a stated
polarisation by the photoelastic tensor: for light polarised along x,
``dn = -(n^3 / 2) (p_13 u_z' + p_15 u_x' + p_14 u_y')`` along the sample's axes. What enters here are the ratios to the
coefficient of u_z', which are real in a transparent medium and a stated choice in others.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from inverse.response.detection import Detected, medium_response
from inverse.response.heat import HeatField
from inverse.response.light import Absorption
from inverse.response.port import Port
from inverse.response.three_sound import ThreeSound

__all__ = ["three_response"]

Array = NDArray[np.float64]


def three_response(
    port: Port, medium: int, thickness: Array, profile: Absorption, heat: HeatField, sound: ThreeSound
) -> Detected:
    """Return the response of one medium to strain, shear included, and to temperature.

    Parameters
    ----------
    port, medium, thickness, profile, heat
        As in `inverse.response.detection.medium_response`.
    sound : ThreeSound
        Its `photoelastic` weighs the components of strain.
    """
    parts = [medium_response(port, medium, thickness, profile, heat, mode) for mode in sound.modes]
    strain = sum(w[..., None] * part.strain for w, part in zip(sound.seen(), parts, strict=True))
    return Detected(np.asarray(strain), parts[0].heat, parts[0].pairs)
