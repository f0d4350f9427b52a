"""Do the intervals hold the truth as often as they say? Simulation-based calibration for a user's own problem."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_seed, whole_number
from inverse.inference.mcmc.executor import Shared, checked_executor, completed
from inverse.study.coverage.judgement import Replicate, Sampling, judge
from inverse.study.coverage.outcome import Coverage
from inverse.study.coverage.ranks import checked_levels
from inverse.study.coverage.replicates import Simulator, draw_traces, draw_truth, quantities, with_data
from inverse.study.coverage.store import Store

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["check_coverage", "check_known"]

LEVELS = (0.5, 0.68, 0.9, 0.95)
BUDGET = 0.01


def check_coverage(
    inversion: Inversion,
    *,
    seed: int,
    replicates: int = 200,
    ess: float = 200,
    method: str = "mcmc",
    simulate_trace: Simulator | None = None,
    levels: Sequence[float] = LEVELS,
    budget: float = BUDGET,
    max_steps: int = 4000,
    executor: Executor | None = None,
    store: str | os.PathLike[str] | None = None,
    progress: bool | Callable[[dict[str, Any]], object] = True,
) -> Coverage:
    """Check on simulated traces that the intervals of a problem hold the truth as often as they say.

    For every replicate all unknowns, the noise's included, are drawn from their priors and the linear coefficients
    from theirs; the model and the noise make a trace at the problem's delays; its posterior is sampled and the truth
    ranked among 199 of its draws. If everything is right the ranks are uniform (Talts, Betancourt, Simpson, Vehtari
    and Gelman, arXiv 1804.06788, 2018; from memory). The bands hold at all ranks and levels at once: see
    `inverse.study.coverage.ranks`.

    Parameters
    ----------
    inversion : Inversion
        Its own data only set what an `Inversion` takes from a trace: delays and mask, time zero's and the noise's
        priors, the widths of the coefficients. They are the same in every replicate, or the truths would not be
        drawn from the priors that are used.
    seed : int
        Equal seeds give equal replicates, whatever the executor and however often the check was interrupted.
    replicates : int
    ess : float
        Effective sample size of each posterior, 100 or more.
    method : {"mcmc", "importance"}
        ``"mcmc"`` runs what `Inversion.sample_posterior` runs. ``"importance"`` weights draws from an approximation,
        several times faster; where its Pareto k is above 0.7, the weights are too uneven or the draws spread much
        less than the normal approximation it falls back on MCMC.
        Each replicate says what it used.
    simulate_trace : callable, optional
        ``simulate_trace(rng, values)`` makes the data instead of the model: for traces that the model does not
        describe. It gets a numpy Generator and the true values by name, and returns a Dataset or a mapping from
        channel name to data at all delays. With worker processes it must be picklable.
    levels : sequence of float
        Whole per cents.
    budget : float
        Probability that a correct problem fails, over all quantities and levels.
    max_steps : int
        Most steps of each ensemble; a replicate that needs more is counted as not converged.
    executor : concurrent.futures.Executor, optional
        Runs replicates side by side; `worker_pool()` gives one.
    store : path, optional
        File that keeps finished replicates; a later call with the same arguments goes on from it, with more
        replicates if asked.
    progress : bool or callable
        A bar on stderr, nothing, or a function that is given a dict with ``done``, ``replicates`` and ``failed``.

    Returns
    -------
    Coverage

    Raises
    ------
    ValueError
        For arguments that will not do, or a store of another check.
    """
    if not hasattr(inversion, "posterior"):
        raise ValueError(f"check_coverage takes an Inversion first, not a {type(inversion).__name__}.")
    levels, sampling, seed = checked_levels(levels), Sampling(method, ess, max_steps), checked_seed(seed)
    _check_numbers(replicates, budget)
    if simulate_trace is not None and len(inversion.parts) > 1:
        raise ValueError(
            "simulate_trace makes one trace and the problem is joint; check its parts one by one."
        )
    file = Store(store, _header(inversion, seed, sampling, simulate_trace))
    job = _Job(inversion, simulate_trace, seed, sampling)
    tasks = [(number,) for number in range(replicates) if number not in file.rows]
    _run(job, _simulated, tasks, file, replicates, executor, progress)
    return Coverage(tuple(file.rows[i] for i in range(replicates)), levels, budget)


def check_known(
    inversions: Sequence[Inversion],
    truths: Sequence[Mapping[str, float]],
    *,
    seed: int,
    ess: float = 200,
    method: str = "mcmc",
    levels: Sequence[float] = LEVELS,
    budget: float = BUDGET,
    max_steps: int = 4000,
    executor: Executor | None = None,
    progress: bool | Callable[[dict[str, Any]], object] = True,
) -> Coverage:
    """Check that the intervals of problems whose truth is known hold it as often as they say.

    Parameters
    ----------
    inversions : sequence of Inversion
    truths : sequence of mapping
        Per problem: unknown or derived quantity -> true value. What is not named is not judged.
    seed, ess, method, levels, budget, max_steps, executor, progress
        As for `check_coverage`. The bands take the truths for draws from the priors: where they are not (all of one
        thickness, say), shares of truths held are still worth reading, the verdict less so.

    Returns
    -------
    Coverage

    Raises
    ------
    ValueError
        If there is not one truth for each problem, or an argument will not do.
    """
    levels, sampling, seed = checked_levels(levels), Sampling(method, ess, max_steps), checked_seed(seed)
    if not inversions or len(inversions) != len(truths):
        raise ValueError(
            f"There are {len(inversions)} problems and {len(truths)} truths; give one truth a problem."
        )
    _check_numbers(len(truths), budget)
    file = Store(None, {})
    tasks = [(i, *pair) for i, pair in enumerate(zip(inversions, truths, strict=True))]
    _run(_Known(seed, sampling), _judged, tasks, file, len(tasks), executor, progress)
    return Coverage(tuple(file.rows[i] for i in range(len(tasks))), levels, budget)


@dataclass(frozen=True)
class _Job:
    """What every replicate needs."""

    inversion: Inversion
    simulate_trace: Simulator | None
    seed: int
    sampling: Sampling


@dataclass(frozen=True)
class _Known:
    seed: int
    sampling: Sampling


def _simulated(job: _Job, number: int) -> Replicate:
    """Draw truth and trace of a replicate and judge it."""
    sequence = np.random.SeedSequence(job.seed, spawn_key=(number,))
    data, inference = sequence.spawn(2)
    rng = np.random.default_rng(data)
    values = draw_truth(job.inversion, rng)
    truth = {name: float(v[0]) for name, v in quantities(job.inversion, values[None]).items()}
    if job.simulate_trace is None:
        traces = draw_traces(job.inversion, values, rng)
    else:
        made = job.simulate_trace(rng, dict(zip(job.inversion.names, map(float, values), strict=True)))
        traces = [_taken(job.inversion, made)]
    return judge(with_data(job.inversion, traces), truth, number, job.sampling, inference)


def _taken(inversion: Inversion, made: Mapping[str, Any]) -> dict[str, NDArray[np.float64]]:
    """Take the problem's channels from what a simulator made."""
    model = inversion.posterior.members[0].model
    out = {}
    for channel in model.channels:
        if channel.name not in made or np.shape(made[channel.name]) != model.delay.shape:
            raise ValueError(
                f"simulate_trace must return '{channel.name}' with one value at each of {model.delay.size} delays."
            )
        out[channel.name] = np.asarray(made[channel.name], dtype=float)
    return out


