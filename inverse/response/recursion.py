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

__all__ = ["OPEN", "Ends", "Interfaces", "ascend", "descend", "surface_amplitude"]

Complex = NDArray[np.complex128]

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
    """What the upward sweep leaves: per layer from the top, reflection seen below and source term.

    Attributes
    ----------
    reflection, source : tuple of arrays
        R and b of ``B = R A E + b`` at the bottom of each layer.
    gamma, beta : tuple of arrays
        ``B E = gamma A + beta`` at the top of each medium, a half-space last (zeros).
    """

    reflection: tuple[Complex, ...]
    source: tuple[Complex, ...]
    gamma: tuple[Complex, ...]
    beta: tuple[Complex, ...]


_ZERO = np.zeros((1, 1), dtype=complex)
_ONE = np.ones((1, 1), dtype=complex)


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
    reflection: list[Complex] = []
    source: list[Complex] = []
    if len(decay) == len(y):
        free = _ZERO if ends is None else ends[-1].f_bottom / y[-1]
        reflection, source = [_ONE], [free]
        gamma, beta = [decay[-1] * decay[-1]], [free * decay[-1]]
    for j in range(len(y) - 2, -1, -1):
        if ends is not None and flaws and (imperfect := flaws[j]) is not None:
            r, b = imperfect.ascend((y[j], y[j + 1]), gamma[0], beta[0], (ends[j], ends[j + 1]))
            reflection.insert(0, r)
            source.insert(0, b)
            gamma.insert(0, r * decay[j] * decay[j])
            beta.insert(0, b * decay[j])
            continue
        below = y[j + 1] if gamma[0] is _ZERO else y[j + 1] * (1 - gamma[0]) / (1 + gamma[0])
        shared = 1 / (1 + compliance[j] * below)
        w = below * shared
        inverse = np.reciprocal(y[j] + w)
        reflection.insert(0, (y[j] - w) * inverse)
        if ends is None:
            b = _ZERO
        else:
            u0 = ends[j + 1].u_top + beta[0]
            f0 = ends[j + 1].f_top - y[j + 1] * beta[0]
            b = (ends[j].f_bottom - w * (ends[j].u_bottom - u0) - f0 * shared) * inverse
        source.insert(0, b)
        gamma.insert(0, reflection[0] * decay[j] * decay[j])
        beta.insert(0, b * decay[j])
    return Interfaces(tuple(reflection), tuple(source), tuple(gamma), tuple(beta))


def surface_amplitude(y: Complex, below: Interfaces, ends: Ends, load: Complex | float) -> Complex:
    """Return A of the top medium under a load admittance (``flux = -load * u``; 0 is free or adiabatic)."""
    gamma, beta = below.gamma[0], below.beta[0]
    if isinstance(load, float) and load == 0.0:
        return (y * beta - ends.f_top) / (y * (1 - gamma))
    return (y * beta - ends.f_top - load * (beta + ends.u_top)) / (y * (1 - gamma) + load * (1 + gamma))


def descend(
    first: Complex,
    y: Sequence[Complex],
    decay: Sequence[Complex],
    below: Interfaces,
    ends: Sequence[Ends] | None = None,
    flaws: Sequence[Flaw | None] = (),
) -> tuple[list[Complex], list[Complex]]:
    """Sweep down from the top medium's A and return (A, B) of every medium; B of the half-space is zero."""
    up: list[Complex] = []
    down = [first]
    for j, e in enumerate(decay):
        arriving = down[j] * e
        up.append(below.reflection[j] * arriving + below.source[j])
        if j == len(y) - 1:
            return down, up
        if ends is not None and flaws and (imperfect := flaws[j]) is not None:
            pair, sides = (y[j], y[j + 1]), (ends[j], ends[j + 1])
            b, gamma, beta = below.source[j], below.gamma[j + 1], below.beta[j + 1]
            down.append(imperfect.descend(arriving, b, pair, gamma, beta, sides))
            continue
        flux = y[j] * (arriving - up[j])
        if ends is not None:
            flux = flux + ends[j].f_bottom - ends[j + 1].f_top + y[j + 1] * below.beta[j + 1]
        down.append(flux / (y[j + 1] * (1 - below.gamma[j + 1])))
    up.append(_ZERO)
    return down, up
