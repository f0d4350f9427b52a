"""Problems that the benchmarks time: the bundled example's stack, four layers, a superlattice; invented data."""

import numpy as np
from scipy import stats

import inverse as inv

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)

STEP = 0.25
"""ps between delays, about the pulse's rms width."""


def delays(count: int, step: float = STEP) -> np.ndarray:
    return -5.0 + step * np.arange(count)


def film(material: str, thickness: float) -> inv.Layer:
    return inv.Layer(
        material, thickness=stats.uniform(0.8 * thickness, 0.4 * thickness), velocity=stats.norm(6.0, 0.1)
    )


def bond(compliance: float = 0.05) -> inv.Interface:
    return inv.Interface(
        compliance=stats.halfcauchy(scale=compliance), boundary_conductance=stats.loguniform(20, 500)
    )


def aluminium_on_silicon() -> inv.Stack:
    """The stack of the bundled example: five unknowns beside time zero and the noise."""
    top = inv.Layer(
        "Al",
        thickness=stats.uniform(40, 40),
        velocity=stats.norm(6.42, 0.10),
        density_ratio=stats.norm(1.16, 0.035),
    )
    return inv.Stack(top, bond(), inv.Substrate("Si", orientation="100"))


def four_layers() -> inv.Stack:
    """Al, Ti, W and SiO2 on Si, a bond under each metal."""
    layers = (film("Al", 40), bond(), film("Ti", 15), bond(), film("W", 30), bond(), film("SiO2", 60))
    return inv.Stack(
        *layers, inv.Interface(boundary_conductance=100.0), inv.Substrate("Si", orientation="100")
    )


def inversion(stack: inv.Stack, delay: np.ndarray, noise: str = "correlated", seed: int = 1) -> inv.Inversion:
    """Simulate a trace at the priors' medians, add white noise of 0.1 % of its range, and pose the problem."""
    clean = inv.simulate(stack, SETUP, delay)["reflectance_change"].values
    kicks = np.random.default_rng(seed).standard_normal(delay.size)
    trace = inv.make_trace(delay, reflectance_change=clean + 1e-3 * np.ptp(clean) * kicks)
    return inv.Inversion(stack, SETUP, trace, time_zero=stats.norm(0, 0.1), noise=noise)