def _judged(known: _Known, number: int, inversion: Inversion, truth: Mapping[str, float]) -> Replicate:
    sequence = np.random.SeedSequence(known.seed, spawn_key=(number,))
    return judge(inversion, truth, number, known.sampling, sequence)


def _run(
    job: Any,
    function: Callable[..., Replicate],
    tasks: Sequence[tuple[Any, ...]],
    file: Store,
    total: int,
    executor: Executor | None,
    progress: bool | Callable[[dict[str, Any]], object],
) -> None:
    """Run tasks and keep their replicates as they are done."""
    tell = _teller(progress, total)
    for row in _finished(job, function, tasks, executor):
        file.add(row)
        failed = sum(r.status == "failed" for r in file.rows.values())
        tell({"done": len(file.rows), "replicates": total, "failed": failed})


def _finished(
    job: Any, function: Callable[..., Replicate], tasks: Sequence[tuple[Any, ...]], executor: Executor | None
) -> Iterator[Replicate]:
    if executor is None:
        for task in tasks:
            yield function(job, *task)
        return
    checked_executor(executor)
    with Shared(job) as shared:
        for _, future in completed(executor, shared, function, tasks):
            yield future.result()


def _teller(
    progress: bool | Callable[[dict[str, Any]], object], total: int
) -> Callable[[dict[str, Any]], object]:
    if callable(progress):
        return progress
    if not isinstance(progress, bool):
        raise ValueError(f"progress must be True, False or a function of one dict, not {progress!r}")
    return (lambda news: _line(news, total)) if progress else (lambda news: None)


def _line(news: dict[str, Any], total: int) -> None:
    """Rewrite one line in a terminal; elsewhere write a line at every tenth."""
    text = f"coverage: {news['done']} of {total} replicates, {news['failed']} failed"
    last = news["done"] == total
    if sys.stderr.isatty():
        print(f"\r{text}", end="\n" if last else "", file=sys.stderr, flush=True)
    elif last or news["done"] % max(1, total // 10) == 0:
        print(text, file=sys.stderr, flush=True)


def _check_numbers(replicates: int, budget: float) -> None:
    whole_number("replicates", replicates, 1)
    if not 0 < budget < 1:
        raise ValueError(f"budget={budget}; give a probability between 0 and 1, such as 0.01.")


def _header(
    inversion: Inversion, seed: int, sampling: Sampling, simulator: Simulator | None
) -> dict[str, Any]:
    maker = (
        "the model" if simulator is None else getattr(simulator, "__qualname__", type(simulator).__qualname__)
    )
    return {
        "format": "inverse coverage 1",
        "problem": inversion.fingerprint(),
        "seed": seed,
        "method": sampling.method,
        "ess": sampling.ess,
        "max_steps": sampling.max_steps,
        "simulator": maker,
    }
