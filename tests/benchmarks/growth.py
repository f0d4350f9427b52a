"""How the likelihood's time grows with layers, delays, unknowns and parameter sets, and its memory with sets.

Times are CPU times of one process. Run ``python tests/benchmarks/growth.py`` for the figures and ``growth.png``.
"""

import sys
import tracemalloc
from dataclasses import replace
from pathlib import Path

import cases
import numpy as np
import timing

import inverse as inv
from inverse.inference.minima.projection import Projected
from inverse.inference.problem.posterior import Posterior
from inverse.response.inverse_laplace import time_grid

LAYERS = (2, 4, 10, 20, 50, 100, 200)
DELAYS = (100, 200, 500, 1000, 2000, 5000, 10000, 20000)
UNKNOWNS = (2, 4, 8, 12, 16, 20)
SETS = (1, 2, 4, 8, 16, 32, 64, 128, 256, 512)


def points(inversion: inv.Inversion, sets: int) -> np.ndarray:
    return 0.3 * np.random.default_rng(1).standard_normal((sets, len(inversion.names)))


def of_layers(counts: tuple[int, ...] = LAYERS, sets: int = 4, rounds: int = 3) -> dict[int, float]:
    """Seconds per parameter set of superlattices, two layers a period, 400 delays."""
    problems = {n: cases.inversion(cases.superlattice(n // 2), cases.delays(400)) for n in counts}
    return _per_set(problems, sets, rounds)


def of_delays(counts: tuple[int, ...] = DELAYS, sets: int = 6, rounds: int = 3) -> dict[int, float]:
    """Seconds per parameter set of Al/Si at steps of 0.25 ps, to 25 ps and to 5 ns."""
    stack = cases.aluminium_on_silicon()
    return _per_set({n: cases.inversion(stack, cases.delays(n)) for n in counts}, sets, rounds)


def _per_set(problems: dict[int, inv.Inversion], sets: int, rounds: int) -> dict[int, float]:
    calls = {n: lambda p=p: p.posterior(points(p, sets)) for n, p in problems.items()}
    return {n: t / sets for n, t in timing.fewest_seconds(calls, rounds).items()}


def of_unknowns(
    counts: tuple[int, ...] = UNKNOWNS, sets: int = 48, rounds: int = 5
) -> tuple[dict[int, float], dict[int, float]]:
    """Seconds per parameter set, and per Jacobian, of four layers with more and more left open, 400 delays."""
    problems = {n: cases.opened(n) for n in counts}
    jacobians = {n: lambda p=p: _jacobian(p) for n, p in problems.items()}
    return _per_set(problems, sets, rounds), timing.fewest_seconds(jacobians, rounds)


def _jacobian(inversion: inv.Inversion) -> np.ndarray:
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    z = np.zeros(len(inversion.names))
    return Projected(inversion.posterior, physical, z).derivative(z[physical])


def of_sets(counts: tuple[int, ...] = SETS, rounds: int = 5) -> dict[int, float]:
    """Seconds per call with more and more parameter sets, Al/Si, 400 delays."""
    inversion = cases.inversion(cases.aluminium_on_silicon(), cases.delays(400))
    calls = {n: lambda n=n: inversion.posterior(points(inversion, n)) for n in counts}
    return timing.fewest_seconds(calls, rounds)


def peak_megabytes(inversion: inv.Inversion, sets: int) -> float:
    """Most memory that one call holds at a time, beyond what was there."""
    z = points(inversion, sets)
    inversion.posterior(z[:1])
    tracemalloc.start()
    try:
        inversion.posterior(z)
        return tracemalloc.get_traced_memory()[1] / 2**20
    finally:
        tracemalloc.stop()


def memory(counts: tuple[int, ...] = SETS) -> dict[int, float]:
    """MB held by one call with more and more parameter sets, Al/Si, 1,000 delays."""
    inversion = cases.inversion(cases.aluminium_on_silicon(), cases.delays(1000))
    return {n: peak_megabytes(inversion, n) for n in counts}


def late_delays(compliance: float, rounds: int = 9, sets: int = 6) -> dict[str, float]:
    """Seconds per parameter set of 400 delays: even to 95 ps, log-spaced to 4 ns, and these on one uniform grid.

    The median compliance of the bond, in nm/GPa, decides for how long echoes of high frequency ring on.
    """
    stack = cases.aluminium_on_silicon(compliance)
    spaced = np.concatenate([np.arange(-5, 5, 0.25), np.geomspace(5, 4000, 360)])
    short, long = (cases.inversion(stack, delay) for delay in (cases.delays(400), spaced))
    densities = {
        "even, to 95 ps": short.posterior,
        "log-spaced, to 4 ns": long.posterior,
        "log-spaced, to 4 ns, one uniform grid": on_one_grid(long),
    }
    z = points(long, sets)
    calls = {name: lambda density=density: density(z) for name, density in densities.items()}
    return {name: t / sets for name, t in timing.fewest_seconds(calls, rounds).items()}


def on_one_grid(inversion: inv.Inversion) -> Posterior:
    """Return the posterior with every frequency of the pulse to the end of the trace."""
    (member,) = inversion.posterior.members
    model = member.model
    grid = time_grid(model.delay[model.used], model.pulse_rms, model.earliest)
    return replace(inversion.posterior, members=(replace(member, model=replace(model, grid=grid)),))


def exponent(seconds: dict[int, float], least: int = 0) -> float:
    """Slope of log time over log size, from a size on."""
    kept = {n: t for n, t in seconds.items() if n >= least}
    return float(np.polyfit(np.log(list(kept)), np.log(list(kept.values())), 1)[0])


def main() -> None:
    per_set, per_jacobian = of_unknowns()
    found = {
        "layers (superlattice)": of_layers(),
        "delays (0.25 ps apart)": of_delays(),
        "unknowns": per_set,
        "unknowns, one Jacobian": per_jacobian,
        "parameter sets, one call": of_sets(),
    }
    for name, seconds in found.items():
        print(name, {n: f"{1e3 * t:.3g} ms" for n, t in seconds.items()}, f"exponent {exponent(seconds):.2f}")
    for name in ("layers (superlattice)", "delays (0.25 ps apart)", "parameter sets, one call"):
        middle = sorted(found[name])[len(found[name]) // 2]
        print(f"{name}, from {middle} on: exponent {exponent(found[name], middle):.2f}")
    print("peak memory, MB:", {n: round(size, 1) for n, size in memory().items()})
    for compliance in (0.005, 0.05):
        late = late_delays(compliance)
        print(f"median compliance {compliance}:", {name: f"{1e3 * t:.3g} ms" for name, t in late.items()})
    draw(found, Path(__file__).with_name("growth.png"))


def draw(found: dict[str, dict[int, float]], path: Path) -> None:
    """One figure, one column wide, readable in grey."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    figure, axes = plt.subplots(figsize=(3.4, 3.6), layout="constrained")
    styles = zip(("k-o", "k--s", "k-.^", "k:D", "k-x"), ("k", "0.55", "w", "0.75", "k"), strict=True)
    for (name, seconds), (style, face) in zip(found.items(), styles, strict=True):
        x, y = np.array(list(seconds)), 1e3 * np.array(list(seconds.values()))
        axes.loglog(x, y, style, ms=4, mfc=face, lw=0.9, label=f"{name} ({exponent(seconds):.2f})")
    x = np.array([2.0, 60.0])
    axes.loglog(x, 0.02 * x, color="0.6", lw=2.5)
    axes.annotate("proportional", (22, 0.22), color="0.4", fontsize=7)
    axes.set_xlabel("layers, delays, unknowns or parameter sets", fontsize=8)
    axes.set_ylabel("CPU time (ms)")
    axes.legend(fontsize=6.5, title="time over (exponent)", title_fontsize=6.5, loc="upper left")
    axes.set_ylim(0.02, 2e4)
    figure.savefig(path, dpi=200)
    plt.close(figure)


if __name__ == "__main__":
    timing.one_thread()
    sys.exit(main())
