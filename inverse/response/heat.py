"""Heat after the pump pulse, in the Laplace domain: one or two temperatures, boundary conductance.

``C s T - kappa T'' = F`` in each medium; with hot electrons T is theirs, C becomes
``C_e + C_l / (1 + s C_l / g)`` and the lattice follows as ``T / (1 + s C_l / g)``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.response.light import Absorption
from inverse.response.media import Ambient, Medium, anchored, layers
from inverse.response.recursion import Ends, ascend, descend, surface_amplitude
from inverse.response.sums import weight_rows, weighted_sum

__all__ = ["HeatField", "heat_field"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_ONE = np.ones((1, 1), dtype=complex)


@dataclass(frozen=True)
class HeatField:
    """Temperature of the heated (electron) system in one medium.

    ``T = down exp(-q z) + up exp(-q (d - z))
    + steep [top exp(-p z) + bottom exp(-p (d - z))] + beat 2 Re[B exp(i x z)]``
    with the shapes of `Absorption`; ``lattice`` turns T into the lattice temperature.

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
    """

    q: Complex
    decay: Complex
    down: Complex
    up: Complex
    steep: Complex
    beat: Complex
    lattice: Complex


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
    steep = [pulse / (c * s - k * f.p**2) for c, k, f in zip(capacity, kappa, profiles, strict=True)]
    beat = [pulse / (c * s + k * f.x**2) for c, k, f in zip(capacity, kappa, profiles, strict=True)]
    decay = [np.exp(-qj * m.thickness) for qj, m in zip(q, layers(media), strict=False)]
    ends = [_ends(f, k, a, b) for f, k, a, b in zip(profiles, kappa, steep, beat, strict=True)]
    below = ascend(y, decay, resistance, ends)
    load = _liquid_load(ambient, s)
    down, up = descend(surface_amplitude(y[0], below, ends[0], load), y, decay, below, ends)
    amplitudes = zip(q, anchored(decay, media), down, up, steep, beat, lattice, strict=True)
    fields = [HeatField(*parts) for parts in amplitudes]
    if isinstance(load, float):
        return fields, None
    return fields, down[0] + below.gamma[0] * down[0] + below.beta[0] + ends[0].u_top


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
