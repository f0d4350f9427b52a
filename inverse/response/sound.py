"""Longitudinal sound launched by thermal stress, in the Laplace domain, with compliant interfaces and causal loss.

``rho s^2 u = (c u' - S)'`` with S the thermal stress, tension positive; flux is minus the stress.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from inverse.response.carriers import Diffusing, Pairs
from inverse.response.flaws import Imperfection, flaw, under_a_rough_surface
from inverse.response.heat import HeatField
from inverse.response.light import Absorption
from inverse.response.media import Ambient, Medium, anchored, layers
from inverse.response.recursion import Ends, ascend, descend, surface_amplitude
from inverse.response.sums import weight_rows, weighted_sum

__all__ = ["Launched", "SoundField", "launched", "modulus", "off_resonance", "sound_field"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_ONE = np.ones((1, 1), dtype=complex)

_NONE = np.zeros((1, 1), dtype=complex)


@dataclass(frozen=True)
class SoundField:
    """Displacement of one medium.

    ``u = down exp(-q z) + up exp(-q (d - z)) + u_p``. The particular solution follows the thermal stress:
    a stress exponential ``S exp(p z)`` gives the strain ``S p^2 g exp(p z)``, ``g = 1 / (c p^2 - rho s^2)``.
    ``hot``, ``steep`` and ``beat`` are p^2 g times the stress per temperature of the heat's three parts.

    Attributes
    ----------
    q, decay : array
        1/nm and ``exp(-q d)``.
    down, up : array
        Homogeneous amplitudes, nm.
    hot, steep, beat : array
        Strain of the diffusing heat per ``HeatField.down`` and ``up``, and of the absorbed profile's two parts.
    paired : array
        Strain per second part of the heat: photo-carriers, or the quick wave of hot electrons.
    u_top, u_bottom : array
        Total displacement at both ends, nm (bottom: zero in the half-space).
    """

    q: Complex
    decay: Complex
    down: Complex
    up: Complex
    hot: Complex
    steep: Complex
    beat: Complex
    u_top: Complex
    u_bottom: Complex
    paired: Complex = field(default_factory=lambda: _NONE)


@dataclass(frozen=True)
class Launched:
    """What follows heat and light in one medium: `SoundField`'s hot, steep and beat, its paired, and the ends."""

    parts: tuple[Complex, Complex, Complex]
    paired: Complex
    ends: Ends


def modulus(m: Medium, s: Complex) -> Complex:
    """Return the complex modulus c(s) in GPa: power-law loss, or constant Q above w0 and none below.

    ``rho v^2 (1 + (s t)^y)`` (Kelvin-Voigt for y = 1) or ``rho v^2 (1 + (s / w0)^2)^theta``,
    theta = arctan(1/Q)/pi, which is ``(s / w0)^(2 theta)`` for s far above w0 and analytic for Re s > 0, as
    causality demands: a switch at w0 would ring at all times.
    """
    c = (m.density * m.velocity**2).astype(complex)
    if np.any(m.loss_time):
        c = c * (1 + (s * m.loss_time) ** m.loss_exponent)
    if np.any(m.inverse_quality):
        c = c * (1 + (s / m.quality_frequency) ** 2) ** (np.arctan(m.inverse_quality) / np.pi)
    return c


def sound_field(
    media: Sequence[Medium],
    compliance: Sequence[Array],
    ambient: Ambient,
    profiles: Sequence[Absorption],
    heat: Sequence[HeatField],
    s: Complex,
    powers: Callable[[Array], Complex],
    imperfections: Sequence[Imperfection] = (),
    source: Complex = _NONE,
    surface_roughness: Array | None = None,
) -> list[SoundField]:
    """Solve for the displacement of every medium.

    Parameters
    ----------
    media, compliance, ambient
        The sample, coherent units; a last layer is free below.
    profiles, heat
        Light and heat of each medium.
    s : complex array, shape (1, frequencies)
        Laplace variable.
    powers : callable
        ``powers(t)`` is ``exp(-s t)`` for t of shape (sets, 1), cheap on the uniform grid.
    imperfections : sequence of Imperfection, optional
        Of each interface.
    source : complex array, optional
        Transform of the pulse, where it sets up a stress of its own.
    surface_roughness : array, optional
        Rms, nm.
    """
    c = [off_resonance(m, modulus(m, s), f, h.q, s) for m, f, h in zip(media, profiles, heat, strict=True)]
    lossless = [cj.shape[1] == 1 for cj in c]
    slow = [np.sqrt(m.density / cj) for m, cj in zip(media, c, strict=True)]
    q = [s * sl for sl in slow]
    y = [s * np.sqrt(m.density * cj) for m, cj in zip(media, c, strict=True)]
    decay = [
        powers(sl.real * m.thickness) if plain else np.exp(-qj * m.thickness)
        for sl, qj, m, plain in zip(slow, q, layers(media), lossless, strict=False)
    ]
    made = [launched(*group, s, source) for group in zip(media, c, profiles, heat, strict=True)]
    ends = [one.ends for one in made]
    flaws = [
        flaw(given, k, s, above, lower)
        for given, k, above, lower in zip(imperfections, compliance, q, q[1:], strict=False)
    ]
    below = ascend(y, decay, compliance, ends, flaws)
    load: Complex | float = 0.0
    if ambient.density is not None and ambient.velocity is not None:
        load = s * (ambient.density * ambient.velocity)
    seen = under_a_rough_surface(below, q[0], surface_roughness)
    down, up = descend(surface_amplitude(y[0], seen, ends[0], load), decay, below)
    return [
        SoundField(
            *(qj, e, a, b),
            *one.parts,
            a + b * e + one.ends.u_top,
            a * e + b + one.ends.u_bottom,
            one.paired,
        )
        for qj, e, a, b, one in zip(q, anchored(decay, media), down, up, made, strict=True)
    ]


