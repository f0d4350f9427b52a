"""One recursion for every scalar wave or diffusion field of a layered half-space.

In each layer ``u = A exp(-q z) + B exp(-q (d - z)) + u_p`` and
``flux = y (A exp(-q z) - B exp(-q (d - z))) + f_p`` with Re q > 0, so that no exponential grows.
At an interface flux is continuous and ``u(above) - u(below) = compliance * flux``.
The form below stays finite for a compliance of zero, an open gap and a free back surface.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from inverse.response.flaws import Flaw

__all__ = ["OPEN", "Ends", "Interfaces", "ascend", "descend", "fall", "surface_amplitude"]

Complex = NDArray[np.complex128]
Joint = tuple[Complex, Complex, Complex, Complex]

# An open interface: large against every impedance, small against overflow.
OPEN = 1e30


@dataclass(frozen=True)
class Ends:
    """Particular solution and flux at the top and bottom of a medium (bottom unused in a half-space)."""

    u_top: Complex
    f_top: Complex
    u_bottom: Complex
    f_bottom: Complex


@dataclass(frozen=True)
class Interfaces:
    """What the upward sweep leaves, from the top.

    Attributes
    ----------
    reflection, source : tuple of arrays
        R and b of ``B = R A E + b`` at the bottom of each layer.
    passed, launched : tuple of arrays
        T and v of ``A' = T A E + v`` below each interface.
    gamma, beta : tuple of arrays
        ``B E = gamma A + beta`` at the top of each medium, a half-space last (zeros).
    """

    reflection: tuple[Complex, ...]
    source: tuple[Complex, ...]
    passed: tuple[Complex, ...]
    launched: tuple[Complex, ...]
    gamma: tuple[Complex, ...]
    beta: tuple[Complex, ...]


_ZERO = np.zeros((1, 1), dtype=complex)
_ONE = np.ones((1, 1), dtype=complex)


def fall(q: Complex, thickness: NDArray[np.float64]) -> Complex:
    """Return ``exp(-q d)`` for Re q > 0, by the tangent of half the angle: a third of a complex exponential's time."""
    size = np.exp(-thickness * q.real)
    tangent = np.tan(0.5 * thickness * q.imag)
    square = tangent * tangent
    size /= 1 + square
    tangent *= -2 * size
    out = np.empty(size.shape, dtype=complex)
    np.subtract(1, square, out=square)
    np.multiply(square, size, out=out.real)
    out.imag = tangent
    return out


def ascend(
    y: Sequence[Complex],
    decay: Sequence[Complex],
    compliance: Sequence[NDArray[np.float64]],
    ends: Sequence[Ends] | None = None,
    flaws: Sequence[Flaw | None] = (),
) -> Interfaces:
    """Sweep from the half-space, or from a free back, to the top layer.

    Parameters
    ----------
    y : sequence of arrays
        Admittance of each medium, substrate last; all arrays broadcast to (sets, frequencies).
    decay : sequence of arrays
        ``exp(-q d)`` of each layer: one fewer than media, or as many where the last is free below (no flux).
    compliance : sequence of arrays
        Inverse of the interface's stiffness or conductance, 0 to `OPEN`.
    ends : sequence of Ends, optional
        Sources; without them the source terms are zero.
    flaws : sequence of Flaw or None, optional
        Of each interface, where there are sources.

    Returns
    -------
    Interfaces
    """
    gamma, beta = [_ZERO], [_ZERO]
    joints: list[Joint] = []
    if len(decay) == len(y):
        free = _ZERO if ends is None else ends[-1].f_bottom / y[-1]
        joints = [(_ONE, free, _ZERO, _ZERO)]
        gamma, beta = [decay[-1] * decay[-1]], [free * decay[-1]]
    for j in range(len(y) - 2, -1, -1):
        pair, sides = (y[j], y[j + 1]), None if ends is None else (ends[j], ends[j + 1])
        imperfect = flaws[j] if flaws else None
        if imperfect is None or sides is None:
            joint = _joint(pair, compliance[j], gamma[0], beta[0], sides)
        else:
            joint = imperfect.joint(pair, gamma[0], beta[0], sides)
        joints.insert(0, joint)
        gamma.insert(0, joint[0] * decay[j] * decay[j])
        beta.insert(0, joint[1] * decay[j])
    reflection, source, passed, launched = zip(*joints, strict=True) if joints else ((), (), (), ())
    return Interfaces(reflection, source, passed, launched, tuple(gamma), tuple(beta))


def _joint(
    y: tuple[Complex, Complex],
    compliance: NDArray[np.float64],
    gamma: Complex,
    beta: Complex,
    ends: tuple[Ends, Ends] | None,
) -> Joint:
    """Solve one interface for what its upper side sends back and its lower side is sent.

    With ``m = 1 + gamma`` and ``n = y' (1 - gamma)`` the region below has the admittance n / m, and with the
    spring n / d, ``d = m + compliance n``: one division serves every coefficient.
    """
    above, below = y
    m, n = (_ONE, below) if gamma is _ZERO else (1 + gamma, below * (1 - gamma))
    d = m + compliance * n
    seen = above * d
    share = np.reciprocal(seen + n)
    reflection, passed = (seen - n) * share, (above + above) * share
    if ends is None:
        return reflection, _ZERO, passed, _ZERO
    flux = ends[1].f_top - below * beta
    force = ends[0].f_bottom - flux
    gap = ends[0].u_bottom - ends[1].u_top - beta - compliance * flux
    return reflection, (d * force - n * gap) * share, passed, (above * gap + force) * share


def surface_amplitude(y: Complex, below: Interfaces, ends: Ends, load: Complex | float) -> Complex:
    """Return A of the top medium under a load admittance (``flux = -load * u``; 0 is free or adiabatic)."""
    gamma, beta = below.gamma[0], below.beta[0]
    if isinstance(load, float) and load == 0.0:
        return (y * beta - ends.f_top) / (y * (1 - gamma))
    return (y * beta - ends.f_top - load * (beta + ends.u_top)) / (y * (1 - gamma) + load * (1 + gamma))


def descend(
    first: Complex, decay: Sequence[Complex], below: Interfaces
) -> tuple[list[Complex], list[Complex]]:
    """Sweep down from the top medium's A and return (A, B) of every medium; B of the half-space is zero."""
    up: list[Complex] = []
    down = [first]
    for j, e in enumerate(decay):
        arriving = down[j] * e
        up.append(below.reflection[j] * arriving + below.source[j])
        down.append(below.passed[j] * arriving + below.launched[j])
    if len(below.gamma) == len(decay):
        return down[:-1], up
    return down, [*up, _ZERO]
