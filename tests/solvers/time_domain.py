"""A slow, obvious forward model in the time domain, to hold the library's Laplace-domain response against.

Everything lives on one mesh of cells, in the coherent units (nm, ps, g/cm3, GPa, K; fluence in GPa nm). The
pump is a Gaussian in time, so the trace comes out convolved with the pump-probe correlation: the model is
linear, and it does not matter which of the two pulses carries the width.

* `transfer_matrices`: products of 2x2 matrices, exact for a slice of uniform index;
* `heat`: finite volumes, Crank-Nicolson; one or two temperatures, carriers;
* `sound`: the box scheme, d'Alembert's shift where nothing but propagation happens;
* detection, here: every slice's index and every boundary's place perturbed through the product of matrices.

`step` (ps) is the only accuracy knob: time step and mesh shrink together, and the error falls as its square.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.interpolate import CubicSpline

from .heat import Heat, assemble_carriers, assemble_heat, middle_carriers, middle_temperature
from .samples import Experiment, Mesh, Real, Sample, build_mesh, per_cell
from .sound import Sound, advance, assemble_sound, at_rest, joint_nodes
from .transfer_matrices import Beam, Optics, solve

START = 7.0  # the run starts this many rms widths before the pulse: it holds exp(-24.5) of its peak there


@dataclass(frozen=True)
class Response:
    """Per unit incident fluence (1 GPa nm = 1 J/m2 of surface): dR/R, phase (rad), dT/T in intensity."""

    delay: Real
    reflectance_change: Real
    phase: Real
    transmittance_change: Real


def optics(sample: Sample, mesh: Mesh, beam: Beam, index: str) -> Optics:
    """The matrices' answer on the mesh, `index` being "n_pump" or "n_probe"."""
    n = per_cell(sample, mesh, index).astype(complex)
    above = sample.ambient_index if sample.open_top else n[0].real
    return solve(n, mesh.width, beam, above, sample.exit_index if sample.open_bottom else n[-1])


def _boundary_weights(
    sample: Sample, mesh: Mesh, nodes: int, stretch: Any, ambient: complex, exit_medium: complex
) -> Any:
    """Derivative by node displacement: it stretches what lies above a boundary, shrinks what lies below.

    A joint that opens counts as moved by the mean of its two sides.
    """
    weights = np.zeros(nodes, complex)
    for side in joint_nodes(sample, mesh):
        weights[side] += (stretch[mesh.joints - 1] - stretch[mesh.joints]) / 2
    if sample.open_top:
        weights[0] += ambient - stretch[0]
    if sample.open_bottom:
        weights[-1] += stretch[-1] - exit_medium
    return weights


def detector_weights(sample: Sample, mesh: Mesh, sound: Sound, probe: Beam) -> tuple[Real, Real, Real]:
    """Rows (Re ln r, Im ln r, Re ln t) by node displacement, cell temperature and pair density, to first order."""
    light = optics(sample, mesh, probe, "n_probe")
    p, q, n = (per_cell(sample, mesh, name) for name in ("dn_dstrain", "dn_dT", "dn_dN"))
    by_displacement, by_temperature, by_pairs = [], [], []
    for dn, dd, shifts in (
        (light.dlog_r_dn, light.dlog_r_dd, (light.ambient_shift[0], light.exit_shift[0])),
        (light.dlog_t_dn, light.dlog_t_dd, (light.ambient_shift[1], light.exit_shift[1])),
    ):
        weights = _boundary_weights(sample, mesh, len(sound.stiffness) + 1, dd, *shifts)
        weights[sound.cell] -= dn * p / mesh.width
        weights[sound.cell + 1] += dn * p / mesh.width
        by_displacement.append(weights)
        by_temperature.append(dn * q)
        by_pairs.append(dn * n)
    rows_u, rows_t, rows_n = (
        np.stack([w[0].real, w[0].imag, w[1].real]) for w in (by_displacement, by_temperature, by_pairs)
    )
    return rows_u, rows_t, rows_n


