"""What the probe sees: first-order change of the reflection or transmission coefficient, split into basis functions.

``delta c / c = sum over media of integral (P eta + Q T + N x pairs) w dz + sum over boundaries of step * u``, with the
weights w and steps of `Port`; at normal incidence in reflection ``w = i k n E^2 / (n_0 r)`` and
``step = i k (eps_above - eps_below) E^2 / (2 n_0 r)``.
A quantity h with complex optical factors has a real and an imaginary part in time. Their transforms are
``(H + H*) / 2`` and ``(H - H*) / 2i``, H* being H with every optical factor conjugated.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.response.carriers import Diffusing, Pairs
from inverse.response.heat import HeatField
from inverse.response.light import Absorption
from inverse.response.media import Ambient
from inverse.response.port import Overlap, Port
from inverse.response.sound import SoundField
from inverse.response.sums import product, weighted_sum

__all__ = ["Detected", "ambient_response", "medium_response"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_ONE = np.ones((1, 1), dtype=complex)
_ALTERNATING = np.array([1.0, -1.0, 1.0, -1.0])


@dataclass(frozen=True)
class Detected:
    """Transforms of d(delta r / r)/dP, d(delta r / r)/dQ and, with carriers, d(delta r / r)/dN of one medium.

    Attributes
    ----------
    strain, heat, pairs : complex array, shape (sets, 2, frequencies)
        Of the real and the imaginary part in time.
    """

    strain: Complex
    heat: Complex
    pairs: Complex | None = None

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
    light_left = _parts(_light_overlap(probe, profile))
    strain = overlap(probe, sound, -sound.down, 1)
    strain = (
        strain + sound.hot[:, None] * hot + weighted_sum(light_left, (sound.steep, _ONE), (sound.beat, _ONE))
    )
    lattice, on_steep, on_beat = heat.ratios
    temperature = lattice[:, None] * hot
    temperature = temperature + weighted_sum(light_left, (heat.steep, on_steep), (heat.beat, on_beat))
    if heat.second is not None:
        second = overlap(probe, heat.second, heat.second.down, 0)
        strain = strain + sound.paired[:, None] * second
        temperature = temperature + heat.second_heat[:, None] * second
    if not isinstance(heat.second, Pairs):
        return Detected(strain, temperature)
    left = weighted_sum(light_left, (heat.second.steep, _ONE), (heat.second.beat, _ONE))
    return Detected(strain, temperature, second + left)


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
    """Return the transforms of the real and the imaginary part in time, (sets, 2, frequencies)."""
    out = np.empty((len(h), 2, h.shape[1]), dtype=complex)
    np.add(h, conjugate, out=out[:, 0])
    np.subtract(h, conjugate, out=out[:, 1])
    out[:, 0] *= 0.5
    out[:, 1] *= -0.5j
    return out


def _overlap(at: Overlap, q: Complex, conjugate: bool) -> Complex:
    """Integral of exp(q z) times the weight over z < 0."""
    g, forth, back, still = at.g, at.forth, at.back, at.still
    if conjugate:
        g, forth, back, still = (np.conj(v) for v in (g, forth, back, still))
    return forth / (q + g) + still / q + back / (q - g)


def _parts(row: Complex) -> Array:
    """Weights (sets, 2, terms) of real and imaginary part."""
    out = np.empty((len(row), 2, row.shape[1]))
    out[:, 0], out[:, 1] = row.real, row.imag
    return out


def _half_space_overlap(
    probe: _Probe, field: HeatField | SoundField | Diffusing, down: Complex, order: int
) -> Complex:
    """Real and imaginary part of the integral of ``q^order down exp(-q z) E^2`` over the half-space."""
    q, g = field.q, probe.g
    table = 1 / ((q - 2 * g.real) * q + np.abs(g) ** 2)
    table = table if order == 0 else table * q
    weights, terms = [probe.forth, -probe.forth * np.conj(g)], [(down, table * q), (down, table)]
    if np.any(probe.still):
        weights.append(probe.still)
        terms.append((down, _ONE if order == 1 else 1 / q))
    return weighted_sum(_parts(_row(*weights)), *terms)


def _layer_overlap(
    probe: _Probe, field: HeatField | SoundField | Diffusing, down: Complex, order: int
) -> Complex:
    """Real and imaginary part of the integral of ``q^order [down exp(-q z) + up exp(-q (d - z))] E^2``.

    With V, W, L sums of the field's amplitudes at both ends, the integral is
    ``q^order [(V q + W) / (q^2 - g^2) + L / q]``. Beside it stands the one with every optical factor conjugated;
    their half sum and half difference share the reciprocal of ``(q^2 - Re g^2)^2 + (Im g^2)^2``.
    """
    q = field.q
    probe = _beside_resonance(probe, q)
    sums = product(_end_weights(probe), _ends(field, down))
    g2 = probe.g * probe.g
    even = q * q - g2.real
    share = np.reciprocal(even * even + g2.imag**2)
    if order == 1:
        share = share * q
    even, odd = even * share, -g2.imag * share
    parts = sums[:, 0:2] * q[:, None] + sums[:, 2:4]
    out: Complex = parts * even[:, None]
    parts = parts * odd[:, None]
    out[:, 0] += parts[:, 1]
    out[:, 1] -= parts[:, 0]
    out += sums[:, 4:6] if order == 1 else sums[:, 4:6] * (1 / q)[:, None]
    return out


def _ends(field: HeatField | SoundField | Diffusing, down: Complex) -> Complex:
    """Down-going part at the top and bottom, up-going part at the bottom and top, (sets, 4, frequencies)."""
    sets, size = (max(part.shape[axis] for part in (field.q, down, field.up, field.decay)) for axis in (0, 1))
    out = np.empty((sets, 4, size), dtype=complex)
    out[:, 0], out[:, 2] = down, field.up
    np.multiply(out[:, 0::2], field.decay[:, None], out=out[:, 1::2])
    return out


def _end_weights(probe: _Probe) -> Array:
    """Real and imaginary part of the weights of the four ends in V, W and L, (sets, 6, 4)."""
    f, b, e = probe.forth, probe.back, probe.decay
    near, far = _row(f, -f * e, b, -b * e), _row(b * e, -b, f * e, -f)
    rows = (near + far, probe.g * (near - far), probe.still * _ALTERNATING)
    weights = np.empty((max(map(len, rows)), 6, 4))
    for i, row in enumerate(rows):
        weights[:, 2 * i], weights[:, 2 * i + 1] = row.real, row.imag
    return weights


def _beside_resonance(probe: _Probe, q: Complex) -> _Probe:
    """Move the light's wavenumber by 1e-7 where sound or heat would meet it exactly (Brillouin resonance)."""
    g, size = probe.g, 5e-8 * np.abs(probe.g)
    if not np.any(np.abs(q.real + g.real) < size):
        return probe
    close = (np.abs(q + g) < size) | (np.abs(q + np.conj(g)) < size)
    step = np.where(close.any(axis=1, keepdims=True), 1e-7 * g, 0)
    return replace(probe, g=g + step, decay=probe.decay * np.exp(step * probe.thickness))


