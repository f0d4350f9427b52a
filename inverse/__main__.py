"""The main job from the prompt: a trace and a stack in, a table, figures and a result file out."""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Sequence
from pathlib import Path

import inverse as inv
from inverse.description.sample.stack_file import read_stack

EXAMPLE = Path(__file__).parent / "example"


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the main job; return the exit status."""
    options = _parser().parse_args(arguments)
    if (options.trace is None) != (options.stack is None):
        print("Give both a trace and a stack file, or neither for the bundled example.", file=sys.stderr)
        return 2
    try:
        run(
            options.trace or EXAMPLE / "wafer07.csv",
            options.stack or EXAMPLE / "stack.toml",
            Path(options.out),
            seed=options.seed,
            noise=options.noise,
            ess=options.ess,
        )
    except (ValueError, OSError) as error:
        print(f"error: {error}", file=sys.stderr)
        return 1
    return 0


def run(trace_file: Path, stack_file: Path, out: Path, *, seed: int, noise: str, ess: float) -> None:
    """Read, fit, sample, print the table and write figures and result into `out`."""
    started = time.perf_counter()
    try:
        out.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise ValueError(
            f"The folder '{out}' for the results cannot be made ({error.strerror}); give another by --out."
        ) from None
    trace = inv.read_trace(trace_file)
    stack, setup = read_stack(stack_file)
    print(f"Trace {trace_file}\nStack {stack} from {stack_file}\n")
    print(inv.first_look(trace), end="\n\n")
    inversion = inv.Inversion(stack, setup, trace, noise=noise)
    fit = inversion.least_squares(seed=seed)
    print(f"Least squares: {len(fit.minima)} distinct minimum(s) found; sampling from there.")
    posterior = inversion.sample_posterior(seed=seed, fit=fit, ess=ess)
    print(f"\n{inv.table(posterior)}\n")
    inv.save(posterior, out / "result.nc")
    for name, figure in (
        ("fit", inv.plot.fit(posterior)),
        ("corner", inv.plot.corner(posterior)),
        ("section", inv.plot.section(stack)),
    ):
        figure.savefig(out / f"{name}.png", dpi=200)
    print(f"Written to {out.resolve()}: result.nc, fit.png, corner.png, section.png")
    print(f"{time.perf_counter() - started:.0f} s")


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m inverse",
        description="Fit and sample a picosecond-ultrasonics trace; without arguments, the bundled example.",
    )
    parser.add_argument("trace", nargs="?", type=Path, help="CSV file: delay in ps, reflectance change")
    parser.add_argument("stack", nargs="?", type=Path, help="TOML file: the stack and its priors")
    parser.add_argument(
        "--out", default="inverse-result", help="folder for the results (default: %(default)s)"
    )
    parser.add_argument("--seed", type=int, default=1, help="seed of every draw (default: %(default)s)")
    parser.add_argument(
        "--noise", choices=("correlated", "white", "student"), default="correlated", help="noise model"
    )
    parser.add_argument(
        "--ess", type=float, default=1000, help="effective sample size wanted (default: %(default)s)"
    )
    return parser


if __name__ == "__main__":
    sys.exit(main())
