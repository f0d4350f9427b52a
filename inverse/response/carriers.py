"""Photo-carriers of a semiconductor: pairs that the pump makes, that diffuse, recombine, and press on the lattice.

The pair density N obeys ``(s + 1/lifetime) N - D N'' = F / photon energy`` in its own medium, which pairs do not leave;
at its top they recombine with the surface's velocity. Each pair holds the gap's energy until it recombines and heats
the lattice there; what the photon had above the gap heats the lattice at once. The gap's change with strain,
``a = dE_gap / d strain``, is a stress: ``S = -a N``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.response.light import Absorption
from inverse.response.recursion import Ends, ascend, descend, surface_amplitude

__all__ = ["CarrierConstants", "Diffusing", "Pairs", "pair_field"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class CarrierConstants:
    """Of one medium, coherent units, every array of shape (sets or 1, 1).

    Attributes
    ----------
    photon, gap : array
        Energy of a photon and of a pair at rest, GPa nm^3.
    stress : array
        Stress coefficient per pair density, ``-dE_gap / d strain``, GPa nm^3.
    diffusivity : array
        nm^2/ps.
    rate : array
        Inverse lifetime, 1/ps.
    surface : array
        Recombination velocity at the top, nm/ps.
    """

    photon: Array
    gap: Array
    stress: Array
    diffusivity: Array
    rate: Array
    surface: Array


@dataclass(frozen=True)
class Diffusing:
    """What diffuses in one medium: ``down exp(-q z) + up exp(-q (d - z))``, decay = ``exp(-q d)``."""

    q: Complex
    decay: Complex
    down: Complex
    up: Complex

    @property
    def ends(self) -> tuple[Complex, Complex, Complex, Complex]:
        """The downward wave at top and bottom, the upward wave at top and bottom."""
        return self.down, self.down * self.decay, self.up * self.decay, self.up


@dataclass(frozen=True)
class Pairs(Diffusing):
    """Pair density of one medium, in the form of `HeatField`, and what it gives to the lattice.

    Attributes
    ----------
    q, decay, down, up, steep, beat : array
        As of `HeatField`: ``N = down exp(-q z) + up exp(-q (d - z)) + steep [...] + beat [...]``.
    at_top : array
        N at the top.
    """

    steep: Complex
    beat: Complex
    at_top: Complex


def pair_field(
    given: CarrierConstants, conductivity: Array, capacity: Array, thickness: Array, f: Absorption, s: Complex,
    pulse: Complex,
) -> Pairs:  # fmt: skip
    """Solve for the pairs of one medium.

    Parameters
    ----------
    given : CarrierConstants
    conductivity, capacity : array
        Of the lattice: where pairs would diffuse exactly as heat does, they step aside by 2e-6.
    thickness : array
        nm; inf for the half-space.
    f : Absorption
    s, pulse : complex array
        Laplace variable, and fluence times the pulse's transform.
    """
    rate = s + given.rate
    d = _off_resonance(given.diffusivity, conductivity / capacity, rate[:, :1], s[:, :1], f)
    q: Complex = np.sqrt(rate / d)
    y: Complex = d * q
    steep, beat = (pulse / given.photon / (rate - d * k2) for k2 in (f.p**2, -(f.x**2)))
    end = _ends(f, d, steep, beat)
    decay = [np.exp(-q * thickness)] if np.all(np.isfinite(thickness)) else []
    below = ascend([y], decay, [], [end])
    first = surface_amplitude(y, below, end, given.surface.astype(complex))
    (down,), (up,) = descend(first, decay, below)
    x = decay[0] if decay else np.zeros((1, 1), dtype=complex)
    return Pairs(q, x, down, up, steep, beat, down + up * x + end.u_top)


def _off_resonance(d: Array, diffusivity: Array, rate: Complex, s: Complex, f: Absorption) -> Array:
    """Move the diffusivity where pairs follow the light, or the lattice's heat, exactly at the real frequency."""
    first = rate.real
    close = np.abs(first - d * f.p**2) < 1e-6 * first
    close = close | (np.abs(first / d - s.real / diffusivity) < 1e-6 * first / d)
    return np.where(close, d * (1 + 2e-6), d)


def _ends(f: Absorption, d: Array, steep: Complex, beat: Complex) -> Ends:
    end = f.beat * f.turn
    return Ends(
        u_top=steep * (f.top + f.bottom * f.decay) + beat * (2 * f.beat.real),
        f_top=d * (steep * (f.p * (f.top - f.bottom * f.decay)) + beat * (2 * f.x * f.beat.imag)),
        u_bottom=steep * (f.top * f.decay + f.bottom) + beat * (2 * end.real),
        f_bottom=d * (steep * (f.p * (f.top * f.decay - f.bottom)) + beat * (2 * f.x * end.imag)),
    )
