"""Aluminium on silicon: the split traces with their truth, and further traces from the time-domain solver."""

import json
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from scipy import stats
from solvers.noisy import Disturbance, disturb, uneven_delays
from solvers.samples import Experiment, Joint, Medium, Sample
from solvers.time_domain import simulate
from solvers.transfer_matrices import Beam

import inverse as inv
from inverse.study.coverage.replicates import draw_traces

SPLITS = Path(__file__).parent.parent / "data" / "splits"
RECORD = json.loads((SPLITS / "truth.json").read_text())
NAMES = tuple(RECORD["traces"])
SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
RATIO = 2.7 / 2.33

# Optical and thermal constants of vectors/stacks.json, customary units; one temperature.
AL = inv.Material(
    "Al",
    density=2.7,
    velocity=6.42,
    n={400: 0.49 + 4.86j, 800: 2.7 + 8.3j},
    heat_capacity=2.42,
    conductivity=200.0,
    thermal_stress_coefficient=5.2668e-3,
)
SI = inv.Material(
    "Si",
    density=2.33,
    velocity=8.43,
    n={400: 5.57 + 0.39j, 800: 3.69 + 0.0065j},
    heat_capacity=1.65,
    conductivity=148.0,
    thermal_stress_coefficient=7.644e-4,
)

PRIORS = {
    "Al.thickness": stats.uniform(40, 40),
    "Al.velocity": stats.norm(6.42, 0.10),
    "Al.density_ratio": stats.norm(RATIO, 0.03 * RATIO),
    "Al|Si.compliance": stats.halfcauchy(scale=0.05),
    "Al|Si.boundary_conductance": stats.loguniform(20, 500),
}


def stack(film, substrate):
    """The stack of the splits, of materials or names; a film of the table's has two temperatures."""
    layer = inv.Layer(
        film,
        thickness=PRIORS["Al.thickness"],
        velocity=PRIORS["Al.velocity"],
        density_ratio=PRIORS["Al.density_ratio"],
    )
    joint = inv.Interface(
        compliance=PRIORS["Al|Si.compliance"], boundary_conductance=PRIORS["Al|Si.boundary_conductance"]
    )
    return inv.Stack(layer, joint, substrate)


def split_trace(name):
    return inv.read_trace(SPLITS / f"{name}.csv")


def split_problem(name, noise="correlated", trace=None):
    trace = split_trace(name) if trace is None else trace
    return inv.Inversion(stack(AL, inv.Substrate(SI)), SETUP, trace, noise=noise)


def split_truth(name):
    entry = RECORD["traces"][name]
    return {
        "Al.thickness": entry["thickness_nm"],
        "Al.velocity": entry["velocity_nm_ps"],
        "Al.density_ratio": entry["density_ratio"],
        "Al|Si.compliance": 1 / entry["stiffness_GPa_nm"],
        "Al|Si.boundary_conductance": entry["boundary_conductance_MW_m2K"],
        "Al.round_trip": entry["round_trip_ps"],
        "Al|Si.stiffness": entry["stiffness_GPa_nm"],
        "time_zero": entry["time_zero_ps"],
    }


@dataclass(frozen=True)
class FromModel:
    """Data from another problem with the same delays; `extra` holds the values of unknowns that only it has."""

    inversion: inv.Inversion
    extra: tuple[tuple[str, float], ...] = ()

    def __call__(self, rng, values):
        known = {**values, **dict(self.extra)}
        array = np.array([known[name] for name in self.inversion.names])
        return draw_traces(self.inversion, array, rng)[0]


def white_split(name, seed):
    """A split's trace made again by the library: its truth, its fitted coefficients, white noise of 0.15 %."""
    problem = split_problem(name, "white")
    (member,) = problem.posterior.members
    trace, truth = split_trace(name), split_truth(name)
    full_scale = float(np.abs(trace["reflectance_change"]).max())
    values = {n: np.array([truth[n]]) for n in problem.names if n in truth}
    values["noise.white"] = np.array([0.0015 * full_scale])
    model = member.model
    clean = model.predict(values, model.eliminated(values).mean, model.delay)["reflectance_change"][0]
    noise = 0.0015 * full_scale * np.random.default_rng(seed).standard_normal(model.delay.size)
    return trace.assign(reflectance_change=("delay", clean + noise, trace["reflectance_change"].attrs))


# Electrons of aluminium as in reference_materials/electrons.csv (Lin, Zhigilei and Celli 2008, recalled there).
AL_HOT = replace(AL, electron_heat_capacity=0.02736, electron_phonon_coupling=2.45e17)

# Coefficients of a usual order; no number in a test depends on them, as the fit eliminates them.
STRAIN = {"Al": 3.0 + 5.0j, "Si": 0.9 + 0.05j}
HEAT = {"Al": -2e-4 + 4e-4j, "Si": 2e-4 + 1e-5j}

CLEAN_DELAY = np.arange(-9.0, 112.0, 0.05)
EDGES, SPACINGS = np.array([-8.0, 70.0, 110.0]), np.array([0.2, 0.5])


def further_trace(seed):
    """A trace of the time-domain solver, hot electrons in the film, and what was put in.

    Truths are drawn from the fit's priors, time zero from +-0.1 ps; white noise 0.15 %, drift 0.05 % that forgets
    over 10 ps, and a baseline, as in the splits.
    """
    rng = np.random.default_rng(seed)
    truth = {name: float(prior.rvs(random_state=rng)) for name, prior in PRIORS.items()}
    film = _medium(
        AL_HOT, truth["Al.thickness"], truth["Al.density_ratio"] * SI.density, truth["Al.velocity"]
    )
    joint = Joint(truth["Al|Si.compliance"], 1e-6 * truth["Al|Si.boundary_conductance"])
    sample = Sample((film, _medium(SI, np.inf, SI.density, SI.velocity)), (joint,))
    experiment = Experiment(Beam(400.0), Beam(800.0), SETUP.pulse_rms)
    clean = simulate(sample, experiment, CLEAN_DELAY).reflectance_change
    truth["time_zero"] = float(rng.uniform(-0.1, 0.1))
    delay = uneven_delays(EDGES, SPACINGS, 0.3, rng)
    disturbance = Disturbance(truth["time_zero"], 0.7, 0.0015, 0.0005, 10.0, 0.001)
    trace = inv.make_trace(delay, reflectance_change=disturb(CLEAN_DELAY, clean, delay, disturbance, rng))
    truth["Al.round_trip"] = 2 * truth["Al.thickness"] / truth["Al.velocity"]
    truth["Al|Si.stiffness"] = 1 / truth["Al|Si.compliance"]
    return trace, truth


def _medium(material, thickness, density, velocity):
    """A medium of the independent solver: GPa, nm, ps, K."""
    hot = material.electron_phonon_coupling is not None
    return Medium(
        thickness=thickness,
        density=density,
        velocity=velocity,
        n_pump=complex(material.index_at(400)),
        n_probe=complex(material.index_at(800)),
        heat_capacity=1e-3 * material.heat_capacity,
        conductivity=1e-3 * material.conductivity,
        thermal_stress=material.thermal_stress_coefficient,
        dn_dstrain=STRAIN[material.name],
        dn_dT=HEAT[material.name],
        electron_heat_capacity=1e-3 * material.electron_heat_capacity if hot else 0.0,
        electron_phonon_coupling=1e-21 * material.electron_phonon_coupling if hot else np.inf,
    )
