"""What the time-domain solver is given: media, joints, pulses, and the mesh they are cut into.

Coherent units throughout: nm, ps, g/cm3, GPa, K; heat capacities GPa/K, fluence GPa nm (= J/m2).
"""

from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .transfer_matrices import Beam

Real = NDArray[np.float64]
Index = NDArray[np.intp]
TAIL_GROWTH = 1.05


@dataclass(frozen=True)
class Medium:
    """One uniform medium; `thickness` inf makes it a half-space, at the top (a liquid, say) or bottom.

    Two temperatures when `electron_phonon_coupling` is finite: then `conductivity` is the electrons', the
    lattice has `lattice_conductivity`. Otherwise one temperature with both heat capacities. `electron_stress`
    (GPa/K) multiplies the electron temperature.

    Carriers when `carrier_energy` is above zero: every `carrier_energy` (GPa nm^3, 1 eV = 0.1602) of absorbed
    light makes a pair, which holds that energy but for `prompt_heat` (a fraction, the lattice's at once)
    until it recombines in `carrier_lifetime` (ps) or at the medium's top boundary (`surface_recombination`,
    nm/ps) and heats the lattice there; `carrier_stress` (GPa nm^3) multiplies the pair density. Pairs do not
    cross joints.

    Loss: c(s) = rho v^2 [1 + s viscous_time + sum strength s / (s + rate)] over `relaxation`, pairs
    (strength, rate in 1/ps).
    """

    thickness: float
    density: float
    velocity: float
    n_probe: complex
    n_pump: complex
    heat_capacity: float
    conductivity: float
    thermal_stress: float
    dn_dstrain: complex = 0j
    dn_dT: complex = 0j
    dn_dN: complex = 0j
    electron_heat_capacity: float = 0.0
    electron_phonon_coupling: float = np.inf
    lattice_conductivity: float = 0.0
    electron_stress: float = 0.0
    carrier_energy: float = 0.0
    carrier_diffusivity: float = 0.0
    carrier_lifetime: float = np.inf
    surface_recombination: float = 0.0
    prompt_heat: float = 0.0
    carrier_stress: float = 0.0
    viscous_time: float = 0.0
    relaxation: tuple[tuple[float, float], ...] = ()

    @property
    def modulus(self) -> float:
        """rho v^2 (GPa)."""
        return self.density * self.velocity**2

    @property
    def two_temperatures(self) -> bool:
        return bool(np.isfinite(self.electron_phonon_coupling))


@dataclass(frozen=True)
class Joint:
    """Where two media meet: `compliance` (nm/GPa), `conductance` (GPa nm/ps/K), `areal_mass` (g/cm3 nm).

    The mass is shared equally by the two sides, or sits on the one node of a welded joint.
    """

    compliance: float = 0.0
    conductance: float = np.inf
    areal_mass: float = 0.0


@dataclass(frozen=True)
class Sample:
    """Media from top to bottom and the joints between them.

    Where the first (last) medium is finite, vacuum of index `ambient_index` (`exit_index`) lies above (below)
    it: free of stress, adiabatic, lossless. A single half-space is a bottom.
    """

    media: tuple[Medium, ...]
    joints: tuple[Joint, ...] = ()
    ambient_index: float = 1.0
    exit_index: float = 1.0

    @property
    def open_top(self) -> bool:
        return len(self.media) == 1 or bool(np.isfinite(self.media[0].thickness))

    @property
    def open_bottom(self) -> bool:
        return bool(np.isfinite(self.media[-1].thickness))


@dataclass(frozen=True)
class Experiment:
    """Pump, probe and the rms width (ps) of their cross-correlation."""

    pump: Beam
    probe: Beam
    pulse_rms: float


@dataclass(frozen=True)
class Mesh:
    """Cells top to bottom: `width` (nm), `medium` (number); first cell of each medium but the first."""

    width: Real
    medium: Index
    joints: Index


