"""Heat after the pump pulse, in the Laplace domain: one or two temperatures, boundary conductance.

``C s T - kappa T'' = F`` in each medium; with hot electrons T is theirs, C becomes
``C_e + C_l / (1 + s C_l / g)`` and the lattice follows as ``T / (1 + s C_l / g)``. A lattice that conducts too is
`inverse.response.lattice`'s.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from inverse.response.carriers import CarrierConstants, Diffusing, Pairs, pair_field
from inverse.response.lattice import TwoWaves, lattice_ratio, taken_up, two_waves
from inverse.response.light import Absorption
from inverse.response.media import Ambient, Medium, anchored, layers
from inverse.response.recursion import Ends, ascend, descend, fall, surface_amplitude
from inverse.response.sums import weight_rows, weighted_sum

__all__ = ["HeatField", "heat_field"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_ONE = np.ones((1, 1), dtype=complex)
_NONE = np.zeros((1, 1), dtype=complex)


@dataclass(frozen=True)
class HeatField:
    """Temperature of the heated (electron) system in one medium.

    ``T = down exp(-q z) + up exp(-q (d - z))
    + steep [top exp(-p z) + bottom exp(-p (d - z))] + beat 2 Re[B exp(i x z)]``
    with the shapes of `Absorption`, and what the second part adds; ``lattice`` turns T into the lattice temperature.

    Attributes
    ----------
    q, decay : array
        1/nm and ``exp(-q d)`` (zero in the half-space).
    down, up : array
        Homogeneous amplitudes.
    steep, beat : array
        Response to the exponential and the interference part of the absorbed profile.
    lattice : array
        Lattice over electron temperature; 1 for one temperature.
    second : Pairs or Diffusing, optional
        Photo-carriers, whose diffusing part adds ``second_heat`` times itself to T; or, where the lattice conducts
        beside hot electrons, their quick wave, part of T.
    second_heat : array, optional
        Lattice temperature per unit of it.
    of_light : pair of arrays, optional
        ``lattice`` of the exponential and the interference part, where they differ: the lattice conducts.
    """

    q: Complex
    decay: Complex
    down: Complex
    up: Complex
    steep: Complex
    beat: Complex
    lattice: Complex
    second: Diffusing | None = None
    second_heat: Complex = field(default_factory=lambda: _NONE)
    of_light: tuple[Complex, Complex] | None = None

    @property
    def ratios(self) -> tuple[Complex, Complex, Complex]:
        """Lattice over electron temperature of the diffusing, the exponential and the interference part."""
        return (self.lattice, *(self.of_light or (self.lattice, self.lattice)))


def heat_field(
    media: Sequence[Medium],
    resistance: Sequence[Array],
    ambient: Ambient,
    profiles: Sequence[Absorption],
    s: Complex,
    pulse: Complex,
) -> tuple[list[HeatField], Complex | None]:
    """Solve for the temperature of every medium.

    Parameters
    ----------
    media, resistance, ambient
        The sample, coherent units; nothing leaves it below a last layer.
    profiles : sequence of Absorption
        Absorbed fraction per length of each medium.
    s : complex array, shape (1, frequencies)
        Laplace variable, rad/ps, first entry real.
    pulse : complex array
        Spectrum of the heating: fluence (GPa nm) times the pulse's transform.

    Returns
    -------
    fields : list of HeatField
    surface : array or None
        Temperature of a liquid at its foot; None without a liquid.
    """
    capacity, lattice = zip(*(_capacity(m, s) for m in media), strict=True)
    kappa = [
        _off_resonance(m.conductivity, c, s, f) for m, c, f in zip(media, capacity, profiles, strict=True)
    ]
    q = [np.sqrt(s * c / k) for c, k in zip(capacity, kappa, strict=True)]
    y = [k * qj for k, qj in zip(kappa, q, strict=True)]
    pairs = [
        None if m.carriers is None else pair_field(m.carriers, k, m.heat_capacity, m.thickness, f, s, pulse)
        for m, k, f in zip(media, kappa, profiles, strict=True)
    ]
    share = [_heating(m.carriers, n, pulse) for m, n in zip(media, pairs, strict=True)]
    steep = [
        a / (c * s - k * f.p**2) for (a, _), c, k, f in zip(share, capacity, kappa, profiles, strict=True)
    ]
    beat = [
        b / (c * s + k * f.x**2) for (_, b), c, k, f in zip(share, capacity, kappa, profiles, strict=True)
    ]
    decay = [fall(qj, m.thickness) for qj, m in zip(q, layers(media), strict=False)]
    ends = [_ends(f, k, a, b) for f, k, a, b in zip(profiles, kappa, steep, beat, strict=True)]
    conducting = [_conducting(m, f, s, pulse) for m, f in zip(media, profiles, strict=True)]
    for j, two in enumerate(conducting):
        if two is not None:
            y[j], decay[j : j + 1], ends[j] = two.y, [two.decay] * (j < len(decay)), two.ends
    per_pair = [_NONE] * len(media)
    for j, (m, n) in enumerate(zip(media, pairs, strict=True)):
        if m.carriers is not None and n is not None:
            held = m.carriers.gap
            per_pair[j] = held * m.carriers.rate / (capacity[j] * s - kappa[j] * n.q * n.q)
            ends[j] = _with_pairs(ends[j], n, per_pair[j], kappa[j], held * m.carriers.surface)
    below = ascend(y, decay, resistance, ends)
    load = _liquid_load(ambient, s)
    down, up = descend(surface_amplitude(y[0], below, ends[0], load), decay, below)
    amplitudes = zip(q, anchored(decay, media), down, up, steep, beat, lattice, pairs, per_pair, strict=True)
    fields = [
        HeatField(*parts) if two is None else two.field(*parts[2:4])
        for parts, two in zip(amplitudes, conducting, strict=True)
    ]
    if isinstance(load, float):
        return fields, None
    return fields, down[0] + below.gamma[0] * down[0] + below.beta[0] + ends[0].u_top


@dataclass(frozen=True)
class _Conducting:
    """A medium whose lattice conducts: its waves, what light makes of it, and how its neighbours see it."""

    waves: TwoWaves
    y: Complex
    decay: Complex
    steep: Complex
    beat: Complex
    of_light: tuple[Complex, Complex]
    ends: Ends
    closing: Diffusing

    def field(self, down: Complex, up: Complex) -> HeatField:
        """Return the field for the amplitudes of the one wave that the neighbours see."""
        slow, quick = self.waves.parted(self.y, self.decay, down, up)
        second = replace(quick, down=quick.down + self.closing.down, up=quick.up + self.closing.up)
        return HeatField(
            *(slow.q, slow.decay, slow.down, slow.up, self.steep, self.beat, self.waves.slow.ratio),
            second,
            self.waves.quick.ratio,
            self.of_light,
        )


def _conducting(m: Medium, f: Absorption, s: Complex, pulse: Complex) -> _Conducting | None:
    """Solve for a medium whose lattice conducts beside hot electrons; None where it does not."""
    if not np.any(m.lattice_conductivity) or not np.any(m.inverse_coupling):
        return None
    first = s[:, :1].real
    close = np.abs(taken_up(m, first, f.p**2)) < 1e-6 * (m.heat_capacity * first)
    if np.any(close):
        apart = np.where(close, 1 + 2e-6, 1.0)
        m = replace(
            m, conductivity=m.conductivity * apart, lattice_conductivity=m.lattice_conductivity * apart
        )
    waves = two_waves(m, s)
    steep, beat = (pulse / taken_up(m, s, k2) for k2 in (f.p**2, -(f.x**2)))
    on_steep, on_beat = (lattice_ratio(m, s, k2) for k2 in (f.p**2, -(f.x**2)))
    made = _ends(f, waves.electrons, steep, beat), _ends(f, waves.lattice, steep * on_steep, beat * on_beat)
    ends, closing = waves.closed(*made)
    return _Conducting(waves, *waves.as_one(), steep, beat, (on_steep, on_beat), ends, closing)


def _heating(given: CarrierConstants | None, n: Pairs | None, pulse: Complex) -> tuple[Complex, Complex]:
    """Heat per absorbed profile in its two parts: at once, and as pairs recombine."""
    if given is None or n is None:
        return pulse, pulse
    prompt = pulse * (1 - given.gap / given.photon)
    held = given.gap * given.rate
    return prompt + held * n.steep, prompt + held * n.beat


def _with_pairs(end: Ends, n: Pairs, per_pair: Complex, kappa: Array, surface: Array) -> Ends:
    """Add the pairs' diffusing part to the ends, and the heat of those that recombine at the top."""
    down_top, down_bottom, up_top, up_bottom = (per_pair * part for part in n.ends)
    slope = kappa * n.q
    return Ends(
        u_top=end.u_top + down_top + up_top,
        f_top=end.f_top + slope * (down_top - up_top) - surface * n.at_top,
        u_bottom=end.u_bottom + down_bottom + up_bottom,
        f_bottom=end.f_bottom + slope * (down_bottom - up_bottom),
    )


