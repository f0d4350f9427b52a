"""Sharing work out over any `concurrent.futures.Executor`.

Only `submit` is asked of an executor. What all tasks need (a log density with its data) goes by a token: a
worker that does not know the token says so, gets the pickled object with the task once more, and keeps it.
Workers that share our memory, threads, find it without any pickling. The order of results is the order of the
tasks.
"""

from __future__ import annotations

import os
import pickle
import signal
import sys
from collections import OrderedDict
from collections.abc import Callable, Iterable, Iterator, Mapping
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Executor, Future, ProcessPoolExecutor, wait
from contextlib import contextmanager
from multiprocessing import current_process, get_context, parent_process
from multiprocessing.process import BaseProcess
from threading import Thread
from types import TracebackType
from typing import Any
from uuid import uuid4

THREAD_VARIABLES = (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "BLIS_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
)
UNGUARDED = (
    'a script whose calls do not stand under `if __name__ == "__main__":`. Worker processes read the script anew and '
    "would start at its calls again: put what does the work into a function, and call it under that line"
)
REMEMBERED = 4
IN_FLIGHT = 64

_here: dict[str, Any] = {}
_received: OrderedDict[str, Any] = OrderedDict()


class _Unknown:
    """A worker's answer to a token that it has not met."""


def _recall(token: str, payload: bytes | None) -> Any:
    """Find the shared object in this process, or unpack it and keep it."""
    if token in _here:
        return _here[token]
    if token not in _received and payload is not None:
        _received[token] = pickle.loads(payload)
        while len(_received) > REMEMBERED:
            _received.popitem(last=False)
    return _received.get(token, _Unknown)


def _call(token: str, payload: bytes | None, function: Callable[..., Any], arguments: tuple[Any, ...]) -> Any:
    shared = _recall(token, payload)
    return _Unknown() if shared is _Unknown else function(shared, *arguments)


class Shared:
    """An object that many tasks need, sent to a worker when the worker asks for it.

    Parameters
    ----------
    value : object
        Pickled at most once, and only if some worker lives in another process.

    Notes
    -----
    A context manager: at its end this process forgets the object.
    """

    def __init__(self, value: Any) -> None:
        self.value = value
        self.token = uuid4().hex
        self._payload: bytes | None = None

    def __enter__(self) -> Shared:
        _here[self.token] = self.value
        return self

    def __exit__(self, *details: object) -> None:
        _here.pop(self.token, None)

    def payload(self) -> bytes:
        """Pickle the object; what cannot be pickled is refused with the mend."""
        if self._payload is None:
            try:
                self._payload = pickle.dumps(self.value)
            except Exception as error:
                raise ValueError(
                    f"the problem cannot be sent to worker processes ({type(error).__name__}: {error}); "
                    "define its functions at the top of a module (no lambda, no function inside a "
                    "function), or run without an executor"
                ) from error
        return self._payload


def checked_executor(executor: Any) -> None:
    """Refuse what has no `submit`."""
    if not callable(getattr(executor, "submit", None)):
        raise ValueError(
            f"executor must be a concurrent.futures.Executor, something with submit(), not {executor!r}; "
            "worker_pool() gives one"
        )


def completed(
    executor: Executor, shared: Shared, function: Callable[..., Any], tasks: Iterable[tuple[Any, ...]]
) -> Iterator[tuple[int, Future[Any]]]:
    """Run `function(shared.value, *task)` for every task and hand out the futures as they are done.

    Parameters
    ----------
    executor : concurrent.futures.Executor
        Only `submit` is used.
    shared : Shared
        Entered.
    function : callable
        At the top of a module, if the workers are processes.
    tasks : iterable of tuple
        Drawn from as workers become free, so it may be a long generator.

    Yields
    ------
    index : int
        Place of the task.
    future : Future
        Done; its `result()` is the value or raises what the task raised.
    """
    waiting = enumerate(tasks)
    pending: dict[Future[Any], tuple[int, tuple[Any, ...]]] = {}

    def submit(payload: bytes | None, index: int, task: tuple[Any, ...]) -> None:
        pending[executor.submit(_call, shared.token, payload, function, task)] = (index, task)

    def fill() -> None:
        while len(pending) < IN_FLIGHT and (item := next(waiting, None)) is not None:
            submit(None, *item)

    try:
        fill()
        while pending:
            for future in wait(pending, return_when=FIRST_COMPLETED).done:
                index, task = pending.pop(future)
                if future.exception() is None and isinstance(future.result(), _Unknown):
                    submit(shared.payload(), index, task)
                else:
                    yield index, future
            fill()
    finally:
        for future in pending:
            future.cancel()


def run_tasks(
    executor: Executor, shared: Shared, function: Callable[..., Any], tasks: Iterable[tuple[Any, ...]]
) -> list[Any]:
    """Run `function(shared.value, *task)` for every task; results in the order of the tasks.

    Raises
    ------
    RuntimeError
        If a worker process died. Whatever a task raises is raised here.
    """
    try:
        results = {index: future.result() for index, future in completed(executor, shared, function, tasks)}
    except BrokenExecutor as error:
        raise RuntimeError(
            f"a worker process ended before its task did: out of memory, killed, or {UNGUARDED}"
        ) from error
    return [results[index] for index in sorted(results)]


def available_cores() -> int:
    """Count the cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


@contextmanager
def _environment(values: Mapping[str, str]) -> Iterator[None]:
    before = {name: os.environ.get(name) for name in values}
    os.environ.update(values)
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


def _start_worker() -> None:
    """Leave Ctrl-C to the main process, which then stops its workers; end with it if it is killed."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = parent_process()
    if parent is not None:
        Thread(target=_end_with, args=(parent,), daemon=True).start()


def _end_with(parent: BaseProcess) -> None:
    """Wait for the process that started this one: a killed one cannot tell its workers to stop."""
    parent.join()
    os._exit(1)


class WorkerPool(ProcessPoolExecutor):
    """Worker processes with one linear-algebra thread each, started afresh (spawn) on every platform.

    Parameters
    ----------
    workers : int, optional
        All cores that this process may use, if left out.

    Notes
    -----
    Leaving its `with` block stops workers that are still at work (after Ctrl-C, say) without waiting for
    them.
    """

    def __init__(self, workers: int | None = None) -> None:
        if getattr(current_process(), "_inheriting", False):
            # A worker that is still reading an unguarded script; the process that started it will say so.
            sys.exit(1)
        count = available_cores() if workers is None else workers
        if count < 1:
            raise ValueError(f"workers must be at least 1, not {workers!r}; leave it out for all cores")
        self._unfinished: set[Future[Any]] = set()
        super().__init__(count, mp_context=get_context("spawn"), initializer=_start_worker)
        # The first task starts all processes, and they inherit the environment of this moment.
        with _environment(dict.fromkeys(THREAD_VARIABLES, "1")):
            self._first = super().submit(os.getpid)

    @property
    def has_started(self) -> bool:
        """Whether a worker has come to life; False while none has, and for ever if none can."""
        return self._first.done() and self._first.exception() is None

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Schedule a call."""
        future = super().submit(fn, *args, **kwargs)
        self._unfinished.add(future)
        future.add_done_callback(self._unfinished.discard)
        return future

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for future in list(self._unfinished):
            future.cancel()
        if self._unfinished:
            self._stop_workers()
        self.shutdown(wait=True)

    def _stop_workers(self) -> None:
        for process in list((self._processes or {}).values()):
            process.terminate()


def worker_pool(workers: int | None = None) -> WorkerPool:
    """Make the default executor, to be used in a `with` block: see `WorkerPool`."""
    return WorkerPool(workers)
