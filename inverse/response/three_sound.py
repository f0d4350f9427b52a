"""Sound with three displacement components: anisotropic layers at any orientation.

``rho s^2 u = (C u' - S)'`` with C the Christoffel matrix c_{i3k3} along the depth and S_i3 the thermal stress, tension
positive. The eigenvectors of C decouple a layer into one quasi-longitudinal and two quasi-transverse waves, each of
which obeys the scalar equation; interfaces couple them again (see `blocks`).

Loss multiplies every component of C by the scalar law's factor: all waves of a medium are damped alike per cycle.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.response.blocks import BlockEnds, ascend_blocks, descend_blocks, surface_amplitudes
from inverse.response.heat import HeatField
from inverse.response.light import Absorption
from inverse.response.media import Ambient, Medium, layers
from inverse.response.recursion import Ends
from inverse.response.solids import DepthElastic
from inverse.response.sound import Launched, SoundField, launched, modulus, off_resonance

__all__ = ["ThreeSound", "three_sound_field"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_NONE = np.zeros((1, 1), dtype=complex)


@dataclass(frozen=True)
class ThreeSound:
    """Displacement of one medium as three waves.

    Attributes
    ----------
    modes : tuple of SoundField
        Fast to slow; each holds the wave's own amplitude along its polarisation.
    polarisation : array, shape (sets or 1, 3, 3)
        Unit vectors (x, y, z of the sample) as columns, in the order of `modes`.
    photoelastic : array, shape (sets or 1, 3)
        See `DepthElastic`.
    """

    modes: tuple[SoundField, SoundField, SoundField]
    polarisation: Array
    photoelastic: Array

    def component(self, axis: int) -> tuple[Array, Array, Array]:
        """Return the weights, shape (sets or 1, 1), with which the modes enter a displacement component."""
        a, b, c = (self.polarisation[:, axis, mode, None] for mode in range(3))
        return a, b, c

    def seen(self) -> tuple[Array, Array, Array]:
        """Return the weights, shape (sets or 1, 1), with which the strains of the modes change the index."""
        row = (self.photoelastic[:, None, :] @ self.polarisation)[:, 0]
        return row[:, 0, None], row[:, 1, None], row[:, 2, None]

    def at_top(self, axis: int) -> Complex:
        """Return a displacement component at the top, nm."""
        a, b, c = self.component(axis)
        first, second, third = self.modes
        return a * first.u_top + b * second.u_top + c * third.u_top

    def at_bottom(self, axis: int) -> Complex:
        """Return a displacement component at the bottom, nm."""
        a, b, c = self.component(axis)
        first, second, third = self.modes
        return a * first.u_bottom + b * second.u_bottom + c * third.u_bottom

    @property
    def u_top(self) -> Complex:
        """Displacement along the depth at the top, nm: what moves a boundary for light at normal incidence."""
        return self.at_top(2)

    @property
    def u_bottom(self) -> Complex:
        """Displacement along the depth at the bottom, nm."""
        return self.at_bottom(2)


def three_sound_field(
    media: Sequence[Medium],
    solids: Sequence[DepthElastic],
    compliance: Sequence[Array],
    ambient: Ambient,
    profiles: Sequence[Absorption],
    heat: Sequence[HeatField],
    s: Complex,
    powers: Callable[[Array], Complex],
    source: Complex = _NONE,
) -> list[ThreeSound]:
    """Solve for the displacement of every medium.

    Parameters
    ----------
    media : sequence of Medium
        Coherent units; their velocity and stress are not used. A last layer is free below.
    solids : sequence of DepthElastic
        One per medium.
    compliance : sequence of arrays, shape (sets or 1, 1, 3)
        One per interface, from `interface_compliance`.
    ambient, profiles, heat, s, powers, source
        As in `inverse.response.sound.sound_field`.

    Returns
    -------
    list of ThreeSound
        From the top, a half-space last.
    """
    waves = [_waves(m, solid) for m, solid in zip(media, solids, strict=True)]
    polarisation = [w.polarisation for w in waves]
    scalars = [
        [_scalar(m, f, h, s, powers, source) for m in w.media]
        for w, f, h in zip(waves, profiles, heat, strict=True)
    ]
    y = [_modal([one.y for one in three]) for three in scalars]
    decay = [_modal([one.decay for one in three]) for three, _ in zip(scalars, layers(media), strict=False)]
    ends = [_block_ends([one.made.ends for one in three]) for three in scalars]
    modes = [p[:, None] for p in polarisation]
    below = ascend_blocks(y, decay, modes, compliance, ends)
    first = surface_amplitudes(y[0], modes[0], below, ends[0], _load(ambient, s))
    down, up = descend_blocks(first, y, decay, modes, below, ends)
    return [
        ThreeSound(_fields(three, a, b), p, solid.photoelastic)
        for three, a, b, p, solid in zip(scalars, down, up, polarisation, solids, strict=True)
    ]


@dataclass(frozen=True)
class _Waves:
    """The three waves of a medium as media of scalar sound, and their polarisations."""

    media: tuple[Medium, Medium, Medium]
    polarisation: Array


@dataclass(frozen=True)
class _Scalar:
    """One wave of one medium, before its amplitudes are known."""

    q: Complex
    y: Complex
    decay: Complex
    made: Launched


def _waves(m: Medium, solid: DepthElastic) -> _Waves:
    moduli, vectors = np.linalg.eigh(solid.stiffness)
    moduli, vectors = moduli[..., ::-1], vectors[..., ::-1]
    stress = (np.swapaxes(vectors, -1, -2) @ solid.stress[..., None])[..., 0]
    first, second, third = (
        replace(
            _along(m, vectors[:, 2, k, None]),
            velocity=np.sqrt(moduli[:, k, None] / m.density),
            stress=stress[:, k, None],
        )
        for k in range(3)
    )
    return _Waves((first, second, third), vectors)


def _along(m: Medium, depth: Array) -> Medium:
    """Take the part along a wave's polarisation of the stresses that act along the depth only."""
    carriers, initial = m.carriers, m.initial
    return replace(
        m,
        electron_stress=m.electron_stress * depth,
        carriers=None if carriers is None else replace(carriers, stress=carriers.stress * depth),
        initial=None if initial is None else replace(initial, stress=initial.stress * depth),
    )


