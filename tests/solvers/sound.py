"""Sound by the box scheme: linear elements, mass taken at the middle of each, implicit midpoint in time.

Second order in step and mesh, unconditionally stable, and without loss it keeps the energy to rounding. In
cells of one time step's travel it is d'Alembert's solution itself: sigma + Z w and sigma - Z w shift by one
cell a step. The mesh gives such cells but for the rounding of a layer to whole cells, so what error is left
comes from sources, springs and loss. With w the velocity and u the displacement of the nodes, each step
solves

    (M + (dt/2) D + (dt^2/4) K) w_middle = M w + (dt/2) (force of thermal stress - K u)

and ends at velocity 2 w_middle - w and displacement u + dt w_middle.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_solve_banded, cholesky_banded

from .samples import Index, Medium, Mesh, Real, Sample, add_links, per_cell


@dataclass(frozen=True)
class Sound:
    """An element joins node i to node i + 1: a cell, or the spring of a compliant joint (no mass, no width).

    `stiffness` (GPa/nm) at the step's middle and `quarter_mass` (GPa ps^2/nm) of each element, `node_mass` of
    interface masses, the element of each cell, the factored matrix. `memory_rate` and `memory_stiffness`,
    shape (terms, elements), and `elastic`, the stiffness without memory, serve the relaxation.
    """

    stiffness: Real
    quarter_mass: Real
    node_mass: Real
    cell: Index
    factor: Real
    step: float
    elastic: Real
    memory_rate: Real
    memory_stiffness: Real


@dataclass(frozen=True)
class Motion:
    """Node displacement (nm), velocity (nm/ps); memory elongation (nm) by relaxation term and element."""

    displacement: Real
    velocity: Real
    memory: Real


def _sprung(sample: Sample) -> NDArray[np.bool_]:
    return np.array([joint.compliance > 0 for joint in sample.joints], bool)


def joint_nodes(sample: Sample, mesh: Mesh) -> tuple[Index, Index]:
    """Node above and node below every joint; the same node where it is welded."""
    sprung = _sprung(sample)
    above = mesh.joints + np.cumsum(sprung) - sprung
    return above, above + sprung


def _relaxation(sample: Sample, mesh: Mesh, cell: Index, elements: int) -> tuple[Real, Real]:
    """Strength and rate of every memory term in every element, zero where there is none."""
    terms = max(len(medium.relaxation) for medium in sample.media)
    table = np.zeros((2, terms, len(sample.media)))
    for number, medium in enumerate(sample.media):
        table[:, : len(medium.relaxation), number] = np.reshape(medium.relaxation, (-1, 2)).T
    spread = np.zeros((2, terms, elements))
    spread[:, :, cell] = table[:, :, mesh.medium]
    return spread[0], spread[1]


def _end_impedances(sample: Sample) -> tuple[float, float]:
    """A half-space ends in a dashpot of its own impedance, vacuum in nothing."""
    top, bottom = sample.media[0], sample.media[-1]
    return (
        0.0 if sample.open_top else top.density * top.velocity,
        0.0 if sample.open_bottom else bottom.density * bottom.velocity,
    )


def assemble_sound(sample: Sample, mesh: Mesh, step: float) -> Sound:
    """Elements of cells and springs, masses of joints, viscosity, dashpots; the matrix factored once.

    A relaxation term's memory m obeys m' = rate (elongation - m) and pulls with stiffness times strength
    times (elongation - m); its midpoint value is eliminated, which stiffens the element to `stiffness`.
    """
    sprung = _sprung(sample)
    springs = np.array([1 / joint.compliance for joint in sample.joints if joint.compliance > 0])

    def elements_of(cells: Real, at_springs: Real) -> Real:
        return np.insert(cells, mesh.joints[sprung], at_springs)

    none = np.zeros(len(springs))
    per_width = per_cell(sample, mesh, "modulus") / mesh.width
    elastic = elements_of(per_width, springs)
    viscosity = elements_of(per_width * per_cell(sample, mesh, "viscous_time"), none)
    quarter_mass = elements_of(per_cell(sample, mesh, "density") * mesh.width / 4, none)
    cell = np.flatnonzero(elements_of(np.ones(len(mesh.width)), none))

    strength, rate = _relaxation(sample, mesh, cell, len(elastic))
    memory_stiffness = elastic * strength / (1 + rate * step / 2)
    stiffness = elastic + memory_stiffness.sum(axis=0)
    node_mass = np.zeros(len(elastic) + 1)
    for side in joint_nodes(sample, mesh):
        node_mass[side] += [joint.areal_mass / 2 for joint in sample.joints]

    matrix = np.zeros((2, len(elastic) + 1))
    element = np.arange(len(elastic))
    add_links(matrix, element, element + 1, step / 2 * viscosity + step**2 / 4 * stiffness)
    matrix[0] += node_mass
    matrix[0, :-1] += quarter_mass
    matrix[0, 1:] += quarter_mass
    matrix[1, :-1] += quarter_mass
    matrix[0, [0, -1]] += step / 2 * np.array(_end_impedances(sample))
    factor = cholesky_banded(matrix, lower=True)
    return Sound(stiffness, quarter_mass, node_mass, cell, factor, step, elastic, rate, memory_stiffness)


def at_rest(sound: Sound) -> Motion:
    nodes = len(sound.stiffness) + 1
    return Motion(np.zeros(nodes), np.zeros(nodes), np.zeros(sound.memory_rate.shape))


def advance(sound: Sound, motion: Motion, stress: Real) -> Motion:
    """One step under the elements' thermal `stress` (GPa) at its middle."""
    momentum = sound.quarter_mass * (motion.velocity[:-1] + motion.velocity[1:])
    elongation = np.diff(motion.displacement)
    pull = sound.stiffness * elongation - stress
    if len(motion.memory):
        pull -= (sound.memory_stiffness * motion.memory).sum(axis=0)
    right = sound.node_mass * motion.velocity
    right[:-1] += momentum + sound.step / 2 * pull
    right[1:] += momentum - sound.step / 2 * pull
    middle = cho_solve_banded((sound.factor, True), right, overwrite_b=True, check_finite=False)
    memory = motion.memory
    if len(memory):
        reach = sound.memory_rate * sound.step / 2
        middle_elongation = elongation + sound.step / 2 * np.diff(middle)
        memory = 2 * (memory + reach * middle_elongation) / (1 + reach) - memory
    return Motion(motion.displacement + sound.step * middle, 2 * middle - motion.velocity, memory)