def _light_overlap(probe: _Probe, f: Absorption) -> Complex:
    """Integrals of the exponential and the interference part of the absorbed profile times E^2, (sets, 2).

    Every term is an exponential whose values at both ends are bounded: the integral is their difference over
    the sum of the two exponents.
    """
    none = np.zeros_like(probe.g)
    turning = (1j * f.x).astype(complex)
    rate = _row(probe.g, -probe.g, none)[:, :, None] + _row(-f.p, f.p, turning, -turning)[:, None]
    seen = _row(probe.forth, probe.back * probe.decay, probe.still)
    absorbed = _row(f.top, f.bottom * f.decay, f.beat, np.conj(f.beat))
    start = seen[:, :, None] * absorbed[:, None]
    seen = _row(probe.forth * probe.decay, probe.back, probe.still)
    end = f.beat * f.turn
    absorbed = _row(f.top * f.decay, f.bottom, end, np.conj(end))
    stop = seen[:, :, None] * absorbed[:, None]
    endless = np.isinf(probe.thickness)
    flat = np.abs(rate) * np.where(endless, 1.0, probe.thickness)[:, :, None] < 1e-7
    depth = np.where(endless, 0.0, probe.thickness)[:, :, None]
    parts = np.where(flat, depth * start, (stop - start) / np.where(flat, 1.0, rate)).sum(axis=1)
    return parts.reshape(-1, 2, 2).sum(axis=2)


def _row(*parts: Complex | Array) -> Complex:
    """Stand arrays of shape (sets or 1, 1) side by side."""
    out = np.empty((max(map(len, parts)), len(parts)), dtype=complex)
    for i, part in enumerate(parts):
        out[:, i : i + 1] = part
    return out
