"""Time to a minimum of the bundled example: three Jacobians of the projected residuals, from the same starts.

- ``projection``: the library's, exact in the elimination of the linear coefficients, the basis functions alone by
  central differences in one batch.
- ``central differences``: of the projected residuals, in one batch.
- ``forward differences``: SciPy's own, one point after another.

Run ``python tests/benchmarks/jacobian.py`` for the figures.
"""

from collections.abc import Callable
from importlib.resources import files

import cases
import numpy as np
import timing
from scipy import optimize

import inverse as inv
from inverse.inference.minima.minimise import jacobian, minimise
from inverse.inference.minima.projection import Projected

STARTS = 4
TOLERANCE = 1e-10


def example() -> inv.Inversion:
    """The bundled trace, explained by aluminium on silicon with nine unknowns."""
    trace = inv.read_trace(files("inverse") / "example" / "wafer07.csv")
    return inv.Inversion(cases.aluminium_on_silicon(), cases.SETUP, trace)


def problem() -> tuple[Projected, np.ndarray]:
    """Residuals at the noise's prior medians, and starts about the minimum, a fifth of a prior's width away."""
    inversion = example()
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    best = inversion.least_squares(starts=2, seed=1).best.z
    kicks = np.random.default_rng(1).standard_normal((STARTS, physical.sum()))
    return Projected(inversion.posterior, physical, best), best[physical] + 0.2 * kicks


def by_scipy(projected: Projected, start: np.ndarray) -> np.ndarray:
    found = optimize.least_squares(
        lambda x: projected(x[None])[0],
        start,
        jac="2-point",
        x_scale="jac",
        ftol=TOLERANCE,
        xtol=1e-12,
        gtol=1e-12,
    )
    return found.x


def searches(projected: Projected) -> dict[str, Callable[[np.ndarray], np.ndarray]]:
    """Ways from a start to its minimum."""
    return {
        "projection": lambda x: (
            minimise(projected, x, derivative=projected.derivative, tolerance=TOLERANCE).x
        ),
        "central differences": lambda x: minimise(projected, x, typical=1.0, tolerance=TOLERANCE).x,
        "forward differences": lambda x: by_scipy(projected, x),
    }


def minima(projected: Projected, starts: np.ndarray) -> dict[str, np.ndarray]:
    """Where each way ends, shape (starts, unknowns)."""
    return {name: np.array([search(x) for x in starts]) for name, search in searches(projected).items()}


def seconds(projected: Projected, starts: np.ndarray, rounds: int = 3) -> dict[str, float]:
    """CPU time per minimum, s."""
    calls = {
        name: lambda search=search: [search(x) for x in starts]
        for name, search in searches(projected).items()
    }
    return {name: t / len(starts) for name, t in timing.fewest_seconds(calls, rounds).items()}


def disagreement(projected: Projected, starts: np.ndarray) -> float:
    """Largest difference of the two batched Jacobians over the largest entry of its column."""
    worst = 0.0
    for x in starts:
        exact, differences = projected.derivative(x), jacobian(projected, x, typical=1.0)
        worst = max(worst, float((np.abs(exact - differences).max(axis=0) / np.abs(exact).max(axis=0)).max()))
    return worst


if __name__ == "__main__":
    timing.one_thread()
    residuals, points = problem()
    for name, t in seconds(residuals, points).items():
        print(f"{name:20s} {1e3 * t:6.1f} ms per minimum")
    print("Jacobians differ by", disagreement(residuals, points))
    ends = minima(residuals, points)
    print({name: float(np.abs(ends[name] - ends["projection"]).max()) for name in ends})
