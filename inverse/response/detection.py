"""What the probe sees: first-order change of the reflection or transmission coefficient, split into basis functions.

``delta c / c = sum over media of integral (P eta + Q T) w dz + sum over boundaries of step * u``, with the weights w
and steps of `Port`; at normal incidence in reflection ``w = i k n E^2 / (n_0 r)`` and
``step = i k (eps_above - eps_below) E^2 / (2 n_0 r)``.
A quantity h with complex optical factors has a real and an imaginary part in time. Their transforms are
``(H + H*) / 2`` and ``(H - H*) / 2i``, H* being H with every optical factor conjugated.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.response.heat import HeatField
from inverse.response.light import Absorption
from inverse.response.media import Ambient
from inverse.response.port import Overlap, Port
from inverse.response.sound import SoundField
from inverse.response.sums import weighted_sum

__all__ = ["Detected", "ambient_response", "medium_response"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_ONE = np.ones((1, 1), dtype=complex)


@dataclass(frozen=True)
class Detected:
    """Transforms of d(delta r / r)/dP and d(delta r / r)/dQ of one medium.

    Attributes
    ----------
    strain, heat : complex array, shape (sets, 2, frequencies)
        Of the real and the imaginary part in time.
    """

    strain: Complex
    heat: Complex

    @property
    def strain_real(self) -> Complex:
        """Transform of the real part of d(delta r / r)/dP."""
        return self.strain[:, 0]

    @property
    def strain_imag(self) -> Complex:
        """Transform of the imaginary part of d(delta r / r)/dP."""
        return self.strain[:, 1]

    @property
    def heat_real(self) -> Complex:
        """Transform of the real part of d(delta r / r)/dQ."""
        return self.heat[:, 0]

    @property
    def heat_imag(self) -> Complex:
        """Transform of the imaginary part of d(delta r / r)/dQ."""
        return self.heat[:, 1]


@dataclass(frozen=True)
class _Probe:
    """Weight in one medium, ``forth exp(g z) + back exp(g (d - z)) + still``; see `Overlap`."""

    g: Complex
    decay: Complex
    forth: Complex
    back: Complex
    still: Complex
    thickness: Array


def medium_response(
    port: Port, medium: int, thickness: Array, profile: Absorption, heat: HeatField, sound: SoundField
) -> Detected:
    """Return the response of one medium to strain and temperature.

    Parameters
    ----------
    port : Port
        The detector's.
    medium : int
        Index of the medium.
    thickness : array
        nm; inf for the half-space.
    profile, heat, sound
        The pump's absorbed profile and the fields of the medium.
    """
    at = port.media[medium]
    probe = _Probe(at.g, at.decay, at.forth, at.back, at.still, thickness)
    overlap = _layer_overlap if np.all(np.isfinite(thickness)) else _half_space_overlap
    hot = overlap(probe, heat, heat.down, 0)
    light_left = _parts(*_profile_integrals(probe, profile))
    strain = overlap(probe, sound, -sound.down, 1)
    strain = (
        strain + sound.hot[:, None] * hot + weighted_sum(light_left, (sound.steep, _ONE), (sound.beat, _ONE))
    )
    temperature = heat.lattice[:, None] * (
        hot + weighted_sum(light_left, (heat.steep, _ONE), (heat.beat, _ONE))
    )
    return Detected(strain, temperature)


def ambient_response(
    port: Port, ambient: Ambient, s: Complex, surface_u: Complex, surface_t: Complex
) -> Detected:
    """Return the response of a liquid above: strain ``q_0 u(0) exp(q_0 z)``, temperature likewise, z < 0."""
    if ambient.velocity is None or ambient.conductivity is None or ambient.heat_capacity is None:
        raise ValueError("The ambient carries neither sound nor heat; it has no response of its own.")
    q_sound = s / ambient.velocity
    q_heat = np.sqrt(s * ambient.heat_capacity / ambient.conductivity)
    parts = [
        (
            q_sound * surface_u * _overlap(port.ambient, q_sound, conj),
            surface_t * _overlap(port.ambient, q_heat, conj),
        )
        for conj in (False, True)
    ]
    (strain, heat), (strain_c, heat_c) = parts
    return Detected(_real_and_imaginary(strain, strain_c), _real_and_imaginary(heat, heat_c))


def _real_and_imaginary(h: Complex, conjugate: Complex) -> Complex:
    return np.stack([(h + conjugate) / 2, (h - conjugate) / 2j], axis=1)


def _overlap(at: Overlap, q: Complex, conjugate: bool) -> Complex:
    """Integral of exp(q z) times the weight over z < 0."""
    g, forth, back, still = at.g, at.forth, at.back, at.still
    if conjugate:
        g, forth, back, still = (np.conj(v) for v in (g, forth, back, still))
    return forth / (q + g) + still / q + back / (q - g)


def _parts(*terms: Complex) -> Array:
    """Weights (sets, 2, terms) of real and imaginary part."""
    row = np.concatenate(np.broadcast_arrays(*terms), axis=1)
    return np.stack([row.real, row.imag], axis=1)


def _half_space_overlap(probe: _Probe, field: HeatField | SoundField, down: Complex, order: int) -> Complex:
    """Real and imaginary part of the integral of ``q^order down exp(-q z) E^2`` over the half-space."""
    q, g = field.q, probe.g
    table = 1 / ((q - 2 * g.real) * q + np.abs(g) ** 2)
    table = table if order == 0 else table * q
    running = _parts(probe.forth, -probe.forth * np.conj(g)), (down, table * q), (down, table)
    if not np.any(probe.still):
        return weighted_sum(*running)
    level = _ONE if order == 1 else 1 / q
    return weighted_sum(*running) + weighted_sum(_parts(probe.still), (down, level))


def _layer_overlap(probe: _Probe, field: HeatField | SoundField, down: Complex, order: int) -> Complex:
    """Real and imaginary part of the integral of ``q^order [down exp(-q z) + up exp(-q (d - z))] E^2``.

    With M, N, L sums of the field's amplitudes at both ends, the integral is
    ``q^order [M / (q - g) + N / (q + g) + L / q]``; real and imaginary part share the real denominators
    ``(q -+ g)(q -+ g*)``.
    """
    q = field.q
    probe = _beside_resonance(probe, q)
    g = probe.g
    ends = _ends(field, down)
    middle = q * q + np.abs(g) ** 2
    lean = (2 * g.real) * q
    near, far = 1 / (middle - lean), 1 / (middle + lean)
    level = _ONE if order == 1 else 1 / q
    if order == 1:
        near, far = near * q, far * q
    terms = [(table, end) for table in (near * q, near, far * q, far) for end in ends]
    still = ends[0] - ends[1] + ends[2] - ends[3]
    return weighted_sum(_end_weights(probe), *terms, (level, still))


def _ends(field: HeatField | SoundField, down: Complex) -> tuple[Complex, Complex, Complex, Complex]:
    """Down-going part at the top and bottom, up-going part at the bottom and top."""
    return down, down * field.decay, field.up, field.up * field.decay


def _end_weights(probe: _Probe) -> Array:
    """Weights of the four ends over ``q - g`` and ``q + g``, each times q and plain, and of the constant part."""
    f, b, fe, be = probe.forth, probe.back, probe.forth * probe.decay, probe.back * probe.decay
    minus, plus = np.broadcast_arrays(f, -fe, b, -be), np.broadcast_arrays(be, -b, fe, -f)
    turned = np.conj(probe.g)
    return _parts(*minus, *(-m * turned for m in minus), *plus, *(p * turned for p in plus), probe.still)


def _beside_resonance(probe: _Probe, q: Complex) -> _Probe:
    """Move the light's wavenumber by 2e-8 where sound or heat would meet it exactly (Brillouin resonance)."""
    g, size = probe.g, 1e-8 * np.abs(probe.g)
    if not np.any(np.abs(q.real + g.real) < size):
        return probe
    close = (np.abs(q + g) < size) | (np.abs(q + np.conj(g)) < size)
    step = np.where(close.any(axis=1, keepdims=True), 2e-8 * g, 0)
    return replace(probe, g=g + step, decay=probe.decay * np.exp(step * probe.thickness))


