"""Many traces through one description, on any executor, resumable, no site at the cost of another."""

from __future__ import annotations

import hashlib
import os
import pickle
import sys
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import BrokenExecutor, Executor, Future
from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING, Any

from inverse.description.arguments import checked_seed, whole_number
from inverse.inference.mcmc.draws import METHODS
from inverse.inference.mcmc.executor import UNGUARDED, Shared, checked_executor, completed, worker_pool
from inverse.study.batches.recipe import Recipe
from inverse.study.batches.results import results_dataset
from inverse.study.batches.site import Effort, SiteTask, fingerprint, fit_site
from inverse.study.batches.site_table import site_rows
from inverse.study.batches.store import SiteRecord, SiteStore

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["batch"]

Job = tuple[str, Any, Mapping[str, Any], int, Sequence[Mapping[str, float]], str]

_DEAD = "its worker process ended: out of memory, or killed"
_LOST = "not fitted: the executor lost its workers; run the batch again with the same path to go on"


def batch(
    problem: Recipe | Callable[..., Any],
    traces: Mapping[str, Any] | Iterable[str | os.PathLike[str]],
    *,
    seed: int,
    table: Any = None,
    path: str | os.PathLike[str] | None = None,
    executor: Executor | None = None,
    workers: int | None = None,
    neighbours: str | None = None,
    draws: int = 400,
    ess: float = 500,
    max_steps: int = 20000,
    ensembles: int = 4,
    starts: int = 12,
    method: str = "importance",
    timeout: float | None = None,
    retry: bool = False,
    progress: bool | Callable[[dict[str, Any]], object] = True,
) -> xr.Dataset:
    """Fit and sample many sites.

    Parameters
    ----------
    problem : Recipe or callable
        A description whose parts the table may change for each site, or a function of a trace and a row (a mapping)
        that returns an `Inversion`; at the top of a module, if the workers are processes.
    traces : mapping or iterable of path
        Site -> Dataset or path of a trace file; of bare paths, the file's stem names the site.
    seed : int
        A site's draws depend on it, on the site's name and on its own data, not on order, executor or company.
    table : table, optional
        One row a site; see `site_rows`. Columns named after a place (``Al.thickness``) change the description, all
        others (``split``, ``wafer``, ``x``, ``y``, ...) label the results.
    path : path, optional
        ``.nc`` file of the results. Every finished site is at once written to a store beside it (``<path>.sites``),
        from which a killed batch goes on.
    executor : concurrent.futures.Executor, optional
        Anything with `submit`: dask's ``Client.get_executor()``, mpi4py's ``MPIPoolExecutor``. By default a pool of
        worker processes with one linear-algebra thread each.
    workers : int, optional
        Size of the default pool; 0 works in this process.
    neighbours : str, optional
        Column by which sites are neighbours (``wafer``): the first site of each group, by name, is searched in full,
        the others start from its minima and a few points of their own.
    draws : int
        Draws kept of each site.
    ess, max_steps, ensembles : number
        As for `sample_posterior`.
    starts : int
        As for `least_squares`.
    method : {"importance", "mcmc"}
        ``"importance"`` weights draws from an approximation of the posterior, in a tenth of the time of Markov chains;
        at a site where its Pareto k is above 0.7, its effective sample size stays below `ess`, or the draws spread
        much less than the normal approximation (a bent ridge), chains are run instead. The
        results say by site which it was.
    timeout : float, optional
        Seconds after which a site is given up.
    retry : bool
        Work again on sites that failed in an earlier run.
    progress : bool or callable
        A bar, nothing, or a function of a dict (``done``, ``total``, ``failed``, ``site``, ``status``).

    Returns
    -------
    xarray.Dataset
        Unknowns and derived quantities on (site, draw), with units in attrs; ``quantile``, ``prior``, ``status``,
        ``reason``, ``method`` and ``warning`` (residuals unlike the noise) by site; the table's columns as coordinates.
        A site that failed has NaN and the reason.

    Raises
    ------
    ValueError
        If sites repeat or have no row, the path will not do, or the store is of another batch.
    RuntimeError
        If no worker process can start, as in a script whose calls do not stand under ``if __name__ == "__main__":``.
    """
    seed = checked_seed(seed)
    if workers is not None:
        whole_number("workers", workers, 0)
    jobs, rows = _jobs(traces, table, seed)
    effort = _checked(Effort(draws, ess, max_steps, ensembles, starts, timeout, method))
    identity = _identity(problem, seed, effort, neighbours)
    target = None if path is None else _target(path)
    store = SiteStore(None if target is None else target.with_name(target.name + ".sites"), identity)
    watch = _Watch(progress, len(jobs))
    lost: dict[str, SiteRecord] = {}
    with ExitStack() as stack:
        stack.callback(watch.close)
        shared = stack.enter_context(Shared(SiteTask(problem, effort)))
        for wave in (True, False):
            part = _wave(jobs, rows, neighbours, wave, store)
            due = [job for job in part if _is_due(store.records.get(job[0]), job[-1], retry)]
            lost |= _run(due, shared, executor, workers, store, watch)
    results = results_dataset(list(rows), rows, {**lost, **store.records}, draws, identity)
    if target is not None:
        _write(results, target)
    return results


