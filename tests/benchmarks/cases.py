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


def aluminium_on_silicon(compliance: float = 0.05) -> inv.Stack:
    """The stack of the bundled example: five unknowns beside time zero and the noise; median compliance in nm/GPa."""
    top = inv.Layer(
        "Al",
        thickness=stats.uniform(40, 40),
        velocity=stats.norm(6.42, 0.10),
        density_ratio=stats.norm(1.16, 0.035),
    )
    return inv.Stack(top, bond(compliance), inv.Substrate("Si", orientation="100"))


def four_layers() -> inv.Stack:
    """Al, Ti, W and SiO2 on Si, a bond under each metal."""
    layers = (film("Al", 40), bond(), film("Ti", 15), bond(), film("W", 30), bond(), film("SiO2", 60))
    return inv.Stack(
        *layers, inv.Interface(boundary_conductance=100.0), inv.Substrate("Si", orientation="100")
    )


def inversion(
    stack: inv.Stack, delay: np.ndarray, noise: str = "correlated", time_zero: object = None
) -> inv.Inversion:
    """Simulate a trace at the priors' medians, add white noise of 0.1 % of its range, and pose the problem."""
    clean = inv.simulate(stack, SETUP, delay)["reflectance_change"].values
    kicks = np.random.default_rng(1).standard_normal(delay.size)
    trace = inv.make_trace(delay, reflectance_change=clean + 1e-3 * np.ptp(clean) * kicks)
    zero = stats.norm(0, 0.1) if time_zero is None else time_zero
    return inv.Inversion(stack, SETUP, trace, time_zero=zero, noise=noise)


def superlattice(periods: int) -> inv.Stack:
    """W and Al on Si, each period alike: five nanometres and seven, both thicknesses unknown."""
    pair = (film("W", 5), inv.Interface(boundary_conductance=300.0), film("Al", 7))
    return inv.Stack(inv.Repeat(periods, *pair), bond(), inv.Substrate("Si", orientation="100"))


KNOWN = {
    "thickness": (40.0, 15.0, 30.0, 60.0),
    "velocity": (6.4, 6.1, 5.2, 5.9),
    "density_ratio": (1.16, 1.93, 8.26, 0.945),
    "compliance": (0.03, 0.03, 0.03, 0.03),
    "boundary_conductance": (100.0, 100.0, 100.0, 100.0),
}
"""Four layers on silicon and the interfaces under them."""


def opened(count: int) -> inv.Inversion:
    """Four layers with `count` unknowns, 2 to 21: white noise, and the first numbers of `KNOWN`; 400 delays."""
    places = [(field, layer) for field in KNOWN for layer in range(4)][: count - 1]

    def value(field: str, layer: int) -> object:
        number = KNOWN[field][layer]
        return stats.norm(number, 0.02 * number) if (field, layer) in places else number

    parts: list[object] = []
    for layer, material in enumerate(("Al", "Ti", "W", "SiO2")):
        given = {field: value(field, layer) for field in KNOWN}
        bond_of = {field: given.pop(field) for field in ("compliance", "boundary_conductance")}
        parts += [inv.Layer(material, **given), inv.Interface(**bond_of)]
    stack = inv.Stack(*parts, inv.Substrate("Si", orientation="100"))
    return inversion(stack, delays(400), noise="white", time_zero=0.0)
