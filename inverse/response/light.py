"""Light in layers at normal incidence: fields, reflection and the absorbed profile."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.response.recursion import ascend, descend

__all__ = ["Absorption", "LightField", "absorption", "light_field"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class LightField:
    """Field of a unit incident wave, ``E = a exp(i k n z) + b exp(i k n (d - z))`` in each medium.

    Attributes
    ----------
    k : float
        Vacuum wavenumber, 1/nm.
    n : tuple of arrays
        Index of each medium, shape (sets or 1, 1).
    n_ambient : array
    a, b : tuple of arrays
        Amplitudes anchored at the top and bottom; b of the half-space is zero.
    decay : tuple of arrays
        ``exp(i k n d)`` of each layer.
    r : array
        Reflection coefficient at the surface.
    """

    k: float
    n: tuple[Complex, ...]
    n_ambient: Complex
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
        return np.abs(self.a[-1]) ** 2 * self.n[-1].real / self.n_ambient.real


def light_field(
    n: Sequence[Complex], thickness: Sequence[Array], wavelength: float, n_ambient: Complex
) -> LightField:
    """Solve for the light of a unit wave from the ambient.

    Parameters
    ----------
    n : sequence of arrays
        Complex index of each medium, half-space last, shape (sets or 1, 1).
    thickness : sequence of arrays
        nm, of each layer.
    wavelength : float
        Vacuum wavelength, nm.
    n_ambient : array
        Real index of the ambient.
    """
    k = 2 * np.pi / wavelength
    decay = [np.exp(1j * k * nj * d) for nj, d in zip(n, thickness, strict=False)]
    y = [-1j * nj for nj in n]
    below = ascend(y, decay, [np.zeros((1, 1))] * len(decay))
    gamma = below.gamma[0]
    surface = y[0] * (1 - gamma) / (1 + gamma)
    y0 = -1j * n_ambient
    r = (y0 - surface) / (y0 + surface)
    a, b = descend(y0 * (1 - r) / (y[0] * (1 - gamma)), y, decay, below)
    return LightField(k, tuple(n), n_ambient, tuple(a), tuple(b), tuple(decay), r)


@dataclass(frozen=True)
class Absorption:
    """Absorbed fraction per length in one medium, as four exponentials of depth.

    ``F(z) = top exp(-p z) + bottom exp(-p (d - z)) + 2 Re[beat exp(i x z)]``,
    p = 2 k n'' and x = 2 k n'.

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
    """Return the absorbed profile of one medium: ``2 k n' n'' |E|^2 / n_0`` written out."""
    n, a, b = field.n[medium], field.a[medium], field.b[medium]
    strength = 2 * field.k * n.real * n.imag / field.n_ambient.real
    is_layer = medium < len(field.decay)
    e = field.decay[medium] if is_layer else np.zeros((1, 1), dtype=complex)
    return Absorption(
        p=2 * field.k * n.imag,
        x=2 * field.k * n.real,
        top=strength * np.abs(a) ** 2,
        bottom=strength * np.abs(b) ** 2,
        beat=strength * a * np.conj(b) * np.conj(e),
        decay=np.abs(e) ** 2,
        # exp(i x d) is the phase of e squared; its modulus is one however opaque the layer is.
        turn=_phase_squared(field, medium) if is_layer else np.zeros((1, 1), dtype=complex),
    )


def _phase_squared(field: LightField, medium: int) -> Complex:
    e = field.decay[medium]
    size = np.abs(e)
    unit = np.where(size > 0, e / np.where(size > 0, size, 1), 1)
    return unit * unit