@dataclass(frozen=True)
class State:
    """The sample at one time (ps): displacement (nm) of nodes, temperatures (K), and pairs (1/nm^3) of cells."""

    time: float
    mesh: Mesh
    sound: Sound
    heat: Heat
    displacement: Real
    temperature: Real
    pairs: Real

    @property
    def depth(self) -> Real:
        """Middle of each cell (nm) below the first boundary of the mesh."""
        return np.cumsum(self.mesh.width) - self.mesh.width / 2

    @property
    def strain(self) -> Real:
        return np.diff(self.displacement)[self.sound.cell] / self.mesh.width


def states(sample: Sample, experiment: Experiment, last_delay: float, step: float) -> Iterator[State]:
    """March to `last_delay` (ps) and give the state at the start and after every step."""
    rms = experiment.pulse_rms
    steps = int(np.ceil((last_delay + START * rms) / step))
    mesh = build_mesh(sample, step, steps, experiment.pump)
    heat, sound = assemble_heat(sample, mesh, step), assemble_sound(sample, mesh, step)
    carriers = assemble_carriers(sample, mesh, step) if any(m.carrier_energy for m in sample.media) else None
    absorbed = optics(sample, mesh, experiment.pump, "n_pump").absorbed
    thermal, electronic, by_pairs = (
        per_cell(sample, mesh, name) for name in ("thermal_stress", "electron_stress", "carrier_stress")
    )

    time = np.asarray(step * np.arange(steps + 1) - START * rms, float)
    pulse = np.exp(-((time[:-1] + step / 2) ** 2) / (2 * rms**2)) / (np.sqrt(2 * np.pi) * rms)
    temperature, density = np.zeros(len(heat.capacity)), np.zeros(len(mesh.width))
    power, stress = np.zeros(len(heat.capacity)), np.zeros(len(sound.stiffness))
    motion = at_rest(sound)
    yield State(time[0], mesh, sound, heat, motion.displacement, temperature, density)
    for i in range(steps):
        power[heat.hot] = pulse[i] * absorbed
        if carriers is not None:
            pairs = middle_carriers(carriers, density, pulse[i] * absorbed)
            density = 2 * pairs - density
            power[heat.hot] *= carriers.prompt
            power[heat.lattice] += carriers.returned * pairs
        middle = middle_temperature(heat, temperature, power)
        temperature = 2 * middle - temperature
        stress[sound.cell] = thermal * middle[heat.lattice] + electronic * middle[heat.hot]
        if carriers is not None:
            stress[sound.cell] += by_pairs * pairs
            power[:] = 0.0
        motion = advance(sound, motion, stress)
        yield State(time[i + 1], mesh, sound, heat, motion.displacement, temperature, density)


def run(sample: Sample, experiment: Experiment, last_delay: float, step: float) -> tuple[Real, Real]:
    """March to `last_delay` (ps); times of shape (steps + 1,) and (Re ln r, Im ln r, Re ln t) at each."""
    time, out, rows = [], [], None
    for state in states(sample, experiment, last_delay, step):
        if rows is None:
            rows = detector_weights(sample, state.mesh, state.sound, experiment.probe)
        time.append(state.time)
        seen = rows[0] @ state.displacement + rows[1] @ state.temperature[state.heat.lattice]
        out.append(seen + rows[2] @ state.pairs)
    return np.array(time), np.array(out)


def simulate(sample: Sample, experiment: Experiment, delay: Real, step: float = 0.02) -> Response:
    """The trace at `delay` (ps): second order in `step` (ps), read off the steps by a cubic spline."""
    if step > experiment.pulse_rms / 4:
        raise ValueError(f"step = {step} ps does not resolve the pulse: give at most pulse_rms / 4")
    delay = np.asarray(delay, float)
    time, out = run(sample, experiment, delay.max(), step)
    ln_r, phase, ln_t = np.where(delay >= time[0], CubicSpline(time, out)(np.maximum(delay, time[0])).T, 0.0)
    return Response(delay, 2 * ln_r, phase, 2 * ln_t)