def launched(
    m: Medium, c: Complex, f: Absorption, heat: HeatField, s: Complex, source: Complex = _NONE
) -> Launched:
    """Solve for what follows heat and light in a medium of complex modulus c; arguments as of `sound_field`."""
    inertia = m.density * s**2
    parts = _particular(m, c, inertia, f, heat)
    paired = _paired(m, c, inertia, heat)
    ends = _with_pairs(_particular_ends(f, heat, parts, inertia), heat.second, paired, inertia)
    return Launched(parts, paired, _with_initial(ends, m, s, source))


def off_resonance(m: Medium, c: Complex, f: Absorption, diffusing: Complex, s: Complex) -> Complex:
    """Move the modulus by 2e-6 where light or diffusing heat is as steep as sound at the real frequency."""
    inertia, first = m.density * s[:, :1].real ** 2, c[:, :1].real
    close = np.abs(first * f.p**2 - inertia) < 1e-6 * inertia
    close = close | (np.abs(first * diffusing[:, :1].real ** 2 - inertia) < 1e-6 * inertia)
    return np.where(close, c * (1 + 2e-6), c) if np.any(close) else c


def _particular(
    m: Medium, c: Complex, inertia: Complex, f: Absorption, heat: HeatField
) -> tuple[Complex, Complex, Complex]:
    """Return p^2 g times the thermal stress of the diffusing, exponential and interference parts."""
    lattice, on_steep, on_beat = heat.ratios
    stress = m.stress * lattice + m.electron_stress
    q2, p2, x2 = heat.q * heat.q, f.p**2, -(f.x**2)
    hot = stress * q2 / (c * q2 - inertia)
    if heat.of_light is None:
        steep, beat = heat.steep * stress, heat.beat * stress
    else:
        steep = heat.steep * (m.stress * on_steep + m.electron_stress)
        beat = heat.beat * (m.stress * on_beat + m.electron_stress)
    if m.carriers is not None and isinstance(heat.second, Pairs):
        steep = steep + m.carriers.stress * heat.second.steep
        beat = beat + m.carriers.stress * heat.second.beat
    return hot, steep * (p2 / (c * p2 - inertia)), beat * (x2 / (c * x2 - inertia))


def _paired(m: Medium, c: Complex, inertia: Complex, heat: HeatField) -> Complex:
    """Return the strain per second part of the heat, by its own stress and the lattice's heat that goes with it."""
    if heat.second is None:
        return _NONE
    own = m.electron_stress if m.carriers is None else m.carriers.stress
    q2 = heat.second.q * heat.second.q
    return (m.stress * heat.second_heat + own) * q2 / (c * q2 - inertia)


def _with_pairs(end: Ends, pairs: Diffusing | None, paired: Complex, inertia: Complex) -> Ends:
    """Add displacement and flux of the strain that the second part of the heat makes."""
    if pairs is None:
        return end
    u = paired / pairs.q
    f = -inertia * u / pairs.q
    down_top, down_bottom, up_top, up_bottom = pairs.ends
    return Ends(
        u_top=end.u_top + u * (up_top - down_top),
        f_top=end.f_top + f * (down_top + up_top),
        u_bottom=end.u_bottom + u * (up_bottom - down_bottom),
        f_bottom=end.f_bottom + f * (down_bottom + up_bottom),
    )


def _particular_ends(
    f: Absorption, heat: HeatField, parts: tuple[Complex, Complex, Complex], inertia: Complex
) -> Ends:
    """Particular displacement (strain / p) and flux (-inertia strain / p^2) at both ends."""
    hot, steep, beat = parts
    inverse_q = 1 / heat.q
    hot_u = hot * inverse_q
    hot_f = hot_u * inverse_q
    ends = weighted_sum(_end_weights(f), (steep, _ONE), (beat, _ONE))
    up_top, down_bottom = heat.up * heat.decay, heat.down * heat.decay
    return Ends(
        u_top=ends[:, 0] + hot_u * (up_top - heat.down),
        f_top=(ends[:, 1] - hot_f * (up_top + heat.down)) * inertia,
        u_bottom=ends[:, 2] + hot_u * (heat.up - down_bottom),
        f_bottom=(ends[:, 3] - hot_f * (heat.up + down_bottom)) * inertia,
    )


def _with_initial(end: Ends, m: Medium, s: Complex, source: Complex) -> Ends:
    """Add the flux of a uniform stress: it pushes at the ends only."""
    if m.initial is None:
        return end
    stress = m.initial.stress * source / (s + m.initial.rate)
    return replace(end, f_top=end.f_top + stress, f_bottom=end.f_bottom + stress)


def _end_weights(f: Absorption) -> Array:
    """Weights of the exponential and the interference part in displacement and flux over inertia, top and bottom.

    A transparent medium absorbs nothing: its profile is zero and so is what it launches.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        per_p = np.where(f.p > 0, 1 / f.p, 0.0)
    end = f.beat * f.turn
    return weight_rows(
        (per_p * (f.bottom * f.decay - f.top), 2 * f.beat.imag / f.x),
        (-(per_p**2) * (f.top + f.bottom * f.decay), 2 * f.beat.real / f.x**2),
        (per_p * (f.bottom - f.top * f.decay), 2 * end.imag / f.x),
        (-(per_p**2) * (f.top * f.decay + f.bottom), 2 * end.real / f.x**2),
    )
