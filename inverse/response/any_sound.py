"""Sound with one component or three, whichever a stack needs.

One component serves every stack whose layers are isotropic or cut along symmetry directions; it costs a fraction
of three.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from inverse.response.detection import Detected, medium_response
from inverse.response.heat import HeatField
from inverse.response.light import Absorption
from inverse.response.media import Sample
from inverse.response.port import Port
from inverse.response.solids import interface_compliance
from inverse.response.sound import SoundField, sound_field
from inverse.response.three_detection import three_response
from inverse.response.three_sound import ThreeSound, three_sound_field

__all__ = ["any_response", "any_sound"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


def any_sound(
    sample: Sample,
    profiles: Sequence[Absorption],
    heat: Sequence[HeatField],
    s: Complex,
    powers: Callable[[Array], Complex],
    source: Complex,
) -> Sequence[SoundField | ThreeSound]:
    """Solve for the displacement of every medium; see `sound_field` and `three_sound_field`."""
    if sample.solids is None:
        return sound_field(
            sample.media,
            sample.compliance,
            sample.ambient,
            profiles,
            heat,
            s,
            powers,
            sample.imperfections,
            source,
            sample.surface_roughness,
        )
    joints = [
        interface_compliance(normal, tangential)
        for normal, tangential in zip(sample.compliance, sample.tangential, strict=True)
    ]
    return three_sound_field(
        sample.media, sample.solids, joints, sample.ambient, profiles, heat, s, powers, source
    )


def any_response(
    port: Port,
    medium: int,
    thickness: Array,
    profile: Absorption,
    heat: HeatField,
    sound: SoundField | ThreeSound,
) -> Detected:
    """Return the response of one medium; see `medium_response` and `three_response`."""
    if isinstance(sound, ThreeSound):
        return three_response(port, medium, thickness, profile, heat, sound)
    return medium_response(port, medium, thickness, profile, heat, sound)