def _tail(width: float, depth: float) -> Real:
    """Widths that grow by 5 % a cell from `width` until they cover `depth`."""
    cells = int(np.ceil(np.log1p(depth * (TAIL_GROWTH - 1) / width) / np.log(TAIL_GROWTH)))
    return np.asarray(width * TAIL_GROWTH ** np.arange(1, cells + 1), float)


def _half_space(medium: Medium, step: float, steps: int, pump: Beam) -> Real:
    """Cells of one step's travel as deep as sound gets, then a tail as deep as heat and pump light get."""
    diffusivity = max(medium.conductivity / medium.heat_capacity, medium.carrier_diffusivity)
    absorption = 4 * np.pi * complex(medium.n_pump).imag / pump.wavelength
    absorbed = 20 / absorption if absorption > 0 else 0.0
    travel = medium.velocity * step
    return np.append(
        np.full(steps, travel), _tail(travel, 6 * np.sqrt(4 * diffusivity * step * steps) + absorbed)
    )


def build_mesh(sample: Sample, step: float, steps: int, pump: Beam) -> Mesh:
    """Cells of about one time step's travel, a whole number (at least two) in each layer, thickness kept."""
    widths = []
    for number, medium in enumerate(sample.media):
        if np.isfinite(medium.thickness):
            cells = max(2, round(medium.thickness / (medium.velocity * step)))
            widths.append(np.full(cells, medium.thickness / cells))
        else:
            downwards = _half_space(medium, step, steps, pump)
            widths.append(downwards[::-1] if number == 0 and not sample.open_top else downwards)
    counts = [len(w) for w in widths]
    return Mesh(np.concatenate(widths), np.repeat(np.arange(len(widths)), counts), np.cumsum(counts)[:-1])


def per_cell(sample: Sample, mesh: Mesh, name: str) -> NDArray[Any]:
    """An attribute of the media, spread over the cells."""
    return np.array([getattr(medium, name) for medium in sample.media])[mesh.medium]


def add_links(matrix: Real, first: Index, second: Index, weight: Real) -> None:
    """Add the matrix of `weight` (x_first - x_second)^2 / 2 to a lower-banded one, first < second."""
    np.add.at(matrix[0], first, weight)
    np.add.at(matrix[0], second, weight)
    np.add.at(matrix, (second - first, first), -weight)


_KEYS = {
    "thickness": "thickness_nm",
    "density": "density_g_cm3",
    "velocity": "velocity_nm_ps",
    "heat_capacity": "heat_capacity_GPa_K",
    "conductivity": "conductivity_GPa_nm2_ps_K",
    "thermal_stress": "thermal_stress_GPa_K",
    "electron_heat_capacity": "electron_heat_capacity_GPa_K",
    "electron_phonon_coupling": "electron_phonon_coupling_GPa_ps_K",
}


def _medium(layer: dict[str, Any]) -> Medium:
    values = {f.name: layer[key] for f in fields(Medium) if (key := _KEYS.get(f.name, f.name)) in layer}
    if values["thickness"] is None:
        values["thickness"] = np.inf
    pairs = {key: complex(*value) for key, value in values.items() if isinstance(value, list)}
    return Medium(**{key: value for key, value in (values | pairs).items() if value is not None})


def from_mapping(entry: dict[str, Any]) -> tuple[Sample, Experiment]:
    """Read an entry of the vectors' `stacks.json`, where null is a half-space or one temperature.

    Layers may carry further keys named as the fields of `Medium`.
    """
    joints = tuple(
        Joint(j["compliance_nm_GPa"], j["boundary_conductance_GPa_nm_ps_K"]) for j in entry["interfaces"]
    )
    sample = Sample(tuple(_medium(layer) for layer in entry["layers"]), joints, entry["ambient_n"])
    return sample, Experiment(Beam(entry["pump_nm"]), Beam(entry["probe_nm"]), entry["pulse_rms_ps"])
