"""Interfaces with mass and roughness, beside their compliance.

**Mass.** A layer of molecules or of dirt moves with the faces it sticks to: half of its areal mass m with the upper,
half with the lower, the spring between. Each half adds the admittance ``m s^2 / 2`` to what lies below it.

**Roughness** of rms h, smooth over a wavelength of sound, spreads the phase of what it reflects and transmits. On the
local coefficients of the interface (never on what is seen of all that lies below)

    r12 by exp(2 q^2 h^2),    r21 by exp(2 q'^2 h^2),    t12 and t21 by exp((q - q')^2 h^2 / 2),

the mean over a normal distribution of heights; at the free surface, what comes back by ``exp(2 q^2 h^2)``. Its effect
on what the sources at the interface itself send off is of second order and left out.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.response.recursion import Ends, Interfaces

__all__ = ["Flaw", "Imperfection", "flaw", "under_a_rough_surface"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class Imperfection:
    """Areal mass (g/cm3 nm) and rms roughness (nm) of an interface, shape (sets or 1, 1)."""

    mass: Array
    roughness: Array


@dataclass(frozen=True)
class Flaw:
    """An imperfect interface as the recursion meets it.

    Attributes
    ----------
    compliance : array
    inertia : complex array
        Admittance of half the mass.
    reflected_above, reflected_below, passed : complex array
        Factors of the local coefficients; 1 where it is smooth.
    """

    compliance: Array
    inertia: Complex
    reflected_above: Complex
    reflected_below: Complex
    passed: Complex

    def joint(
        self, y: tuple[Complex, Complex], gamma: Complex, beta: Complex, ends: tuple[Ends, Ends]
    ) -> tuple[Complex, Complex, Complex, Complex]:
        """Return R, b, T and v of ``B = R A E + b`` above the interface and ``A' = T A E + v`` below it."""
        raised, sunk = self._sources(y, ends)
        r12, t12 = self._local(*y)
        r21, t21 = self._local(y[1], y[0])
        back, t12, t21 = self.reflected_below * r21, self.passed * t12, self.passed * t21
        echoes = 1 / (1 - back * gamma)
        launched = (sunk + back * beta) * echoes
        b = raised + t21 * (gamma * launched + beta)
        return self.reflected_above * r12 + t12 * gamma * t21 * echoes, b, t12 * echoes, launched

    def _sources(self, y: tuple[Complex, Complex], ends: tuple[Ends, Ends]) -> tuple[Complex, Complex]:
        """Return the waves that the sources at the interface itself send up and down, as if it were smooth."""
        seen = y[1] + self.inertia
        shared = 1 / (1 + self.compliance * seen)
        w = seen * shared + self.inertia
        lifted = ends[1].f_top - y[1] * ends[1].u_top
        b = (ends[0].f_bottom - w * ends[0].u_bottom - lifted * shared) / (y[0] + w)
        u = b + ends[0].u_bottom
        below = shared * u + lifted * (shared - 1) / seen
        return b, (shared * (seen * u + lifted) - self.inertia * below - ends[1].f_top) / y[1]

    def _local(self, y: Complex, other: Complex) -> tuple[Complex, Complex]:
        """Reflection into the first medium and transmission from it, of a smooth interface."""
        seen = other + self.inertia
        shared = 1 / (1 + self.compliance * seen)
        w = seen * shared + self.inertia
        r = (y - w) / (y + w)
        return r, (1 + r) * shared


def under_a_rough_surface(below: Interfaces, q: Complex, roughness: Array | None) -> Interfaces:
    """Weaken what the surface sees coming from below, so that it sends back as much less; q of the top medium."""
    if roughness is None:
        return below
    kept = np.exp(2 * q**2 * roughness**2)
    return replace(
        below,
        gamma=(below.gamma[0] * kept, *below.gamma[1:]),
        beta=(below.beta[0] * kept, *below.beta[1:]),
    )


def flaw(given: Imperfection, compliance: Array, s: Complex, above: Complex, below: Complex) -> Flaw | None:
    """Return the flaw of an interface between media of given q, or None where it is perfect but for its compliance."""
    if not np.any(given.mass) and not np.any(given.roughness):
        return None
    h2 = given.roughness**2
    return Flaw(
        compliance,
        given.mass * s**2 / 2,
        np.exp(2 * above**2 * h2),
        np.exp(2 * below**2 * h2),
        np.exp((above - below) ** 2 * h2 / 2),
    )
