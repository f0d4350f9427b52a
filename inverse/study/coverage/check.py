"""Do the intervals hold the truth as often as they say? Simulation-based calibration for a user's own problem."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_seed, whole_number
from inverse.inference.mcmc.executor import Shared, checked_executor, completed
from inverse.study.coverage.judgement import Replicate, Sampling, judge
from inverse.study.coverage.ranks import CELLS, Bands, checked_levels, counts, simultaneous_bands
from inverse.study.coverage.replicates import Simulator, draw_traces, draw_truth, quantities, with_data
from inverse.study.coverage.store import Store

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["Coverage", "check_coverage", "check_known"]

LEVELS = (0.5, 0.68, 0.9, 0.95)
BUDGET = 0.01


@dataclass(frozen=True)
class Coverage:
    """How often intervals held known truths.

    Attributes
    ----------
    replicates : tuple of Replicate
        Every one that was asked for, in order; none is left out.
    levels : tuple of float
    budget : float
        Probability that a correct problem fails the check, shared evenly by all quantities (Bonferroni).
    """

    replicates: tuple[Replicate, ...]
    levels: tuple[float, ...]
    budget: float

    @property
    def ranked(self) -> tuple[Replicate, ...]:
        """Replicates that have draws, whether or not they converged."""
        return tuple(r for r in self.replicates if r.status != "failed")

    @property
    def failed(self) -> tuple[Replicate, ...]:
        """Replicates without draws."""
        return tuple(r for r in self.replicates if r.status == "failed")

    @property
    def unconverged(self) -> tuple[Replicate, ...]:
        """Replicates with draws that missed the target; their ranks are counted."""
        return tuple(r for r in self.replicates if r.status == "not converged")

    @property
    def names(self) -> tuple[str, ...]:
        """Quantities that were ranked in every replicate with draws."""
        rows = self.ranked
        return tuple(n for n in rows[0].ranks if all(n in r.ranks for r in rows)) if rows else ()

    @cached_property
    def ranks(self) -> dict[str, NDArray[np.int64]]:
        """Quantity -> rank of the truth among 199 draws, per replicate with draws."""
        return {name: np.array([r.ranks[name] for r in self.ranked]) for name in self.names}

    @cached_property
    def bands(self) -> Bands:
        """What is admitted: see `inverse.study.coverage.ranks.simultaneous_bands`."""
        return simultaneous_bands(len(self.ranked), self.levels, self.budget / len(self.names))

    @cached_property
    def held(self) -> dict[str, NDArray[np.int64]]:
        """Quantity -> number of truths inside the central interval of each level."""
        return {n: counts(_histogram(r), self.levels)[0, -len(self.levels) :] for n, r in self.ranks.items()}

    def share(self, level: float, names: Iterable[str] | None = None) -> float:
        """Return the share of truths inside the intervals of a level, over all or some quantities.

        Parameters
        ----------
        level : float
            One of `levels`.
        names : iterable of str, optional
        """
        column = self.levels.index(level)
        chosen = list(self.names if names is None else names)
        return float(np.mean([self.held[name][column] for name in chosen]) / len(self.ranked))

    @cached_property
    def outside(self) -> dict[str, str]:
        """Quantity that leaves the bands -> what is wrong with its intervals."""
        return {n: self._fault(n) for n, ranks in self.ranks.items() if not self.bands.admits(ranks)}

    @property
    def passed(self) -> bool:
        """True if every quantity stays inside the bands and every replicate has draws."""
        return bool(self.ranked) and not self.failed and not self.outside

    def _fault(self, name: str) -> str:
        """Name the larger fault: of place (mean of the ranks) or of width (their spread), in standard errors."""
        centred = (self.ranks[name] + 0.5) / CELLS - 0.5
        place = float(centred.mean() * np.sqrt(12))
        width = float((np.mean(centred**2) - 1 / 12) * np.sqrt(180))
        if abs(place) > abs(width):
            return "too high" if place < 0 else "too low"
        return "too narrow" if width > 0 else "too wide"

    @property
    def verdict(self) -> str:
        """The outcome in words."""
        if not self.ranked:
            return f"Failed: none of {len(self.replicates)} replicates gave draws. First error: {self._first_error()}"
        sentences = [self._judgement(), *self._weakest()]
        if self.failed:
            sentences.append(
                f"{len(self.failed)} gave no draws, so the check fails. First: {self._first_error()}"
            )
        if self.unconverged:
            sentences.append(
                f"{len(self.unconverged)} did not reach the sampling target; their ranks are counted."
            )
        return " ".join(sentences)

    def _judgement(self) -> str:
        count, size = len(self.ranked), len(self.names)
        bands = f"bands that correct intervals leave with a probability of at most {self.budget:.2g}"
        if not self.outside:
            start = "Passed" if self.passed else "Failed"
            return f"{start}: in {count} replicates the ranks of all {size} quantities stay inside {bands}."
        listed = ", ".join(f"{name} ({fault})" for name, fault in self.outside.items())
        return (
            f"Failed: in {count} replicates {len(self.outside)} of {size} quantities leave {bands}: {listed}."
        )

    def _weakest(self) -> Iterator[str]:
        level = 0.9 if 0.9 in self.levels else self.levels[-1]
        column, count = self.levels.index(level), len(self.ranked)
        name = min(self.names, key=lambda n: self.held[n][column])
        low, high = 100 * self.bands.inside[column] / count
        yield (
            f"The {100 * level:.0f} % intervals hold {100 * self.share(level):.1f} % of the truths, those of {name} "
            f"least ({100 * self.held[name][column] / count:.1f} %); {low:.1f} to {high:.1f} % is admitted for each."
        )

    def _first_error(self) -> str:
        return self.failed[0].message if self.failed else "none"

    def table(self) -> str:
        """Return a Markdown table: share of truths held per quantity and level, and what is admitted."""
        head = ["quantity", *(f"{100 * p:.0f} %" for p in self.levels), "mean rank", "verdict"]
        count = len(self.ranked)
        rows = [self._row(name) for name in self.names]
        limits = [f"{100 * a / count:.1f} to {100 * b / count:.1f}" for a, b in self.bands.inside]
        rows.append(["admitted", *limits, "", ""])
        return "\n".join(_markdown([head, ["---"] * len(head), *rows]))

    def _row(self, name: str) -> list[str]:
        shares = [f"{100 * k / len(self.ranked):.1f}" for k in self.held[name]]
        rank = f"{self.ranks[name].mean() / (CELLS - 1):.3f}"
        return [name.replace("|", r"\|"), *shares, rank, self.outside.get(name, "inside")]

    def __repr__(self) -> str:
        return f"{self.verdict}\n\n{self.table()}" if self.ranked else self.verdict


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
        several times faster; where its Pareto k is above 0.7 or the weights are too uneven it falls back on MCMC.
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


def _histogram(ranks: NDArray[np.int64]) -> NDArray[np.int64]:
    return np.bincount(ranks, minlength=CELLS)[None]


def _markdown(rows: Sequence[Sequence[str]]) -> Iterator[str]:
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    for row in rows:
        yield "| " + " | ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)) + " |"
