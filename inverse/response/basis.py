"""Basis functions of a trace: it is linear in fluence x P, x Q, x N where there are carriers, and in the fluence."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from inverse.description.pumpprobe import Beam
from inverse.response.any_sound import any_response, any_sound
from inverse.response.detection import Detected, ambient_response
from inverse.response.heat import HeatField, heat_field
from inverse.response.inverse_laplace import LaplaceGrid, TimeGrid, powers, to_delays
from inverse.response.light import absorption, light_field
from inverse.response.media import Sample
from inverse.response.port import Port, reflection, transmission
from inverse.response.sound import SoundField
from inverse.response.three_sound import ThreeSound
from inverse.response.windows import Windows, rings_on, subset

__all__ = [
    "CHANNELS",
    "PORTS",
    "Beams",
    "Columns",
    "arrival",
    "basis",
    "columns",
    "displaced",
    "fields",
    "spectra",
    "take",
]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

Beams = tuple[Beam | float, Beam | float]

CHANNELS = ("reflectance_change", "optical_phase", "transmission_change", "beam_deflection")

# The GNU C library maps every large block anew, and clears it, until one as large has been freed once. This one
# is never touched, so it costs microseconds; it halves the time of a likelihood. Elsewhere it does nothing.
np.empty(3 << 20)


PORTS = {
    "reflectance_change": "reflection",
    "optical_phase": "reflection",
    "transmission_change": "transmission",
    "beam_deflection": "reflection",
}
"""The light in which each channel is measured."""


@dataclass(frozen=True)
class Columns:
    """What each basis function belongs to.

    Attributes
    ----------
    groups : tuple of str
        Key of each optical group (a material), in order of first appearance from the top.
    of_medium : tuple of int
        Group of each medium, top to bottom; the liquid above, if any, first.
    names : tuple of str
        Per basis function: ``P.real``, ``P.imag``, ``Q.real``, ``Q.imag`` per group, ``N.real``, ``N.imag`` per
        group with carriers, then displacement.
    pairs : mapping
        Group with carriers -> its first function.
    """

    groups: tuple[str, ...]
    of_medium: tuple[int, ...]
    names: tuple[str, ...]
    pairs: Mapping[int, int] = field(default_factory=dict)


def columns(groups: Sequence[str], dark: Sequence[str] = ()) -> Columns:
    """Lay out the basis functions for media that carry these group keys, top to bottom; `dark` ones have carriers."""
    order = tuple(dict.fromkeys(groups))
    names = [f"{g}.{c}" for g in order for c in ("P.real", "P.imag", "Q.real", "Q.imag")]
    pairs = {}
    for g in dict.fromkeys(dark):
        pairs[order.index(g)] = len(names)
        names += [f"{g}.N.real", f"{g}.N.imag"]
    return Columns(order, tuple(order.index(g) for g in groups), (*names, "displacement"), pairs)


@dataclass(frozen=True)
class Fields:
    """Everything the pump sets in motion, and what a port detects of it."""

    heat: list[HeatField]
    sound: Sequence[SoundField | ThreeSound]
    detected: list[Detected]
    steps: Sequence[Complex]


def fields(
    sample: Sample,
    beams: Beams,
    grid: LaplaceGrid,
    time_zero: Array | None = None,
    port: str = "reflection",
) -> Fields:
    """Solve light, heat and sound and detect them medium by medium.

    Parameters
    ----------
    sample : Sample
        A batch of stacks.
    beams : tuple of Beam or float
        Pump and probe; a vacuum wavelength in nm stands for normal incidence.
    grid : LaplaceGrid
    time_zero : array, shape (sets or 1, 1), optional
        ps. Without it the stack is heated in an instant at the origin, and `arrival` is still to be applied.
    port : {"reflection", "transmission"}
        Which light is detected.
    """
    media = sample.media
    pump = light_field(*sample.light("pump"), beams[0], sample.ambient.n_pump)
    seen = _port(sample, beams[1], port)
    profiles = [absorption(pump, j) for j in range(len(media))]
    source = np.ones((1, 1), dtype=complex) if time_zero is None else arrival(grid, time_zero)
    heat, liquid = heat_field(media, sample.resistance, sample.ambient, profiles, grid.s, source)
    sound = any_sound(sample, profiles, heat, grid.s, lambda t: powers(grid, t), source)
    detected = [
        any_response(seen, j, m.thickness, *trio)
        for j, (m, trio) in enumerate(zip(media, zip(profiles, heat, sound, strict=True), strict=True))
    ]
    if liquid is not None:
        detected.insert(0, ambient_response(seen, sample.ambient, grid.s, sound[0].u_top, liquid))
    return Fields(heat, sound, detected, seen.steps)


def _port(sample: Sample, beam: Beam | float, port: str) -> Port:
    index, thickness = sample.light("probe")
    light = light_field(index, thickness, beam, sample.ambient.n_probe)
    return reflection(light) if port == "reflection" else transmission(light, thickness)


def arrival(grid: LaplaceGrid, time_zero: Array) -> Complex:
    """Return what the pulse and its time of arrival make of the response to an impulse, (sets, frequencies)."""
    return grid.pulse * powers(grid, time_zero - grid.origin)


def displaced(found: Fields) -> tuple[list[Complex], list[Complex]]:
    """Return the real and imaginary part of the boundaries' contribution, one term each, top to bottom."""
    u = [found.sound[0].u_top]
    for above, below in zip(found.sound, found.sound[1:], strict=False):
        u.append((above.u_bottom + below.u_top) / 2)
    if len(u) < len(found.steps):
        u.append(found.sound[-1].u_bottom)
    real = [step.real * uj for step, uj in zip(found.steps, u, strict=True)]
    imag = [step.imag * uj for step, uj in zip(found.steps, u, strict=True)]
    return real, imag


