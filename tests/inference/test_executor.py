import os
import signal
import time
from concurrent.futures import Executor, Future, ThreadPoolExecutor

import pytest

from inverse.inference.mcmc import executor
from inverse.inference.mcmc.executor import (
    Shared,
    WorkerPool,
    available_cores,
    completed,
    run_tasks,
    worker_pool,
)


class Counting:
    """Knows how often it was unpacked in its process."""

    unpacked = 0

    def __setstate__(self, state):
        type(self).unpacked += 1

    def __getstate__(self):
        return {"a": 1}


class OnlySubmit:
    """An executor with nothing but submit, running at once."""

    def submit(self, function, *arguments):
        future = Future()
        try:
            future.set_result(function(*arguments))
        except Exception as error:
            future.set_exception(error)
        return future


def unpacked_here(shared, pause):
    time.sleep(pause)
    return os.getpid(), shared.unpacked


def add(shared, value):
    return shared + value


def fail_on_three(shared, value):
    if value == 3:
        raise LookupError("no three")
    return value


def environment(shared):
    return {name: os.environ.get(name) for name in executor.THREAD_VARIABLES}


def interrupt_handling(shared):
    return signal.getsignal(signal.SIGINT) == signal.SIG_IGN


def blas_threads(shared):
    import numpy  # noqa: F401
    import threadpoolctl

    return [library["num_threads"] for library in threadpoolctl.threadpool_info()]


def leave(shared):
    os._exit(1)


@pytest.fixture(scope="module")
def pool():
    with worker_pool(2) as workers:
        yield workers


def test_results_come_in_the_order_of_the_tasks(pool):
    for any_executor in (pool, OnlySubmit(), ThreadPoolExecutor(3)):
        with Shared(100) as shared:
            assert run_tasks(any_executor, shared, add, [(k,) for k in range(200)]) == list(range(100, 300))


def test_problem_is_unpacked_once_per_worker(pool):
    with Shared(Counting()) as shared:
        answers = run_tasks(pool, shared, unpacked_here, [(0.01,)] * 40)
        answers += run_tasks(pool, shared, unpacked_here, [(0.01,)] * 10)
    assert {count for _, count in answers} == {1}
    assert len({worker for worker, _ in answers}) == 2


def test_threads_need_no_pickling():
    with ThreadPoolExecutor(2) as threads, Shared(lambda: 3) as shared:
        assert run_tasks(threads, shared, lambda value, k: value() + k, [(1,), (2,)]) == [4, 5]


def test_what_cannot_be_pickled_is_refused_with_the_mend(pool):
    with Shared(lambda: 3) as shared, pytest.raises(ValueError, match="top of a module"):
        run_tasks(pool, shared, unpacked_here, [(0.0,)])


def test_nothing_stays_behind():
    with Shared(1) as shared:
        assert shared.token in executor._here
    assert shared.token not in executor._here


def test_worker_forgets_old_problems():
    tokens = [f"token {k}" for k in range(executor.REMEMBERED + 3)]
    for token in tokens:
        assert executor._recall(token, executor.pickle.dumps(token)) == token
    assert len(executor._received) == executor.REMEMBERED
    assert executor._recall(tokens[-1], None) == tokens[-1]
    assert executor._recall(tokens[0], None) is executor._Unknown
    executor._received.clear()


def test_a_failed_task_loses_no_other(pool):
    with Shared(0) as shared:
        outcomes = {
            index: future
            for index, future in completed(pool, shared, fail_on_three, [(k,) for k in range(8)])
        }
    with pytest.raises(LookupError, match="no three"):
        outcomes.pop(3).result()
    assert {index: future.result() for index, future in outcomes.items()} == {
        k: k for k in (0, 1, 2, 4, 5, 6, 7)
    }


def test_tasks_are_drawn_as_workers_become_free():
    drawn = []

    def tasks():
        for k in range(1000):
            drawn.append(k)
            yield (k,)

    with ThreadPoolExecutor(1) as threads, Shared(0) as shared:
        outcomes = completed(threads, shared, add, tasks())
        next(outcomes)
        assert len(drawn) <= executor.IN_FLIGHT
        outcomes.close()


def test_workers_have_one_linear_algebra_thread_and_leave_our_environment_alone(monkeypatch):
    monkeypatch.setenv("OMP_NUM_THREADS", "2")
    monkeypatch.delenv("OPENBLAS_NUM_THREADS")
    with worker_pool(1) as workers, Shared(None) as shared:
        assert set(run_tasks(workers, shared, environment, [()])[0].values()) == {"1"}
        assert set(run_tasks(workers, shared, blas_threads, [()])[0]) == {1}
        assert run_tasks(workers, shared, interrupt_handling, [()]) == [True]
    assert os.environ["OMP_NUM_THREADS"] == "2"
    assert "OPENBLAS_NUM_THREADS" not in os.environ


def test_dead_worker_is_explained():
    with worker_pool(1) as workers, Shared(None) as shared:
        with pytest.raises(RuntimeError, match=r"worker process ended before its task did.*__main__"):
            run_tasks(workers, shared, leave, [()])


def test_leaving_the_pool_early_does_not_wait():
    start = time.monotonic()
    with pytest.raises(KeyboardInterrupt), WorkerPool(1) as workers:
        workers.submit(abs, 1).result()
        start = time.monotonic()
        workers.submit(time.sleep, 60)
        workers.submit(time.sleep, 60)
        raise KeyboardInterrupt
    assert time.monotonic() - start < 20.0


def test_pool_is_an_executor_with_as_many_workers_as_cores():
    with worker_pool() as workers:
        assert isinstance(workers, Executor)
        assert workers._max_workers == available_cores()


def test_no_worker_is_refused():
    with pytest.raises(ValueError, match="workers must be at least 1, not 0"):
        worker_pool(0)


def test_something_without_submit_is_refused():
    with pytest.raises(ValueError, match=r"something with submit\(\), not 3"):
        executor.checked_executor(3)