def _diffusing(probe: _Probe, q: Complex, x: Complex) -> tuple[Complex, Complex]:
    """Integrals of exp(-q z) E^2 and exp(-q (d - z)) E^2 over the medium; x = exp(-q d)."""
    along = (1 - x * probe.decay) / (q - probe.g)
    across = _difference(probe.decay, x, q + probe.g, probe.thickness)
    level = (1 - x) / q
    return (
        probe.forth * along + probe.back * across + probe.still * level,
        probe.back * along + probe.forth * across + probe.still * level,
    )


def _difference(e: Complex, x: Complex, rate: Complex, d: Array) -> Complex:
    """(exp(g d) - exp(-q d)) / (q + g), finite where q + g vanishes."""
    near = np.abs(rate) * np.where(np.isinf(d), 1.0, d) < 1e-7
    if not np.any(near):
        return (e - x) / rate
    safe = np.where(near, 1.0, rate)
    return np.where(near, np.where(np.isinf(d), 0.0, d) * e, (e - x) / safe)


def _profile_integrals(probe: _Probe, f: Absorption) -> tuple[Complex, Complex]:
    """Integrals of the exponential and the interference part of the absorbed profile times E^2."""
    p = f.p.astype(complex)
    down, up = _diffusing(probe, np.where(p == 0, 1e-12, p), f.decay.astype(complex))
    forth = _wave(probe, f.x, f.turn)
    back = _wave(probe, -f.x, np.conj(f.turn))
    return f.top * down + f.bottom * up, f.beat * forth + np.conj(f.beat) * back


def _wave(probe: _Probe, x: Array, turn: Complex) -> Complex:
    """Integral of exp(i x z) E^2 over a layer; zero in the half-space, where light does not interfere."""
    if not np.any(turn):
        return np.zeros((1, 1), dtype=complex)
    ix = 1j * x
    along = _difference(turn * probe.decay, np.ones((1, 1), dtype=complex), ix + probe.g, probe.thickness)
    across = _difference(probe.decay, turn, probe.g - ix, probe.thickness)
    level = (turn - 1) / ix
    return probe.forth * along + probe.back * across + probe.still * level