def _scalar(
    m: Medium, f: Absorption, heat: HeatField, s: Complex, powers: Callable[[Array], Complex], source: Complex
) -> _Scalar:
    c = off_resonance(m, modulus(m, s), f, heat.q, s)
    slow = np.sqrt(m.density / c)
    q = s * slow
    return _Scalar(
        q=q,
        y=s * np.sqrt(m.density * c),
        decay=_decay(m.thickness, slow, q, powers),
        made=launched(m, c, f, heat, s, source),
    )


def _decay(thickness: Array, slow: Complex, q: Complex, powers: Callable[[Array], Complex]) -> Complex:
    if np.all(np.isinf(thickness)):
        return np.zeros((1, 1), dtype=complex)
    return powers(slow.real * thickness) if slow.shape[1] == 1 else np.exp(-q * thickness)


def _modal(three: Sequence[Complex]) -> Complex:
    return np.stack(np.broadcast_arrays(*three), axis=-1)


def _block_ends(three: Sequence[Ends]) -> BlockEnds:
    return BlockEnds(
        u_top=_modal([e.u_top for e in three]),
        f_top=_modal([e.f_top for e in three]),
        u_bottom=_modal([e.u_bottom for e in three]),
        f_bottom=_modal([e.f_bottom for e in three]),
    )


def _load(ambient: Ambient, s: Complex) -> Complex:
    """Admittance of a liquid, which holds on to the normal component only; zero without one."""
    if ambient.density is None or ambient.velocity is None:
        return np.zeros((1, 1, 3), dtype=complex)
    normal = s * (ambient.density * ambient.velocity)
    return np.stack([0 * normal, 0 * normal, normal], axis=-1)


def _fields(
    three: Sequence[_Scalar], down: Complex, up: Complex
) -> tuple[SoundField, SoundField, SoundField]:
    a, b, c = (_field(one, down[..., k], up[..., k]) for k, one in enumerate(three))
    return a, b, c


def _field(one: _Scalar, a: Complex, b: Complex) -> SoundField:
    e, end = one.decay, one.made.ends
    return SoundField(
        *(one.q, e, a, b),
        *one.made.parts,
        u_top=a + b * e + end.u_top,
        u_bottom=a * e + b + end.u_bottom,
        paired=one.made.paired,
    )