def _capacity(m: Medium, s: Complex) -> tuple[Complex, Complex]:
    """Return the effective heat capacity of the heated system and lattice over electron temperature."""
    if not np.any(m.electron_heat_capacity):
        return m.heat_capacity.astype(complex), np.ones((1, 1), dtype=complex)
    lattice = 1 / (1 + s * (m.heat_capacity * m.inverse_coupling))
    return m.electron_heat_capacity + m.heat_capacity * lattice, lattice


def _off_resonance(kappa: Array, capacity: Complex, s: Complex, profile: Absorption) -> Array:
    """Move the conductivity by 2e-6 where s C = kappa p^2 would be met at the real frequency."""
    first = (s[:, :1] * capacity[:, :1]).real
    close = np.abs(first - kappa * profile.p**2) < 1e-6 * first
    return np.where(close, kappa * (1 + 2e-6), kappa) if np.any(close) else kappa


def _ends(f: Absorption, kappa: Array, steep: Complex, beat: Complex) -> Ends:
    """Temperature and flux of the two parts at both ends."""
    end = f.beat * f.turn
    slope, wave = kappa * f.p, 2 * kappa * f.x
    weights = weight_rows(
        (f.top + f.bottom * f.decay, 2 * f.beat.real),
        (slope * (f.top - f.bottom * f.decay), wave * f.beat.imag),
        (f.top * f.decay + f.bottom, 2 * end.real),
        (slope * (f.top * f.decay - f.bottom), wave * end.imag),
    )
    sums = weighted_sum(weights, (steep, _ONE), (beat, _ONE))
    return Ends(*(sums[:, i] for i in range(4)))


def _liquid_load(ambient: Ambient, s: Complex) -> Complex | float:
    if ambient.heat_capacity is None or ambient.conductivity is None:
        return 0.0
    return np.sqrt(s * ambient.heat_capacity * ambient.conductivity)
