"""What the probe sees: first-order change of the reflection coefficient, split into basis functions.

``delta r / r = sum over media of weight * integral (P eta + Q T) E^2 dz
+ sum over boundaries of step * u``, with ``weight = i k n / (n_0 r)`` and
``step = i k (eps_above - eps_below) E^2 / (2 n_0 r)``.
A quantity h with complex optical factors has a real and an imaginary part in time. Their transforms are
``(H + H*) / 2`` and ``(H - H*) / 2i``, H* being H with every optical factor conjugated.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.response.heat import HeatField
from inverse.response.light import Absorption, LightField
from inverse.response.media import Ambient
from inverse.response.sound import SoundField

__all__ = ["Detected", "ambient_response", "boundary_steps", "medium_response"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class Detected:
    """Transforms of the real and imaginary part of d(delta r / r)/dP and d(delta r / r)/dQ of one medium."""

    strain_real: Complex
    strain_imag: Complex
    heat_real: Complex
    heat_imag: Complex


@dataclass(frozen=True)
class _Probe:
    """E^2 of one medium: ``forth exp(g z) + back exp(g (d - z)) + still``, weight included; g = 2 i k n."""

    g: Complex
    decay: Complex
    forth: Complex
    back: Complex
    still: Complex
    thickness: Array

    def conjugate(self) -> _Probe:
        return _Probe(
            *(np.conj(v) for v in (self.g, self.decay, self.forth, self.back, self.still)), thickness=self.thickness
        )


def medium_response(
    light: LightField, medium: int, thickness: Array, profile: Absorption, heat: HeatField, sound: SoundField
) -> Detected:
    """Return the response of one medium to strain and temperature.

    Parameters
    ----------
    light : LightField
        Of the probe.
    medium : int
        Index of the medium; the last is the half-space.
    thickness : array
        nm; inf for the half-space.
    profile, heat, sound
        The pump's absorbed profile and the fields of the medium.
    """
    probe = _probe(light, medium, thickness)
    first = _integrals(probe, profile, heat, sound)
    second = _integrals(probe.conjugate(), profile, heat, sound)
    return Detected(
        strain_real=(first[0] + second[0]) / 2,
        strain_imag=(first[0] - second[0]) / 2j,
        heat_real=(first[1] + second[1]) / 2,
        heat_imag=(first[1] - second[1]) / 2j,
    )


def boundary_steps(light: LightField) -> list[Complex]:
    """Return the complex factor of the displacement of the surface and of each interface, 1/nm."""
    factor = 1j * light.k / (2 * light.n_ambient * light.r)
    above = light.n_ambient
    steps = []
    for j, n in enumerate(light.n):
        e = light.decay[j] if j < len(light.decay) else np.zeros((1, 1))
        field = light.a[j] + light.b[j] * e
        steps.append(factor * (above**2 - n**2) * field**2)
        above = n
    return steps


def ambient_response(light: LightField, ambient: Ambient, s: Complex, surface_u: Complex, surface_t: Complex) -> Detected:
    """Return the response of a liquid above: strain ``q_0 u(0) exp(q_0 z)``, temperature likewise, z < 0."""
    if ambient.velocity is None or ambient.conductivity is None or ambient.heat_capacity is None:
        raise ValueError("The ambient carries neither sound nor heat; it has no response of its own.")
    q_sound = s / ambient.velocity
    q_heat = np.sqrt(s * ambient.heat_capacity / ambient.conductivity)
    parts = [
        (q_sound * surface_u * _overlap(light, q_sound, conj), surface_t * _overlap(light, q_heat, conj))
        for conj in (False, True)
    ]
    (strain, heat), (strain_c, heat_c) = parts
    return Detected((strain + strain_c) / 2, (strain - strain_c) / 2j, (heat + heat_c) / 2, (heat - heat_c) / 2j)


def _overlap(light: LightField, q: Complex, conjugate: bool) -> Complex:
    """Integral of exp(q z) E^2 over z < 0, weight included."""
    weight = 1j * light.k / light.r
    g, r = 2j * light.k * light.n_ambient, light.r
    if conjugate:
        weight, g, r = np.conj(weight), np.conj(g), np.conj(r)
    return weight * (1 / (q + g) + 2 * r / q + r * r / (q - g))


def _probe(light: LightField, medium: int, thickness: Array) -> _Probe:
    n, a, b = light.n[medium], light.a[medium], light.b[medium]
    weight = 1j * light.k * n / (light.n_ambient * light.r)
    layer = medium < len(light.decay)
    e = light.decay[medium] if layer else np.zeros((1, 1), dtype=complex)
    return _Probe(
        g=2j * light.k * n,
        decay=e * e,
        forth=weight * a * a,
        back=weight * b * b,
        still=weight * 2 * a * b * e if layer else np.zeros((1, 1), dtype=complex),
        thickness=thickness,
    )


def _integrals(probe: _Probe, profile: Absorption, heat: HeatField, sound: SoundField) -> tuple[Complex, Complex]:
    """Integral of (strain, lattice temperature) times E^2."""
    hot_down, hot_up = _diffusing(probe, heat.q, heat.decay)
    ringing_down, ringing_up = _diffusing(probe, sound.q, sound.decay)
    steep, beat = _profile_integrals(probe, profile)
    hot = heat.down * hot_down + heat.up * hot_up
    strain = (
        sound.q * (sound.up * ringing_up - sound.down * ringing_down)
        + sound.hot * hot
        + sound.steep * steep
        + sound.beat * beat
    )
    temperature = heat.lattice * (hot + heat.steep * steep + heat.beat * beat)
    return strain, temperature


def _diffusing(probe: _Probe, q: Complex, x: Complex) -> tuple[Complex, Complex]:
    """Integrals of exp(-q z) E^2 and exp(-q (d - z)) E^2 over the medium; x = exp(-q d)."""
    g, e = probe.g, probe.decay
    along = (1 - x * e) / (q - g)
    if not np.any(probe.back) and not np.any(probe.still):
        if np.all(np.isinf(probe.thickness)):
            return probe.forth * along, np.zeros((1, 1), dtype=complex)
        return probe.forth * along, probe.forth * _difference(e, x, q + g, probe.thickness)
    across = _difference(e, x, q + g, probe.thickness)
    level = (1 - x) / q
    return (
        probe.forth * along + probe.back * across + probe.still * level,
        probe.back * along + probe.forth * across + probe.still * level,
    )


def _difference(e: Complex, x: Complex, rate: Complex, d: Array) -> Complex:
    """(exp(g d) - exp(-q d)) / (q + g), finite where q + g vanishes (the Brillouin resonance)."""
    near = np.abs(rate) * d < 1e-7
    if not np.any(near):
        return (e - x) / rate
    safe = np.where(near, 1.0, rate)
    return np.where(near, d * e, (e - x) / safe)


def _profile_integrals(probe: _Probe, f: Absorption) -> tuple[Complex, Complex]:
    """Integrals of the exponential and the interference part of the absorbed profile times E^2."""
    p = f.p.astype(complex)
    down, up = _diffusing(probe, np.where(p == 0, 1e-12, p), f.decay.astype(complex))
    forth = _wave(probe, 1j * f.x, f.turn)
    back = _wave(probe, -1j * f.x, np.conj(f.turn))
    return f.top * down + f.bottom * up, f.beat * forth + np.conj(f.beat) * back


def _wave(probe: _Probe, ix: Complex, turn: Complex) -> Complex:
    """Integral of exp(i x z) E^2 over a layer; zero in the half-space, where light does not interfere."""
    if not np.any(turn):
        return np.zeros((1, 1), dtype=complex)
    along = _difference(turn * probe.decay, np.ones((1, 1), dtype=complex), ix + probe.g, probe.thickness)
    across = _difference(probe.decay, turn, probe.g - ix, probe.thickness)
    level = (turn - 1) / ix
    return probe.forth * along + probe.back * across + probe.still * level
