"""How a change of index anywhere in the sample reaches a detector: of the reflected or of the transmitted light.

To first order a change of the index by dn(z) changes the coefficient c, r or t, by

    delta c / c = sum of (i k n / (kz' c)) * integral of dn u v dz

for s, u being the field of a unit wave from the ambient and v that of a unit wave from where the detector stands: the
ambient again for r, the substrate for t; kz' belongs to the medium that v comes from. For p, u and v are magnetic
fields and the product is

    (u' v' / k^2 + sine^2 u v) / n^4,    times n^2 of the medium that v comes from,

so that parts of u v which run through the medium and parts which stand in it have factors of their own. A boundary that
moves by w changes c by the jump of the same density, with the fields that are continuous there.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.response.light import LightField, reversed_field

__all__ = ["Overlap", "Port", "reflection", "transmission"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class Overlap:
    """Weight of an index change: ``forth exp(g z) + back exp(g (d - z)) + still``, g = 2 i k kz, decay = exp(g d)."""

    g: Complex
    decay: Complex
    forth: Complex
    back: Complex
    still: Complex


@dataclass(frozen=True)
class Port:
    """What a detector sees.

    Attributes
    ----------
    media : tuple of Overlap
        Of every medium, the half-space last.
    ambient : Overlap
        Above the surface, ``forth exp(g z) + back exp(-g z) + still`` for z < 0.
    steps : tuple of arrays
        Complex factor of the displacement of the surface and of each interface, 1/nm.
    """

    media: tuple[Overlap, ...]
    ambient: Overlap
    steps: tuple[Complex, ...]


def reflection(light: LightField) -> Port:
    """Return the port of the reflected light."""
    return _port(light, light, light.kz_ambient, light.n_ambient, light.r, (1.0, light.r))


def transmission(light: LightField, thickness: Sequence[Array]) -> Port:
    """Return the port of the light transmitted into the half-space, which is transparent or thin."""
    back = reversed_field(light, thickness)
    return _port(light, back, light.kz[-1], light.n[-1], light.a[-1], (0.0, back.r))


def _port(
    light: LightField,
    other: LightField,
    kz: Complex,
    n: Complex,
    coefficient: Complex,
    above: tuple[Complex | float, Complex | float],
) -> Port:
    scale = 1j * light.k / (kz * coefficient) * (n**2 if light.is_p else 1)
    media = tuple(_overlap(light, other, j, scale) for j in range(len(light.n)))
    run, stand = _factors(light, light.n_ambient)
    weight = scale * light.n_ambient
    ambient = Overlap(
        g=2j * light.k * light.kz_ambient,
        decay=np.zeros((1, 1), dtype=complex),
        forth=weight * run * above[0],
        back=weight * run * light.r * above[1],
        still=weight * stand * (above[1] + light.r * above[0]),
    )
    return Port(media, ambient, tuple(_steps(light, other, scale)))


def _factors(light: LightField, n: Complex) -> tuple[Complex | float, Complex | float]:
    """Factors of the running and the standing parts of u v."""
    if not light.is_p:
        return 1.0, 1.0
    return (2 * light.sine**2 - n**2) / n**4, 1 / n**2


def _overlap(light: LightField, other: LightField, medium: int, scale: Complex) -> Overlap:
    n, layer = light.n[medium], medium < len(light.decay)
    e = light.decay[medium] if layer else np.zeros((1, 1), dtype=complex)
    a, b, c, d = light.a[medium], light.b[medium], other.a[medium], other.b[medium]
    run, stand = _factors(light, n)
    # The half-space's own wave upwards starts at its top: there is no way through to wait for.
    standing = (a * d + b * c) * (e if layer else 1)
    return Overlap(
        g=2j * light.k * light.kz[medium],
        decay=e * e,
        forth=scale * n * run * a * c,
        back=scale * n * run * b * d,
        still=scale * n * stand * standing,
    )


def _steps(light: LightField, other: LightField, scale: Complex) -> list[Complex]:
    above, steps = light.n_ambient, []
    for j, (n, kz) in enumerate(zip(light.n, light.kz, strict=True)):
        layer = j < len(light.decay)
        e = light.decay[j] if layer else np.ones((1, 1), dtype=complex)
        u, v = light.a[j] + light.b[j] * e, other.a[j] + other.b[j] * e
        if light.is_p:
            slopes = (light.a[j] - light.b[j] * e) * (other.a[j] - other.b[j] * e) * (kz / n**2) ** 2
            density = -(above**2 - n**2) * slopes - (1 / above**2 - 1 / n**2) * light.sine**2 * u * v
        else:
            density = (above**2 - n**2) * u * v
        steps.append(scale / 2 * density)
        above = n
    return steps
