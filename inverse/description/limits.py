"""Where the one-dimensional picture ends: diffraction of sound, sideways heat, spots near the optical limit.

A beam of sound of radius w and wavelength L keeps its plane fronts over the distance ``pi w^2 / L``; its amplitude on
the axis falls as ``1 / sqrt(1 + D^2)``, ``D = z L / (pi w^2)``, and its phase runs ahead by arctan D. A focused beam of
light of radius w has rays within ``lambda / (pi w)`` of its axis. Heat spreads sideways by ``sqrt(4 D t)``.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np

from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.places import bind
from inverse.description.sample.stack import Stack

__all__ = [
    "DIFFRACTION",
    "DIVERGENCE",
    "SPREADING",
    "PlaneWave",
    "PlaneWaveWarning",
    "plane_wave",
    "warn_if_not_plane",
]

DIFFRACTION = 0.1
"""D above which sound is no plane wave any more: half a per cent of amplitude, 6 degrees of phase."""

DIVERGENCE = 0.2
"""Divergence of the light in rad above which it is no plane wave: two per cent in the cosine of its edge."""

SPREADING = 0.3
"""Sideways spreading of the heat over the spot's radius above which it is no plane wave: the temperature of a Gaussian
spot on a half-space has fallen by ``1 / (1 + 2 (0.3)^2)``, 15 per cent, below that of a plane source."""


class PlaneWaveWarning(UserWarning):
    """The measurement leaves the one-dimensional picture of the model."""


@dataclass(frozen=True)
class PlaneWave:
    """How near a measurement comes to the limits of the one-dimensional picture.

    Attributes
    ----------
    wavelength : float
        Of the bulk of the sound, nm: ``2 pi max(v rms, absorption length)`` in the uppermost medium that absorbs.
    distance : float
        That sound travels up to the last delay, nm.
    diffraction : float
        ``distance x wavelength / (pi w^2)``, w the smaller spot.
    divergence : float
        ``lambda / (pi w)`` of the beam that is focused hardest, rad.
    spreading : float
        ``sqrt(4 D t) / w`` at the last delay, D the largest diffusivity.
    """

    wavelength: float
    distance: float
    diffraction: float
    divergence: float
    spreading: float

    @property
    def warnings(self) -> tuple[str, ...]:
        """What goes beyond the limits, in words."""
        said = (
            (
                self.diffraction > DIFFRACTION,
                f"sound of {self.wavelength:.3g} nm diffracts on its {self.distance:.3g} nm "
                f"(D = {self.diffraction:.2g}, limit {DIFFRACTION:g}): late echoes are weaker and earlier than in "
                "the model; widen the spot or cut the trace",
            ),
            (
                self.divergence > DIVERGENCE,
                f"a spot near the optical limit spreads its light over {self.divergence:.2g} rad "
                f"(limit {DIVERGENCE:g}): Brillouin frequencies and absorption differ from those of a plane wave; "
                "widen the spot",
            ),
            (
                self.spreading > SPREADING,
                f"heat spreads sideways by {self.spreading:.2g} spot radii up to the last delay "
                f"(limit {SPREADING:g}): the slow background falls faster than in the model; widen the spot or cut "
                "the trace",
            ),
        )
        return tuple(text for beyond, text in said if beyond)


def plane_wave(stack: Stack, setup: PumpProbe, last_delay: float) -> PlaneWave | None:
    """Compare a measurement with the limits of the one-dimensional picture.

    Parameters
    ----------
    stack : Stack
        Unknowns count with their medians.
    setup : PumpProbe
        With ``spot_radius``; without it there is nothing to compare and the answer is None.
    last_delay : float
        ps.

    Returns
    -------
    PlaneWave or None

    Raises
    ------
    ValueError
        If a constant is missing.
    """
    if setup.spot_radius is None:
        return None
    bound = bind(stack, setup)
    medians = {name: np.array(float(prior.median())) for name, prior in bound.priors.items()}
    media = [bound.fill(slots, medians) for slots in bound.media if "velocity" in slots]
    pump, probe = (1e3 * (r or setup.spot_radius) for r in (setup.spot_radius, setup.probe_spot_radius))
    spot, late = min(pump, probe), max(last_delay, 0.0)
    opaque = next((m for m in media if m["n_imag_pump"] > 0), media[-1])
    depth = setup.pump / (4 * np.pi * max(float(opaque["n_imag_pump"]), 1e-12))
    thickness = float(opaque.get("thickness", np.inf))
    length = 2 * np.pi * max(float(opaque["velocity"]) * setup.pulse_rms, min(depth, thickness))
    distance = late * max(float(m["velocity"]) for m in media)
    # 1 W/m/K over 1 J/cm3/K is 1 nm2/ps.
    diffusivity = max(float(m["conductivity"]) / float(m["heat_capacity"]) for m in media)
    return PlaneWave(
        wavelength=float(length),
        distance=float(distance),
        diffraction=float(distance * length / (np.pi * spot**2)),
        divergence=float(max(setup.pump / pump, setup.probe / probe) / np.pi),
        spreading=float(np.sqrt(4 * diffusivity * late) / spot),
    )


def warn_if_not_plane(stack: Stack, setup: PumpProbe, last_delay: float) -> None:
    """Warn of every limit of the one-dimensional picture that a measurement exceeds; see `plane_wave`."""
    found = plane_wave(stack, setup, last_delay)
    for text in found.warnings if found else ():
        warnings.warn(f"The model is one-dimensional, but {text}.", PlaneWaveWarning, stacklevel=3)
