"""Three displacement components in time by finite differences: nodes that move, cells that strain, leapfrog.

Shares no equation with the library's recursion: no modes, no exponentials, no Laplace variable. Every cell's
stress is C times its strain less the thermal stress; a spring joins two nodes at a compliant joint. Second
order in mesh and step. Coherent units (nm, ps, g/cm3, GPa, K).
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.float64]


@dataclass(frozen=True)
class Slab:
    """A uniform layer cut into `cells`; `stiffness` is c_i3k3 along the sample's axes, shape (3, 3).

    `heated` (thermal stress S_i3 by depth in the slab and time, to be multiplied by `stress`) is None where
    cold. `spring` is the stiffness (GPa/nm) of the joint below by component, None where welded.
    """

    thickness: float
    cells: int
    density: float
    stiffness: Real
    stress: Real
    profile: Callable[[Real], Real] | None = None
    spring: Real | None = None


@dataclass(frozen=True)
class _Mesh:
    inverse_mass: Real  # per node, nm2/(GPa ps2) per area
    rigidity: Real  # (cells, 3, 3), GPa/nm
    hot: Real  # (cells, 3), GPa per unit of the history
    upper: NDArray[np.intp]  # node above each cell


def _mesh(slabs: list[Slab]) -> tuple[_Mesh, list[tuple[int, Real]], float]:
    mass: list[float] = [0.0]
    rigidity, hot, upper, springs, fastest = [], [], [], [], np.inf
    for slab in slabs:
        h = slab.thickness / slab.cells
        middle = (np.arange(slab.cells) + 0.5) * h
        profile = np.zeros(slab.cells) if slab.profile is None else slab.profile(middle)
        for i in range(slab.cells):
            upper.append(len(mass) - 1)
            mass[-1] += slab.density * h / 2
            mass.append(slab.density * h / 2)
            rigidity.append(slab.stiffness / h)
            hot.append(profile[i] * slab.stress)
        fastest = min(fastest, h / np.sqrt(np.linalg.eigvalsh(slab.stiffness)[-1] / slab.density))
        if slab.spring is not None:
            springs.append((len(mass) - 1, slab.spring))
            mass.append(0.0)
    arrays = _Mesh(1 / np.array(mass)[:, None], np.array(rigidity), np.array(hot), np.array(upper))
    return arrays, springs, fastest


def surface_motion(
    slabs: list[Slab], history: Callable[[float], float], start: float, stop: float
) -> tuple[Real, Real]:
    """March from rest at `start`; times (steps,) and displacement of the free surface (steps, 3) in nm.

    The last slab ends rigidly or freely as it may: make it long enough that nothing returns by `stop`.
    """
    mesh, springs, fastest = _mesh(slabs)
    step = 0.6 * fastest
    u = np.zeros((len(mesh.inverse_mass), 3))
    velocity = np.zeros_like(u)
    times = np.arange(start, stop, step)
    out = np.empty((len(times), 3))
    for i, t in enumerate(times):
        out[i] = u[0]
        strain = u[mesh.upper + 1] - u[mesh.upper]
        stress = np.einsum("cij,cj->ci", mesh.rigidity, strain) - history(t) * mesh.hot
        force = np.zeros_like(u)
        force[mesh.upper] += stress
        force[mesh.upper + 1] -= stress
        for node, spring in springs:
            pull = spring * (u[node + 1] - u[node])
            force[node] += pull
            force[node + 1] -= pull
        velocity += step * force * mesh.inverse_mass
        u += step * velocity
    return times, out