def energy(sound: Sound, motion: Motion) -> float:
    """Kinetic plus elastic energy per area (GPa nm), without what memory holds."""
    kinetic = sound.quarter_mass @ (motion.velocity[:-1] + motion.velocity[1:]) ** 2
    kinetic += sound.node_mass @ motion.velocity**2
    return float(0.5 * (kinetic + sound.elastic @ np.diff(motion.displacement) ** 2))


def with_power_law(medium: Medium, scale: float, exponent: float, slowest: float, fastest: float) -> Medium:
    """Give a medium c(s) = rho v^2 (1 + scale s^exponent), 0 < exponent < 1.

    The law holds for |s| from `slowest` to `fastest` (1/ps). It is Stieltjes' integral over x from 0 to
    infinity, s^y = (sin(pi y) / pi) * integral of x^(y - 1) s / (s + x) dx, by the trapezoidal rule in ln x,
    four points a decade and two decades to spare at either end; it converges geometrically. What lies slower
    is a constant x^y / y, which goes into the velocity; what lies faster is a viscous time x^(y - 1) / (1 -
    y).
    """
    spacing = np.log(10) / 4
    x = np.exp(np.arange(np.log(slowest / 100), np.log(fastest * 100), spacing))
    weight = scale * np.sin(np.pi * exponent) / np.pi
    low, high = x[0] * np.exp(-spacing / 2), x[-1] * np.exp(spacing / 2)
    stiffer = 1 + weight * low**exponent / exponent
    strength = weight * spacing * x**exponent / stiffer
    return replace(
        medium,
        velocity=medium.velocity * np.sqrt(stiffer),
        viscous_time=weight * high ** (exponent - 1) / (1 - exponent) / stiffer,
        relaxation=tuple(zip(strength.tolist(), x.tolist(), strict=True)),
    )
