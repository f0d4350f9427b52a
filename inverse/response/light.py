"""Light in layers: fields, reflection and the absorbed profile, at any angle, polarised s or p.

The scalar is the electric field for s and the magnetic field for p; both obey ``u'' = -(k kz)^2 u`` in a layer,
``kz = sqrt(n^2 - (n_0 sin angle)^2)``, with the admittance ``-i kz`` for s and ``-i kz / n^2`` for p.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.description.pumpprobe import Beam
from inverse.response.recursion import ascend, descend

__all__ = ["Absorption", "LightField", "absorption", "light_field", "reversed_field"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class LightField:
    """Field of a unit incident wave, ``u = a exp(i k kz z) + b exp(i k kz (d - z))`` in each medium.

    Attributes
    ----------
    k : float
        Vacuum wavenumber, 1/nm.
    n, kz : tuple of arrays
        Index and wavenumber along the depth (in units of k) of each medium, shape (sets or 1, 1).
    n_ambient, kz_ambient : array
    sine : array
        Wavenumber along the surface in units of k.
    is_p : bool
        Polarised p: u is the magnetic field.
    a, b : tuple of arrays
        Amplitudes anchored at the top and bottom; b of the half-space is zero.
    decay : tuple of arrays
        ``exp(i k kz d)`` of each layer.
    r : array
        Reflection coefficient of u at the surface.
    """

    k: float
    n: tuple[Complex, ...]
    kz: tuple[Complex, ...]
    n_ambient: Complex
    kz_ambient: Complex
    sine: Array
    is_p: bool
    a: tuple[Complex, ...]
    b: tuple[Complex, ...]
    decay: tuple[Complex, ...]
    r: Complex

    @property
    def reflectance(self) -> Array:
        """Reflected fraction of the incident power (transparent ambient)."""
        return np.abs(self.r) ** 2

    @property
    def transmittance(self) -> Array:
        """Fraction of the incident power that enters the half-space."""
        below, above = self.kz[-1], self.kz_ambient
        if self.is_p:
            below, above = below / self.n[-1] ** 2, above / self.n_ambient**2
        return np.abs(self.a[-1]) ** 2 * below.real / above.real


def light_field(
    n: Sequence[Complex], thickness: Sequence[Array], beam: float | Beam, n_ambient: Complex
) -> LightField:
    """Solve for the light of a unit wave from the ambient.

    Parameters
    ----------
    n : sequence of arrays
        Complex index of each medium, half-space last, shape (sets or 1, 1).
    thickness : sequence of arrays
        nm, of each layer.
    beam : Beam or float
        A vacuum wavelength in nm stands for normal incidence.
    n_ambient : array
        Index of the ambient, real but for light that comes back from an absorbing substrate.
    """
    if not isinstance(beam, Beam):
        beam = Beam(beam)
    k, is_p = 2 * np.pi / beam.wavelength, beam.polarisation == "p"
    sine = n_ambient.real * np.sin(np.deg2rad(beam.angle))
    return _solved(n, thickness, n_ambient, k, sine, is_p)


def reversed_field(light: LightField, thickness: Sequence[Array]) -> LightField:
    """Solve for a unit wave that comes up from the half-space with the same wavenumber along the surface.

    It is described in the order and depths of the original, ``a`` and ``b`` at the tops and bottoms of the same media;
    the half-space is the last, with the unit wave in ``b``'s place, and ``r`` is the transmission into the ambient.
    """
    n = [*light.n[-2::-1], light.n_ambient]
    back = _solved(n, list(thickness)[::-1], light.n[-1], light.k, light.sine, light.is_p)
    return replace(
        light,
        a=(*back.b[-2::-1], back.r),
        b=(*back.a[-2::-1], np.ones((1, 1), dtype=complex)),
        r=back.a[-1],
    )


def _solved(
    n: Sequence[Complex], thickness: Sequence[Array], n_ambient: Complex, k: float, sine: Array, is_p: bool
) -> LightField:
    *kz, kz_ambient = [_along_depth(nj, sine) for nj in (*n, n_ambient)]
    decay = [np.exp(1j * k * m * d) for m, d in zip(kz, thickness, strict=False)]
    *y, y0 = [
        -1j * (m / nj**2 if is_p else m) for m, nj in zip((*kz, kz_ambient), (*n, n_ambient), strict=True)
    ]
    below = ascend(y, decay, [np.zeros((1, 1))] * len(decay))
    gamma = below.gamma[0]
    surface = y[0] * (1 - gamma) / (1 + gamma)
    r = (y0 - surface) / (y0 + surface)
    a, b = descend(y0 * (1 - r) / (y[0] * (1 - gamma)), decay, below)
    return LightField(
        k, tuple(n), tuple(kz), n_ambient, kz_ambient, sine, is_p, tuple(a), tuple(b), tuple(decay), r
    )


def _along_depth(n: Complex, sine: Array) -> Complex:
    return np.sqrt(n**2 - sine**2) if np.any(sine) else n


@dataclass(frozen=True)
class Absorption:
    """Absorbed fraction per length in one medium, as four exponentials of depth.

    ``F(z) = top exp(-p z) + bottom exp(-p (d - z)) + 2 Re[beat exp(i x z)]``, p = 2 k Im kz and x = 2 k Re kz.

    Attributes
    ----------
    p, x : array
        1/nm.
    top, bottom : array
        1/nm, real.
    beat : complex array
        1/nm.
    decay : array
        ``exp(-p d)``, zero in the half-space.
    turn : complex array
        ``exp(i x d)``, zero in the half-space.
    """

    p: Array
    x: Array
    top: Array
    bottom: Array
    beat: Complex
    decay: Array
    turn: Complex

    def fraction(self) -> Array:
        """Absorbed fraction of the medium: the integral of F over its depth."""
        with np.errstate(divide="ignore", invalid="ignore"):
            ends = (self.top + self.bottom) * (1 - self.decay) / self.p
            beat = 2 * (self.beat * (self.turn - 1) / (1j * self.x)).real
        return np.where(self.p > 0, ends + beat, 0.0)


def absorption(field: LightField, medium: int) -> Absorption:
    """Return the absorbed profile of one medium: ``k Im(n^2) |E|^2 / kz_0`` written out.

    For p, with u the magnetic field, E has the parts ``u' / (k n^2)`` along the surface and ``sine u / n^2`` along
    the depth, and the incident flux goes as ``kz_0 / n_0^2``.
    """
    n, kz, a, b = field.n[medium], field.kz[medium], field.a[medium], field.b[medium]
    strength = 2 * field.k * n.real * n.imag / field.kz_ambient.real
    running, crossing = strength, strength
    if field.is_p:
        strength = strength * field.n_ambient.real**2 / np.abs(n) ** 4
        along, across = np.abs(kz) ** 2, field.sine**2
        running, crossing = strength * (across + along), strength * (across - along)
    is_layer = medium < len(field.decay)
    e = field.decay[medium] if is_layer else np.zeros((1, 1), dtype=complex)
    x = 2 * field.k * kz.real
    return Absorption(
        p=2 * field.k * kz.imag,
        # Beyond total reflection nothing turns; x stands in denominators.
        x=np.where(x == 0, 1e-9, x),
        top=running * np.abs(a) ** 2,
        bottom=running * np.abs(b) ** 2,
        beat=crossing * a * np.conj(b) * np.conj(e),
        decay=np.abs(e) ** 2,
        # exp(i x d) is the phase of e squared; its modulus is one however opaque the layer is.
        turn=_phase_squared(field, medium) if is_layer else np.zeros((1, 1), dtype=complex),
    )


def _phase_squared(field: LightField, medium: int) -> Complex:
    e = field.decay[medium]
    size = np.abs(e)
    unit = np.where(size > 0, e / np.where(size > 0, size, 1), 1)
    return unit * unit
