"""Heat and carriers: finite volumes in space, Crank-Nicolson in time, second order in both.

Each step solves (C + (dt/2) L) T_middle = C T + (dt/2) P and ends at 2 T_middle - T. The pulse is smooth in
time and the run starts from nothing, so Crank-Nicolson's undamped short waves are never excited and no
damping start is needed.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_solve_banded, cholesky_banded

from .samples import Index, Mesh, Real, Sample, add_links, per_cell


@dataclass(frozen=True)
class Heat:
    """Capacity (GPa nm/K) of each unknown, the factored matrix, and where each cell's unknowns stand.

    `hot` is the temperature that takes up the light (electrons', or the only one), `lattice` the lattice's;
    they are the same unknown in a cell with one temperature.
    """

    capacity: Real
    factor: Real
    half_step: float
    hot: Index
    lattice: Index


def _series_conductance(mesh: Mesh, conductivity: Real, interface: Real) -> Real:
    """Between centres of neighbouring cells: two half cells and the interface in series."""
    with np.errstate(divide="ignore"):
        resistance = mesh.width / (2 * conductivity)
        return 1 / (resistance[:-1] + resistance[1:] + 1 / interface)


def _at_joints(mesh: Mesh, values: list[float]) -> Real:
    """Interface conductance between neighbouring cells: infinite inside a medium."""
    conductance = np.full(len(mesh.width) - 1, np.inf)
    conductance[mesh.joints - 1] = values
    return conductance


def assemble_heat(sample: Sample, mesh: Mesh, step: float) -> Heat:
    """Light heats the electrons, which exchange g (T_e - T_l) with their lattice.

    A boundary conductance joins the hot temperatures of its two sides; lattices conduct inside one medium
    only.
    """
    two = np.array([m.two_temperatures for m in sample.media])[mesh.medium]
    hot = np.arange(len(two)) + np.cumsum(two) - two
    lattice = hot + two
    capacity = np.zeros(lattice[-1] + 1)
    capacity[hot] = mesh.width * per_cell(sample, mesh, "electron_heat_capacity")
    capacity[lattice] += mesh.width * per_cell(sample, mesh, "heat_capacity")

    matrix = np.zeros((3, len(capacity)))
    joints = _at_joints(mesh, [joint.conductance for joint in sample.joints])
    through_hot = _series_conductance(mesh, per_cell(sample, mesh, "conductivity"), joints)
    add_links(matrix, hot[:-1], hot[1:], through_hot)
    both = two[:-1] & two[1:]
    closed = _at_joints(mesh, [0.0] * len(sample.joints))
    through_lattice = _series_conductance(mesh, per_cell(sample, mesh, "lattice_conductivity"), closed)
    add_links(matrix, lattice[:-1][both], lattice[1:][both], through_lattice[both])
    coupling = mesh.width[two] * per_cell(sample, mesh, "electron_phonon_coupling")[two]
    add_links(matrix, hot[two], lattice[two], coupling)
    matrix *= step / 2
    matrix[0] += capacity
    return Heat(capacity, cholesky_banded(matrix, lower=True), step / 2, hot, lattice)


def middle_temperature(heat: Heat, temperature: Real, power: Real) -> Real:
    """Temperatures (K) half a step on, under `power` (GPa nm/ps) into each unknown."""
    right = heat.capacity * temperature + heat.half_step * power
    return cho_solve_banded((heat.factor, True), right, overwrite_b=True, check_finite=False)


@dataclass(frozen=True)
class Carriers:
    """Cell `width`, factored matrix, and what light makes and recombination gives back.

    `made` pairs per absorbed energy (1 / GPa nm^3), `prompt` fraction of it straight to the lattice,
    `returned` heat per pair density (GPa nm/ps per 1/nm^3) in each cell.
    """

    width: Real
    factor: Real
    half_step: float
    made: Real
    prompt: Real
    returned: Real


def assemble_carriers(sample: Sample, mesh: Mesh, step: float) -> Carriers:
    """N_t = D N'' - N / lifetime + source; at a medium's top boundary D N' = surface_recombination N."""
    energy, diffusivity = (per_cell(sample, mesh, name) for name in ("carrier_energy", "carrier_diffusivity"))
    loss = mesh.width / per_cell(sample, mesh, "carrier_lifetime")
    top = np.append(0, mesh.joints)
    with np.errstate(divide="ignore"):
        velocity = per_cell(sample, mesh, "surface_recombination")[top]
        loss[top] += 1 / (1 / velocity + mesh.width[top] / (2 * diffusivity[top]))
    matrix = np.zeros((2, len(energy)))
    cell = np.arange(len(energy))
    closed = _at_joints(mesh, [0.0] * len(sample.joints))
    add_links(matrix, cell[:-1], cell[1:], _series_conductance(mesh, diffusivity, closed))
    matrix[0] += loss
    matrix *= step / 2
    matrix[0] += mesh.width
    prompt = np.where(energy > 0, per_cell(sample, mesh, "prompt_heat"), 1.0)
    made = np.divide(1.0, energy, out=np.zeros(len(energy)), where=energy > 0)
    returned = loss * energy * (1 - prompt)
    return Carriers(mesh.width, cholesky_banded(matrix, lower=True), step / 2, made, prompt, returned)


def middle_carriers(carriers: Carriers, density: Real, power: Real) -> Real:
    """Pair densities (1/nm^3) half a step on, under absorbed `power` (GPa nm/ps) in each cell."""
    right = carriers.width * density + carriers.half_step * carriers.made * power
    return cho_solve_banded((carriers.factor, True), right, overwrite_b=True, check_finite=False)