def _jobs(traces: Any, table: Any, seed: int) -> tuple[list[Job], dict[str, dict[str, Any]]]:
    named = _named(traces)
    given = {} if table is None else site_rows(table)
    missing = [site for site in named if table is not None and site not in given]
    if missing:
        raise ValueError(
            f"the table has no row for {len(missing)} of {len(named)} sites ({', '.join(missing[:5])}); its sites are "
            f"{', '.join(list(given)[:5])}."
        )
    rows = {site: given.get(site, {}) for site in named}
    return [(s, t, rows[s], seed, (), fingerprint(t, rows[s])) for s, t in named.items()], rows


def _named(traces: Any) -> dict[str, Any]:
    if isinstance(traces, Mapping):
        out = {str(site): _source(trace) for site, trace in traces.items()}
    else:
        paths = [Path(p) for p in traces]
        out = {p.stem: p for p in paths}
        if len(out) < len(paths):
            raise ValueError("two trace files have the same name; give a mapping from site to path.")
    if not out:
        raise ValueError("there are no traces; give a mapping from site to trace, or paths of trace files.")
    return out


def _source(trace: Any) -> Any:
    return Path(trace) if isinstance(trace, str | os.PathLike) else trace


def _checked(effort: Effort) -> Effort:
    for name, least in (("draws", 1), ("max_steps", 1), ("ensembles", 2), ("starts", 1)):
        whole_number(name, getattr(effort, name), least)
    if effort.draws < 50:
        raise ValueError(f"draws={effort.draws}; keep 50 or more of each site, or its shape is lost.")
    if effort.ess < effort.draws:
        raise ValueError(
            f"ess={effort.ess:g} is below draws={effort.draws}; the draws kept could not be independent."
        )
    if effort.method not in METHODS:
        raise ValueError(f"method={effort.method!r}; give one of {', '.join(METHODS)}.")
    if effort.timeout is not None and not effort.timeout > 0:
        raise ValueError(f"timeout={effort.timeout!r}; give a positive number of seconds, or None.")
    return effort


def _identity(problem: Any, seed: int, effort: Effort, neighbours: str | None) -> dict[str, Any]:
    if isinstance(problem, Recipe):
        described: Any = problem.record()
    elif callable(problem):
        described = _of_function(problem)
    else:
        raise ValueError(f"problem is {problem!r}; give a Recipe, or a function of a trace and a row.")
    return {
        "problem": described,
        "seed": seed,
        "effort": {**vars(effort), "timeout": None},
        "neighbours": neighbours,
    }


def _of_function(function: Callable[..., Any]) -> str:
    try:
        return hashlib.sha256(pickle.dumps(function)).hexdigest()
    except Exception:
        return f"{getattr(function, '__module__', '')}.{getattr(function, '__qualname__', type(function).__name__)}"


def _target(path: str | os.PathLike[str]) -> Path:
    target = Path(path)
    if target.suffix != ".nc":
        raise ValueError(f"'{target.name}' does not end in .nc; results are NetCDF files.")
    if not target.parent.is_dir():
        raise ValueError(f"The folder '{target.parent}' does not exist; create it first.")
    return target


def _is_due(record: SiteRecord | None, mark: str, retry: bool) -> bool:
    return record is None or record.fingerprint != mark or (retry and record.status == "failed")


