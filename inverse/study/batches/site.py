"""One site of a batch: read, fit, sample, thin; whatever goes wrong becomes the reason in its row."""

from __future__ import annotations

import hashlib
import json
import signal
import threading
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.records import encode
from inverse.description.trace.reading import read_trace
from inverse.inference.checks.edges import edge_warnings
from inverse.inference.inversion import Inversion
from inverse.study.batches.site_draws import SiteDraws, site_draws
from inverse.study.batches.store import SiteRecord

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["PROBABILITIES", "Effort", "SiteTask", "fingerprint", "fit_site", "site_seed"]

Array = NDArray[np.float64]

PROBABILITIES = (0.025, 0.16, 0.5, 0.84, 0.975)
_NARROWED = 0.9  # of the prior's width, in standard normal variables
_STARTS_WITH_MODES = 3
_NOTHING = "the data narrowed no prior: noise hides the signal, or the description is of another sample"


@dataclass(frozen=True)
class Effort:
    """How hard each site is worked on; `batch` documents the fields."""

    draws: int = 400
    ess: float = 500.0
    max_steps: int = 20000
    ensembles: int = 4
    starts: int = 12
    timeout: float | None = None
    method: str = "importance"


@dataclass(frozen=True)
class SiteTask:
    """What all sites share: how to make a problem, and the effort.

    Attributes
    ----------
    problem : callable
        From a trace and a row of the table to an `Inversion`.
    effort : Effort
    """

    problem: Callable[[Any, Mapping[str, Any]], Inversion]
    effort: Effort


class SiteTimeoutError(Exception):
    """A site has used up its time."""


def site_seed(seed: int, site: str) -> int:
    """Return the seed of a site, which depends on its name and not on its place."""
    words = np.frombuffer(hashlib.sha256(site.encode()).digest(), "<u4")
    return int(np.random.SeedSequence([seed, *map(int, words)]).generate_state(1, np.uint64)[0] >> 1)


def fingerprint(trace: xr.Dataset | Path, row: Mapping[str, Any]) -> str:
    """Return a hash of a site's trace and row."""
    digest = hashlib.sha256(json.dumps({k: _plain(v) for k, v in row.items()}, sort_keys=True).encode())
    if isinstance(trace, Path):
        digest.update(trace.read_bytes() if trace.is_file() else b"no file")
    else:
        for name in sorted(map(str, trace.variables)):
            digest.update(name.encode() + np.ascontiguousarray(trace[name].values).tobytes())
    return digest.hexdigest()


def _plain(entry: Any) -> Any:
    try:
        return encode(entry)
    except ValueError:
        return repr(entry)


def fit_site(
    task: SiteTask,
    site: str,
    trace: xr.Dataset | Path,
    row: Mapping[str, Any],
    seed: int,
    modes: Sequence[Mapping[str, float]],
    mark: str,
) -> SiteRecord:
    """Fit and sample one site; never raises for what the site has done.

    Parameters
    ----------
    task : SiteTask
    site : str
    trace : xarray.Dataset or Path
        A path is read here, so that a file that cannot be read costs only its site.
    row : mapping
    seed : int
        Of the batch.
    modes : sequence of mapping
        Minima of a neighbour, to start from.
    mark : str
        Fingerprint.
    """
    try:
        with _deadline(task.effort.timeout) as check:
            data = read_trace(trace) if isinstance(trace, Path) else trace
            return _sampled(task, site, task.problem(data, row), seed, modes, mark, check)
    except SiteTimeoutError:
        return SiteRecord(site, mark, "failed", f"took longer than the {task.effort.timeout:g} s allowed")
    except ValueError as error:  # refused with a sentence of our own
        return SiteRecord(site, mark, "failed", str(error))
    except Exception as error:
        return SiteRecord(site, mark, "failed", f"{type(error).__name__}: {error}")


@contextmanager
def _deadline(seconds: float | None) -> Iterator[Callable[[], None]]:
    """Interrupt the block after that time: by an alarm where there is one, else when `check` is called."""
    if seconds is None:
        yield lambda: None
        return
    end = time.monotonic() + seconds

    def check() -> None:
        if time.monotonic() > end:
            raise SiteTimeoutError

    def ring(number: int, frame: FrameType | None) -> None:
        raise SiteTimeoutError

    if not hasattr(signal, "setitimer") or threading.current_thread() is not threading.main_thread():
        yield check
        return
    before = signal.signal(signal.SIGALRM, ring)
    signal.setitimer(signal.ITIMER_REAL, seconds)
    try:
        yield check
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0)
        signal.signal(signal.SIGALRM, before)


def _sampled(
    task: SiteTask,
    site: str,
    inversion: Inversion,
    seed: int,
    modes: Sequence[Mapping[str, float]],
    mark: str,
    check: Callable[[], None],
) -> SiteRecord:
    effort, own = task.effort, site_seed(seed, site)
    known = [m for m in modes if set(inversion.names) <= set(m)]
    starts = min(_STARTS_WITH_MODES, effort.starts) if known else effort.starts
    fit = inversion.least_squares(starts=starts, seed=own, points=known)
    found = site_draws(inversion, fit, effort, own, check)
    status, reason = _status(inversion, found)
    values = found.of(tuple(inversion.names))
    warnings = [*edge_warnings(inversion, values), *inversion.noise_warnings(values, seed=own)]
    return SiteRecord(
        site,
        mark,
        status,
        reason,
        found.variables,
        _thinned(found.values, effort.draws),
        np.quantile(found.values, PROBABILITIES, axis=1).T,
        {"minima": float(len(fit.minima)), "log_posterior": float(fit.best.log_posterior)},
        [dict(zip(fit.names, map(float, b.values), strict=True)) for b in fit.minima],
        found.method,
        " ".join(warnings),
    )


def _status(inversion: Inversion, found: SiteDraws) -> tuple[str, str]:
    if not found.converged:
        return "not converged", found.message
    widths = inversion.posterior.parameters.to_z(found.of(tuple(inversion.names))).std(axis=0)
    noise = inversion.noise_names
    physical = [w for name, w in zip(inversion.names, widths, strict=True) if name not in noise]
    return ("nothing learnt", _NOTHING) if physical and min(physical) >= _NARROWED else ("ok", "")


def _thinned(every: Array, count: int) -> Array:
    """Take draws evenly spread over all."""
    pick = ((np.arange(count) + 0.5) * every.shape[1] / count).astype(int)
    return every[:, pick]
