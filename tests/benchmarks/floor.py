"""What the arithmetic of a response cannot do without, and how far above it the library stands.

The reference kernel makes, per parameter set, one table of complex exponentials per layer for heat and one for sound,
each as an outer product of two short tables on the uniform grid, and one inverse real transform per basis function.
Nothing is solved, detected or interpolated. It works on the library's own grid and in blocks of the same size.

Run ``python tests/benchmarks/floor.py`` for the figures, ``--profile`` for where the rest of the time goes.
"""

import argparse
import cProfile
import itertools
import pstats
import time
from pathlib import Path

import cases
import numpy as np
import timing

import inverse as inv
from inverse.inference.problem.likelihood import TraceModel
from inverse.response.basis import basis, take
from inverse.response.media import sample

SETS = 256
STACKS = {"Al/Si": cases.aluminium_on_silicon, "four layers": cases.four_layers}
RADIX = 32


def exponentials(rate: np.ndarray, first: complex, step: float, count: int) -> np.ndarray:
    """Return exp(-rate (first + i step k)) for k = 0 .. count - 1, shape (sets, count); rate has shape (sets, 1)."""
    coarse = np.exp(-rate * (first + 1j * step * np.arange(0, count, RADIX)))
    fine = np.exp(-1j * rate * step * np.arange(RADIX))
    return (coarse[:, :, None] * fine[:, None, :]).reshape(len(rate), -1)[:, :count]


def kernel(rates: np.ndarray, spectra: np.ndarray, first: complex, step: float, size: int) -> np.ndarray:
    """Do the least work: tables for every layer, transforms for every function.

    Parameters
    ----------
    rates : array, shape (sets, tables)
        ps.
    spectra : complex array, shape (sets, functions, frequencies)
        Anything; transformed as it is.
    """
    for column in rates.T:
        exponentials(column[:, None], first, step, spectra.shape[2])
    return np.fft.irfft(spectra, n=size, axis=-1)


class Workload:
    """One problem's response, likelihood and floor for the same parameter sets."""

    def __init__(self, inversion: inv.Inversion, sets: int = SETS) -> None:
        self.inversion = inversion
        self.model: TraceModel = inversion.posterior.members[0].model
        self.z = 0.3 * np.random.default_rng(1).standard_normal((sets, len(inversion.names)))
        parameters = inversion.posterior.parameters
        self.values = parameters.named(parameters.to_values(self.z))
        grid = self.model.grid
        layers, functions = len(self.model.bound.media) - 1, len(self.model.layout.names)
        self.rates = np.random.default_rng(2).uniform(5, 20, (sets, 2 * layers))
        self.spectra = np.ones((grid.block, functions, grid.s.shape[1]), dtype=complex)

    def blocks(self) -> list[slice]:
        """Blocks of equal size, as the likelihood's."""
        count = -(-len(self.z) // self.model.grid.block)
        edges = [len(self.z) * i // count for i in range(count + 1)]
        return [slice(*pair) for pair in itertools.pairwise(edges)]

    def floor(self) -> None:
        grid = self.model.grid
        first, step = complex(grid.s[0, 0]), float(grid.s[0, 1].imag)
        for rows in self.blocks():
            rates = self.rates[rows]
            kernel(rates, self.spectra[: len(rates)], first, step, grid.size)

    def response(self) -> None:
        """From values of the unknowns to the columns of the channel at the delays."""
        model, channel = self.model, self.model.channels[0].name
        for rows in self.blocks():
            values = {name: v[rows] for name, v in self.values.items()}
            batch, zero = sample(model.bound, values), values["time_zero"][:, None]
            take(basis(batch, model.beams, model.grid, zero, model.layout, len(zero)), channel)

    def likelihood(self) -> None:
        self.inversion.posterior(self.z)


def measure(name: str, count: int = 1000, rounds: int = 7) -> dict[str, float]:
    """Return microseconds per parameter set of floor, response and likelihood."""
    work = Workload(cases.inversion(STACKS[name](), cases.delays(count)))
    calls = {"floor": work.floor, "response": work.response, "likelihood": work.likelihood}
    return {key: 1e6 * t / SETS for key, t in timing.fewest_seconds(calls, rounds).items()}


def profile(name: str, rows: int = 20) -> None:
    """Print where the likelihood's time goes, as a table in Markdown: own and cumulated time per parameter set.

    The profiler's own time is in it, most where functions are small.
    """
    work = Workload(cases.inversion(STACKS[name](), cases.delays(1000)))
    work.likelihood()
    watch = cProfile.Profile(time.process_time)
    watch.runcall(work.likelihood)
    found = pstats.Stats(watch).stats
    print(
        f"| {name}, function | calls per block | own, us | with what it calls, us |\n| --- | --- | --- | --- |"
    )
    for (file, _, function), (_, calls, own, whole, _) in sorted(found.items(), key=lambda item: -item[1][2])[
        :rows
    ]:
        said = (
            f"{Path(file).stem}.{function}"
            if file != "~"
            else function.strip("<>").replace("built-in method ", "")
        )
        per_set = 1e6 / SETS
        print(
            f"| `{said}` | {calls / len(work.blocks()):.0f} | {own * per_set:.0f} | {whole * per_set:.0f} |"
        )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--profile", action="store_true")
    if parser.parse_args().profile:
        for name in STACKS:
            profile(name)
        return
    print("us per parameter set: floor, response, likelihood; response and likelihood over the floor")
    for name in STACKS:
        t = measure(name)
        over = t["response"] / t["floor"], t["likelihood"] / t["floor"]
        print(
            f"{name:12s} {t['floor']:6.0f} {t['response']:6.0f} {t['likelihood']:6.0f}   {over[0]:.2f} {over[1]:.2f}"
        )


if __name__ == "__main__":
    timing.one_thread()
    main()