def basis(
    sample: Sample,
    beams: Beams,
    grid: TimeGrid | Windows,
    time_zero: Array,
    layout: Columns,
    sets: int,
    port: str = "reflection",
) -> Array:
    """Return real and imaginary parts of every complex response of a port at the delays.

    Returns
    -------
    array, shape (sets, functions + 1, delays)
        Per group Re and Im of d(delta r / r)/dP, Re and Im of d(delta r / r)/dQ; per group with carriers those of
        d(delta r / r)/dN; then Re and Im of the displacement's, all for an incident fluence of 1 J/m2.
    """
    if isinstance(grid, Windows):
        return _in_two_windows(sample, beams, grid, time_zero, layout, sets, port)
    found = spectra(sample, beams, grid, layout, sets, port)
    return to_delays(grid, found, arrival(grid, time_zero))


def _in_two_windows(
    sample: Sample, beams: Beams, grid: Windows, time_zero: Array, layout: Columns, sets: int, port: str
) -> Array:
    found, arrived = spectra(sample, beams, grid.near, layout, sets, port), arrival(grid.near, time_zero)
    out = np.empty((sets, found.shape[1], grid.delay.size))
    out[..., grid.early] = to_delays(grid.near, found, arrived)
    loud = rings_on(grid, sample, found, arrived, len(layout.groups))
    for chosen, part, delays in (
        (~loud, grid.far, ~grid.early),
        (loud, grid.whole, np.full_like(grid.early, True)),
    ):
        if chosen.any():
            some, zero = subset((sample, time_zero), chosen)
            out[np.ix_(chosen, np.full(found.shape[1], True), delays)] = basis(
                some, beams, part, zero, layout, int(chosen.sum()), port
            )
    return out


def spectra(
    sample: Sample, beams: Beams, grid: LaplaceGrid, layout: Columns, sets: int, port: str = "reflection"
) -> Complex:
    """Return the transforms of `basis`, heated in an instant at the origin, (sets, functions, frequencies)."""
    found = fields(sample, beams, grid, port=port)
    out = np.empty((sets, len(layout.names) + 1, grid.s.shape[1]), dtype=complex)
    out[:, 4 * len(layout.groups) :] = 0
    for j, (part, group) in enumerate(zip(found.detected, layout.of_medium, strict=True)):
        rows = out[:, 4 * group : 4 * group + 4]
        if group in layout.of_medium[:j]:
            rows[:, :2] += part.strain
            rows[:, 2:] += part.heat
        else:
            rows[:, :2], rows[:, 2:] = part.strain, part.heat
        if part.pairs is not None and group in layout.pairs:
            out[:, layout.pairs[group] : layout.pairs[group] + 2] += part.pairs
    for real, imag in zip(*displaced(found), strict=True):
        out[:, -2] += real
        out[:, -1] += imag
    return out


def take(parts: Array, channel: str) -> Array:
    """Turn real and imaginary parts into the columns of a channel, one per name in `Columns`.

    Reflectance change 2 Re(delta r / r): ``[2 Re h, -2 Im h]`` for the real and imaginary part of a coefficient,
    ``2 Re h`` for the displacement; transmission change likewise, from its own port. Optical phase
    Im(delta r / r): ``[Im h, Re h]`` and ``Im h``; beam deflection likewise, per rad of phase (`PumpProbe.deflection`).
    """
    out = np.empty((parts.shape[0], parts.shape[1] - 1, parts.shape[2]))
    real, imag = parts[:, 0:-2:2], parts[:, 1:-2:2]
    if channel in ("reflectance_change", "transmission_change"):
        out[:, 0:-1:2], out[:, 1:-1:2], out[:, -1] = 2 * real, -2 * imag, 2 * parts[:, -2]
    else:
        out[:, 0:-1:2], out[:, 1:-1:2], out[:, -1] = imag, real, parts[:, -1]
    return out
