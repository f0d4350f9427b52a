"""What a user waits for before the first line of work, and from the prompt to the finished table.

Times are CPU times of child processes, so that a busy machine is not a slow library.
Run ``python tests/benchmarks/start_up.py`` for the figures.
"""

import resource
import subprocess
import sys
import tempfile
import time

import timing

HEAVY = (
    *("matplotlib", "corner", "arviz", "emcee", "xarray", "pandas", "h5netcdf", "h5py", "tqdm"),
    "scipy.stats",
)


def cpu_seconds() -> float:
    """CPU time of all children that have ended, s."""
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


def python(*arguments: str, cwd: str | None = None) -> str:
    done = subprocess.run([sys.executable, *arguments], capture_output=True, text=True, check=True, cwd=cwd)
    return done.stdout


IMPORTS = {
    "below": "import numpy, scipy.optimize",
    "inverse": "import inverse",
    "names": "from inverse import Stack, Layer, Interface, Substrate, PumpProbe, Inversion, read_trace, first_look",
}
"""What the library stands on; the library, whose names load on first use; the names of a first morning."""


def import_seconds(rounds: int = 7) -> dict[str, float]:
    """CPU time of a fresh interpreter for each of `IMPORTS`."""
    calls = {name: lambda code=code: python("-c", code) for name, code in IMPORTS.items()}
    return timing.fewest_seconds(calls, rounds, clock=cpu_seconds)


def loaded_heavies() -> list[str]:
    """Heavy libraries that the names of a first morning load."""
    code = f"{IMPORTS['names']}; import sys; print(*(m for m in {HEAVY} if m in sys.modules))"
    return python("-c", code).split()


def example_seconds() -> tuple[float, float]:
    """CPU and wall time of the bundled example, from the prompt to the files written."""
    with tempfile.TemporaryDirectory() as folder:
        before, started = cpu_seconds(), time.perf_counter()
        out = python("-m", "inverse", "--out", folder)
        seconds = cpu_seconds() - before, time.perf_counter() - started
    if "Al.thickness" not in out:
        raise RuntimeError(f"the example printed no table: {out[-500:]}")
    return seconds


if __name__ == "__main__":
    print({name: f"{seconds:.3f} s" for name, seconds in import_seconds().items()})
    print("python -m inverse: {:.1f} s of CPU time, {:.1f} s by the clock".format(*example_seconds()))