def _wave(
    jobs: Sequence[Job],
    rows: Mapping[str, Mapping[str, Any]],
    neighbours: str | None,
    first: bool,
    store: SiteStore,
) -> list[Job]:
    """Return the jobs that start from nothing, or those that start from their group's first site."""
    if neighbours is None:
        return list(jobs) if first else []
    absent = [s for s, row in rows.items() if neighbours not in row]
    if absent:
        raise ValueError(f"neighbours='{neighbours}' is no column of site '{absent[0]}' in the table.")
    leaders: dict[Any, str] = {}
    for site in sorted(rows):
        leaders.setdefault(rows[site][neighbours], site)
    if first:
        return [job for job in jobs if job[0] in leaders.values()]
    out: list[Job] = []
    for site, trace, row, seed, _, mark in jobs:
        leader = store.records.get(leaders[row[neighbours]])
        if site not in leaders.values():
            out.append((site, trace, row, seed, leader.modes if leader else [], mark))
    return out


def _run(
    jobs: list[Job],
    shared: Shared,
    executor: Executor | None,
    workers: int | None,
    store: SiteStore,
    watch: _Watch,
) -> dict[str, SiteRecord]:
    """Work on jobs and store them; return a record for each that an executor of the user's has lost."""
    if not jobs:
        return {}
    if executor is not None:
        checked_executor(executor)
        left = _attempt(jobs, shared, executor, store, watch)
        return {job[0]: SiteRecord(job[0], job[-1], "failed", _LOST) for job in left}
    if workers == 0:
        for job in jobs:
            watch.done(store, fit_site(shared.value, *job))
        return {}
    _run_pooled(jobs, shared, workers, store, watch)
    return {}


def _run_pooled(
    jobs: list[Job], shared: Shared, workers: int | None, store: SiteStore, watch: _Watch
) -> None:
    """Work in pools of our own; where a pool breaks, halve what is left until the site that breaks it stands alone."""
    with worker_pool(workers) as pool:
        left = _attempt(jobs, shared, pool, store, watch)
        started = pool.has_started
    if left and not started:
        raise RuntimeError(f"no worker process could start; the usual reason is {UNGUARDED}.")
    if len(left) == 1 and len(jobs) == 1:
        watch.done(store, SiteRecord(left[0][0], left[0][-1], "failed", _DEAD))
    elif left:
        half = len(left) // 2
        for part in (left[:half], left[half:]):
            if part:
                _run_pooled(part, shared, workers, store, watch)


def _attempt(
    jobs: list[Job], shared: Shared, executor: Executor, store: SiteStore, watch: _Watch
) -> list[Job]:
    """Run jobs; return those that are left because workers died."""
    finished: set[str] = set()
    try:
        for index, future in completed(executor, shared, fit_site, jobs):
            record = _result(future)
            if record is not None:
                finished.add(jobs[index][0])
                watch.done(store, record)
    except BrokenExecutor:
        pass  # it refuses further jobs; what has not come back is left
    return [job for job in jobs if job[0] not in finished]


def _result(future: Future[Any]) -> SiteRecord | None:
    try:
        return future.result()
    except BrokenExecutor:
        return None


def _write(results: xr.Dataset, target: Path) -> None:
    part = target.with_name(f".{target.name}.{os.getpid()}.part")
    try:
        results.to_netcdf(part, engine="h5netcdf")
        part.replace(target)
    finally:
        part.unlink(missing_ok=True)


class _Watch:
    """Stores what is finished and shows how far the batch has come."""

    def __init__(self, progress: bool | Callable[[dict[str, Any]], object], total: int) -> None:
        self.progress, self.total, self.failed, self.bar = progress, total, 0, None
        self.count = 0
        if progress is True and (sys.stderr.isatty() or "ipykernel" in sys.modules):
            from tqdm.auto import tqdm

            self.bar = tqdm(total=total, desc="sites", unit="site")

    def done(self, store: SiteStore, record: SiteRecord) -> None:
        """Store a finished site and tell."""
        store.add(record)
        self.count += 1
        self.failed += record.status == "failed"
        if self.bar is not None:
            self.bar.set_postfix_str(f"{self.failed} failed", refresh=False)
            self.bar.update()
        elif callable(self.progress):
            news = {"done": self.count, "total": self.total, "failed": self.failed}
            self.progress({**news, "site": record.site, "status": record.status})

    def close(self) -> None:
        """Leave the bar as it stands."""
        if self.bar is not None:
            self.bar.close()
