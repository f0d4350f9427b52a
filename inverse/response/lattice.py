"""A lattice that conducts beside its hot electrons: the two temperatures of a metal, both diffusing.

    C_e s T_e - kappa_e T_e'' + g (T_e - T_l) = F,      C_l s T_l - kappa_l T_l'' + g (T_l - T_e) = 0

What leaves a layer leaves it with the electrons: no heat of the lattice crosses an interface, so that kappa_l -> 0 is
the lattice that only stores. The field is a sum of two waves of diffusion, a slow and a quick one,

    q^2 = [a -+ sqrt(a^2 - 4 D)] / 2,    a = (C_e s + g)/kappa_e + (C_l s + g)/kappa_l,
    D = [C_e C_l s + g (C_e + C_l)] s / (kappa_e kappa_l),

each with its ratio of lattice to electron temperature; ``ratio_1 ratio_2 = -kappa_e / kappa_l``. The lattice's flux is
zero at both ends of a layer, so that the slow wave there tells the quick one; and as a layer is symmetric, both act on
its neighbours as one wave would, of an admittance y and a decay E. With ``t = (1 - e^{-q d}) / (1 + e^{-q d})`` and
``rho = ratio_1 / ratio_2``, temperature over flux of a layer whose ends are alike, and opposite, are

    1 / (y t) = [1 / (q_1 t_1) - rho / (q_2 t_2)] / k,    t / y = [t_1 / q_1 - rho t_2 / q_2] / k,

with ``k = kappa_e (1 - rho)``. A layer cut in two is not the whole one: there is an interface in it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.response.carriers import Diffusing
from inverse.response.media import Medium
from inverse.response.recursion import Ends

__all__ = ["TwoWaves", "lattice_ratio", "taken_up", "two_waves"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

# One temperature, as far as numbers go: an inverse coupling in ps K/GPa that stands for none.
_RIGID = 1e-12


@dataclass(frozen=True)
class Wave:
    """One wave: q in 1/nm, lattice over electron temperature, ``exp(-q d)`` and what it is short of 1."""

    q: Complex
    ratio: Complex
    decay: Complex
    lost: Complex


@dataclass(frozen=True)
class TwoWaves:
    """The waves of one medium, and the one wave that they are to its neighbours.

    Attributes
    ----------
    slow, quick : Wave
    electrons, lattice : array
        Conductivity of both, GPa nm2/ps/K.
    endless : bool
        The medium is the half-space, without a bottom.
    """

    slow: Wave
    quick: Wave
    electrons: Array
    lattice: Array
    endless: bool

    @property
    def rho(self) -> Complex:
        """Ratio of the slow wave over that of the quick one."""
        return self.slow.ratio / self.quick.ratio

    def as_one(self) -> tuple[Complex, Complex]:
        """Return admittance and decay of the one wave."""
        (t1, q1), (t2, q2) = ((w.lost / (1 + w.decay), w.q) for w in (self.slow, self.quick))
        k = self.electrons * (1 - self.rho)
        alike = (1 / (q1 * t1) - self.rho / (q2 * t2)) / k
        opposite = (t1 / q1 - self.rho * t2 / q2) / k
        t = np.sqrt(opposite / alike)
        return 1 / (t * alike), (1 - t) / (1 + t)

    def closed(self, electrons: Ends, lattice: Ends) -> tuple[Ends, Diffusing]:
        """Add the quick wave that takes the lattice's flux off the ends of a particular solution.

        Parameters
        ----------
        electrons, lattice : Ends
            Temperature and flux of the particular solution in both.
        """
        e = self.quick.decay
        per_flux = 1 / (self.lattice * self.quick.ratio * self.quick.q)
        top, bottom = lattice.f_top * per_flux, lattice.f_bottom * per_flux * (not self.endless)
        down, up = (bottom * e - top) / (1 - e * e), (bottom - top * e) / (1 - e * e)
        flux = self.electrons * self.quick.q
        ends = Ends(
            u_top=electrons.u_top + down + up * e,
            f_top=electrons.f_top - flux * top,
            u_bottom=electrons.u_bottom + down * e + up,
            f_bottom=electrons.f_bottom - flux * bottom,
        )
        return ends, Diffusing(self.quick.q, e, down, up)

    def parted(self, y: Complex, decay: Complex, down: Complex, up: Complex) -> tuple[Diffusing, Diffusing]:
        """Return the slow and the quick wave that the amplitudes of the one wave stand for."""
        flux = self.electrons * (1 - self.rho) * self.slow.q
        reply = -self.rho * self.slow.q / self.quick.q
        even = y * (1 - decay) * (down + up) / (2 * flux * self.slow.lost)
        odd = y * (1 + decay) * (down - up) / (2 * flux * (1 + self.slow.decay))
        even_reply = reply * even * self.slow.lost / self.quick.lost
        odd_reply = reply * odd * (1 + self.slow.decay) / (1 + self.quick.decay)
        return (
            Diffusing(self.slow.q, self.slow.decay, even + odd, even - odd),
            Diffusing(self.quick.q, self.quick.decay, even_reply + odd_reply, even_reply - odd_reply),
        )


def two_waves(m: Medium, s: Complex) -> TwoWaves:
    """Solve for the waves of a medium whose lattice conducts."""
    electrons, lattice = m.conductivity - m.lattice_conductivity, m.lattice_conductivity
    g = 1 / np.maximum(m.inverse_coupling, _RIGID)
    a = (m.electron_heat_capacity * s + g) / electrons + (m.heat_capacity * s + g) / lattice
    stored = m.electron_heat_capacity * m.heat_capacity * s + g * (m.electron_heat_capacity + m.heat_capacity)
    d = stored * s / (electrons * lattice)
    quick2 = (a + np.sqrt(a * a - 4 * d)) / 2
    slow2 = d / quick2
    ratio = lattice_ratio(m, s, slow2)
    return TwoWaves(
        _wave(slow2, ratio, m.thickness),
        _wave(quick2, -electrons / (lattice * ratio), m.thickness),
        electrons,
        lattice,
        bool(np.all(np.isinf(m.thickness))),
    )


def lattice_ratio(m: Medium, s: Complex | Array, k2: Complex | Array) -> Complex:
    """Return ``1 / (1 + (C_l s - kappa_l k^2) / g)``, lattice over electron temperature where both go as exp(k z)."""
    lag = (m.heat_capacity * s - m.lattice_conductivity * k2) * m.inverse_coupling
    return np.asarray(1 / (1 + lag), dtype=complex)


def taken_up(m: Medium, s: Complex | Array, k2: Complex | Array) -> Complex:
    """Return source over electron temperature where all goes as ``exp(k z)``."""
    electrons = m.conductivity - m.lattice_conductivity
    lattice = (m.heat_capacity * s - m.lattice_conductivity * k2) * lattice_ratio(m, s, k2)
    return m.electron_heat_capacity * s - electrons * k2 + lattice


def _wave(q2: Complex, ratio: Complex, thickness: Array) -> Wave:
    q = np.sqrt(q2)
    if np.all(np.isinf(thickness)):
        none = np.zeros((1, 1), dtype=complex)
        return Wave(q, ratio, none, none + 1)
    return Wave(q, ratio, np.exp(-q * thickness), -np.expm1(-q * thickness))
