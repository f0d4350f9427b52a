"""A batch: the same numbers everywhere, nothing lost, what fails named."""

import json
import os
import subprocess
import sys
import time
from concurrent.futures import BrokenExecutor, Executor, Future, ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from scipy import stats
from toy import NAME, PRIOR, other_toy, toy, toy_trace, toy_traces

from inverse.inference.mcmc.executor import worker_pool
from inverse.study.batches.batch import batch
from inverse.study.batches.store import SiteRecord, SiteStore
from inverse.study.splits.compare import compare_splits

FROM_HERE = {**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])}


def quiet(problem, traces, **options):
    """Sample toys, which have no density to draw from by importance, as chains would be."""
    given = {"seed": 1, "progress": False, "workers": 0, "method": "mcmc", **options}
    return batch(problem, traces, **given)


def rows(traces, **columns):
    """A table of the traces' wafers, with extra columns by site."""
    sites = list(traces)
    extra = {name: [entries.get(s, 0) for s in sites] for name, entries in columns.items()}
    return pd.DataFrame({"site": sites, "wafer": [s.split("-")[0] for s in sites], **extra})


def test_draws_come_out_by_site_with_their_units():
    found = quiet(toy, toy_traces(3), draws=100)
    assert found[NAME].dims == ("site", "draw") and found[NAME].shape == (3, 100)
    assert found[NAME].attrs["units"] == "nm/GPa"
    assert list(found["status"].values) == ["ok"] * 3
    assert np.allclose(found[NAME].median("draw"), [0.1, 0.101, 0.102], rtol=0.05)
    middle = found["quantile"].sel(quantity=NAME, probability=0.5)
    assert np.allclose(middle, found[NAME].median("draw"), rtol=0.01)
    assert json.loads(str(found["prior"].sel(quantity=NAME).values[0]))["family"] == "halfcauchy"


def test_order_company_and_executor_do_not_matter():
    traces = toy_traces(6)
    first = quiet(toy, traces)
    turned = quiet(toy, dict(reversed(traces.items())))
    alone = quiet(toy, {"W1-0": traces["W1-0"]})
    with ThreadPoolExecutor(3) as threads:
        threaded = quiet(toy, traces, executor=threads)
    with worker_pool(2) as processes:
        pooled = quiet(toy, traces, executor=processes)
    for other in (turned.sel(site=first["site"]), threaded, pooled):
        assert first.drop_attrs().identical(other.drop_attrs())
    assert np.array_equal(first[NAME].sel(site="W1-0"), alone[NAME].sel(site="W1-0"))
    assert not np.array_equal(first[NAME][0], quiet(toy, traces, seed=2)[NAME][0])


def test_the_own_pool_gives_the_same_numbers():
    traces = toy_traces(4)
    assert quiet(toy, traces).identical(quiet(toy, traces, workers=2))


def test_what_speaks_against_the_model_stands_in_the_sites_row():
    traces = toy_traces(2)
    found = quiet(toy, traces, table=rows(traces, look={"W0-1": 1}))
    assert list(found["warning"].values) == ["", "1000 draws were looked at."]
    assert list(found["method"].values) == ["mcmc", "mcmc"]


def test_distinct_sites_have_distinct_seeds():
    trace = toy_trace(0.1, 0)
    found = quiet(toy, {"a": trace, "b": trace})
    assert not np.array_equal(found[NAME][0], found[NAME][1])


def poisoned():
    traces = toy_traces(6)
    traces["W0-1"] = traces["W0-1"].assign(
        reflectance_change=traces["W0-1"]["reflectance_change"].where(lambda v: v.delay > 1)
    )
    traces["W0-2"] = traces["W0-2"].copy()
    traces["W0-2"]["delay"] = traces["W0-2"]["delay"].assign_attrs(units="fs")
    noise = 1e4 * np.random.default_rng(1).standard_normal(50)
    traces["W0-3"] = traces["W0-3"].assign(reflectance_change=("delay", noise))
    return traces


def test_poisoned_sites_end_as_marked_rows_and_cost_nothing_else():
    clean, found = quiet(toy, toy_traces(6)), quiet(toy, poisoned())
    assert list(found["status"].values) == ["ok", "failed", "failed", "nothing learnt", "ok", "ok"]
    reasons = dict(zip(found["site"].values, found["reason"].values, strict=True))
    assert reasons["W0-1"].startswith("reflectance_change is NaN at 11 delays")
    assert reasons["W0-2"].startswith("delays are in fs; convert")
    assert "narrowed no prior" in reasons["W0-3"]
    for site in ("W0-0", "W1-0", "W1-1"):
        assert np.array_equal(clean[NAME].sel(site=site), found[NAME].sel(site=site))
    assert np.isnan(found[NAME].sel(site="W0-1")).all()


def test_a_site_that_is_too_slow_is_given_up():
    traces = toy_traces(3)
    table = rows(traces, sleep={"W0-1": 30})
    for workers in (0, 1):
        found = quiet(toy, traces, table=table, timeout=4.0, workers=workers)
        assert list(found["status"].values) == ["ok", "failed", "ok"]
        assert found["reason"].values[1] == "took longer than the 4 s allowed"


def test_a_site_that_kills_its_worker_is_found_and_costs_no_other():
    traces = toy_traces(4)
    table = rows(traces, sleep={"W0-2": "dead"})
    found = quiet(toy, traces, table=table, workers=1)
    assert list(found["status"].values) == ["ok", "ok", "failed", "ok"]
    assert "worker process ended" in found["reason"].values[2]


class DyingExecutor(Executor):
    """Does some tasks, then breaks as a pool does whose worker was killed."""

    def __init__(self, lives: int, refuses: bool = False) -> None:
        self.lives, self.refuses = lives, refuses

    def submit(self, function, /, *arguments, **named):
        self.lives -= 1
        future = Future()
        if self.refuses:
            raise BrokenExecutor("broken")
        if self.lives < 0:
            future.set_exception(BrokenExecutor("broken"))
        else:
            future.set_result(function(*arguments, **named))
        return future


def test_an_executor_that_dies_leaves_marked_rows_and_a_store_to_go_on_from(tmp_path):
    traces, path = toy_traces(5), tmp_path / "a.nc"
    found = quiet(toy, traces, executor=DyingExecutor(2), path=path)
    assert list(found["status"].values) == ["ok", "ok", "failed", "failed", "failed"]
    assert "run the batch again with the same path" in found["reason"].values[2]
    assert list(quiet(toy, traces, path=path)["status"].values) == ["ok"] * 5
    assert (
        list(quiet(toy, traces, executor=DyingExecutor(0, refuses=True))["status"].values) == ["failed"] * 5
    )


def test_what_is_not_converged_is_said_and_kept():
    found = quiet(toy, toy_traces(1), max_steps=10)
    assert found["status"].values[0] == "not converged"
    assert found["reason"].values[0] == "10 steps did not suffice"
    assert np.isfinite(found[NAME]).all()


def test_an_interrupted_batch_goes_on_to_the_identical_file(tmp_path):
    traces = toy_traces(8)
    whole, halved = tmp_path / "whole.nc", tmp_path / "halved.nc"
    quiet(toy, traces, path=whole)

    def stop(news):
        if news["done"] == 3:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        quiet(toy, traces, path=halved, progress=stop)
    assert not halved.exists()
    told = []
    quiet(toy, dict(reversed(traces.items())), path=halved, progress=told.append)
    assert len(told) == 5
    quiet(toy, traces, path=halved)
    assert whole.read_bytes() == halved.read_bytes()


KILLED = """
import os, sys
from pathlib import Path
sys.path.insert(0, sys.argv[2])
from toy import toy, toy_traces
from inverse.study.batches.batch import batch
def stop(news):
    if news["done"] == 4:
        os.kill(os.getpid(), 9)
batch(toy, toy_traces(8), seed=1, workers=0, method="mcmc", path=sys.argv[1], progress=stop)
"""


def test_a_killed_process_goes_on_to_the_identical_file(tmp_path):
    whole, killed = tmp_path / "whole.nc", tmp_path / "killed.nc"
    command = [sys.executable, "-c", KILLED, str(killed), str(Path(__file__).parent)]
    root = Path(__file__).parents[2]
    assert subprocess.run(command, cwd=root, check=False).returncode == -9
    told = []
    quiet(toy, toy_traces(8), path=killed, progress=told.append)
    quiet(toy, toy_traces(8), path=whole)
    assert len(told) == 4
    assert whole.read_bytes() == killed.read_bytes()


LARGE = """
import os, sys
from multiprocessing import active_children
sys.path.insert(0, sys.argv[2])
from test_batch import large
from toy import toy
from inverse.study.batches.batch import batch
def stop(news):
    if news["done"] == 100:
        print(*(child.pid for child in active_children()), flush=True)
        os.kill(os.getpid(), 9)
if __name__ == "__main__":
    batch(toy, large(), seed=1, workers=2, method="mcmc", path=sys.argv[1], progress=stop)
"""


def large():
    """200 sites, of which three are poisoned: NaN, a wrong unit, noise without signal."""
    return {
        **toy_traces(200),
        **{f"bad-{s}": t for s, t in poisoned().items() if s in ("W0-1", "W0-2", "W0-3")},
    }


def ends(processes, seconds=30.0):
    end = time.monotonic() + seconds
    while any(is_alive(pid) for pid in processes):
        if time.monotonic() > end:
            return False
        time.sleep(0.1)
    return True


def is_alive(pid):
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    return True


@pytest.mark.slow
def test_two_hundred_sites_on_two_processes_killed_half_way_go_on_to_the_identical_file(tmp_path):
    whole, killed, script = tmp_path / "whole.nc", tmp_path / "killed.nc", tmp_path / "script.py"
    script.write_text(LARGE)
    command = [sys.executable, str(script), str(killed), str(Path(__file__).parent)]
    done = subprocess.run(command, env=FROM_HERE, check=False, stdout=subprocess.PIPE, text=True)
    assert done.returncode == -9 and not killed.exists()
    workers = [int(pid) for pid in done.stdout.split()]
    assert len(workers) == 2 and ends(workers), "a killed batch leaves no worker behind"
    told = []
    found = quiet(toy, large(), path=killed, progress=told.append)
    assert 90 <= len(told) <= 103
    quiet(toy, large(), path=whole)
    assert whole.read_bytes() == killed.read_bytes()
    bad = {s: v for s, v in zip(found["site"].values, found["status"].values, strict=True) if v != "ok"}
    assert bad == {"bad-W0-1": "failed", "bad-W0-2": "failed", "bad-W0-3": "nothing learnt"}


UNGUARDED = """
import sys
sys.path.insert(0, {tests!r})
from toy import toy, toy_traces
from inverse.study.batches.batch import batch
batch(toy, toy_traces(4), seed=1, workers=2, method="mcmc", progress=False)
"""


def test_a_script_without_a_guard_is_told_so(tmp_path):
    """Worker processes read the script anew, and must neither start workers of their own nor fill the screen."""
    script = tmp_path / "script.py"
    script.write_text(UNGUARDED.format(tests=str(Path(__file__).parent)))
    command = [sys.executable, str(script)]
    done = subprocess.run(
        command,
        env=FROM_HERE,
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
    )
    assert done.returncode == 1
    assert done.stderr.count("Traceback") == done.stderr.count("BrokenProcessPool") + 1 == 1
    assert "RuntimeError: no worker process could start; the usual reason is a script" in done.stderr
    assert 'do not stand under `if __name__ == "__main__":`' in done.stderr


def test_a_torn_record_is_cut_off(tmp_path):
    path = tmp_path / "s.sites"
    store = SiteStore(path, {"seed": 1})
    for site in "ab":
        store.add(SiteRecord(site, "f", "ok", draws=np.ones((1, 3)), quantiles=np.ones((1, 5))))
    size = path.stat().st_size
    path.write_bytes(path.read_bytes()[:-7])
    again = SiteStore(path, {"seed": 1})
    assert list(again.records) == ["a"] and np.array_equal(again.records["a"].draws, np.ones((1, 3)))
    again.add(SiteRecord("b", "f", "ok", draws=np.ones((1, 3)), quantiles=np.ones((1, 5))))
    assert path.stat().st_size == size


def test_the_store_of_another_batch_is_refused(tmp_path):
    traces, path = toy_traces(2), tmp_path / "a.nc"
    quiet(toy, traces, path=path)
    for change, word in (({"seed": 2}, "seed"), ({"draws": 300}, "effort")):
        with pytest.raises(ValueError, match=f"belongs to another batch.*{word}"):
            quiet(toy, traces, path=path, **change)
    with pytest.raises(ValueError, match=r"belongs to another batch.*problem"):
        quiet(other_toy, traces, path=path)
    (tmp_path / "b.nc.sites").write_text("my notes")
    with pytest.raises(ValueError, match="is no store of finished sites"):
        quiet(toy, traces, path=tmp_path / "b.nc")
    assert (tmp_path / "b.nc.sites").read_text() == "my notes"


def test_only_what_changed_is_done_again(tmp_path):
    traces, path, told = poisoned(), tmp_path / "a.nc", []
    quiet(toy, traces, path=path)
    traces["W0-1"] = toy_traces(6)["W0-1"]
    found = quiet(toy, traces, path=path, progress=told.append)
    assert [news["site"] for news in told] == ["W0-1"]
    assert found["status"].sel(site="W0-1") == "ok"
    told.clear()
    quiet(toy, traces, path=path, retry=True, progress=told.append)
    assert [news["site"] for news in told] == ["W0-2"]


def test_the_file_is_the_result(tmp_path):
    traces, path = toy_traces(3), tmp_path / "a.nc"
    made = quiet(toy, traces, path=path, table=rows(traces))
    with xr.open_dataset(path, engine="h5netcdf") as stored:
        assert np.array_equal(stored[NAME], made[NAME])
        assert list(stored["wafer"].values) == ["W0"] * 3
        assert json.loads(stored.attrs["inverse"])["seed"] == 1


def test_neighbours_start_from_the_first_sites_modes():
    """The toy says in its log posterior how many points it was given to start from; its modes are stored."""
    traces, seen = toy_traces(8), []

    def spy(trace, row):
        made = toy(trace, row)
        search = made.least_squares
        made.least_squares = lambda **given: (
            seen.append((row["name"], len(given["points"]), given["starts"])),
            search(**given),
        )[1]
        return made

    table = {s: {"wafer": s.split("-")[0], "name": s} for s in traces}
    found = quiet(spy, dict(reversed(traces.items())), table=table, neighbours="wafer")
    assert sorted(seen) == [
        (s, int(not s.endswith("-0")), 12 if s.endswith("-0") else 3) for s in sorted(traces)
    ]
    assert (found["status"] == "ok").all()


def test_a_failed_leader_leaves_its_neighbours_to_themselves():
    traces = poisoned()
    traces["W0-0"] = traces.pop("W0-1")
    found = quiet(toy, traces, table=rows(traces), neighbours="wafer")
    assert dict(zip(found["site"].values, found["status"].values, strict=True))["W1-1"] == "ok"


def test_a_table_may_have_several_forms_and_labels_become_coordinates():
    traces = toy_traces(2)
    columns = {"site": list(traces), "x": [1.0, 2.0], "split": ["A", "B"]}
    forms = [
        pd.DataFrame(columns),
        pd.DataFrame(columns).set_index("site"),
        columns,
        {s: {"x": x, "split": p} for s, x, p in zip(*columns.values(), strict=True)},
        [{"site": s, "x": x, "split": p} for s, x, p in zip(*columns.values(), strict=True)],
    ]
    found = [quiet(toy, traces, table=form) for form in forms]
    assert all(found[0].identical(other) for other in found[1:])
    assert list(found[0]["x"].values) == [1.0, 2.0] and list(found[0]["split"].values) == ["A", "B"]


def test_a_batch_goes_straight_into_a_comparison():
    traces = {
        f"{s}{w}-{k}": toy_trace(c * (1 + 0.02 * w), 10 * w + k)
        for s, c in (("A", 0.17), ("B", 0.05))
        for w in range(3)
        for k in range(2)
    }
    table = {s: {"split": s[0], "wafer": s[:2]} for s in traces}
    compared = compare_splits(quiet(toy, traces, table=table), quantity=NAME, seed=1)
    assert compared.pair("B", "A").decided
    assert compared.split("A").wafers == 3


def test_a_thousand_sites_fit_into_memory():
    """Twenty quantities, 400 draws: 64 MB of draws; the rest stays under 10 MB."""
    from inverse.study.batches.results import results_dataset

    names = {f"q{k}": {"units": "1", "prior": ""} for k in range(20)}
    record = SiteRecord("", "", "ok", "", names, np.ones((20, 400)), np.ones((20, 5)))
    sites = [str(k) for k in range(1000)]
    made = results_dataset(sites, {}, dict.fromkeys(sites, record), 400, {})
    assert made.nbytes < 20 * 400 * 1000 * 8 + 10e6


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"traces": {}}, "there are no traces"),
        ({"traces": ["a/x.csv", "b/x.csv"]}, "two trace files have the same name"),
        ({"table": {"other": {"wafer": 1}}}, r"no row for 2 of 2 sites \(W0-0, W0-1\)"),
        ({"table": 3}, "the table of sites is a int of no known form"),
        ({"table": {"site": ["W0-0", "W0-1"], "x": [1]}}, "columns of the table have different lengths"),
        ({"table": [{"site": "W0-0"}, {"site": "W0-0"}]}, "names site 'W0-0' twice"),
        ({"neighbours": "wafer"}, "neighbours='wafer' is no column of site 'W0-0'"),
        ({"draws": 10}, "draws=10; keep 50 or more"),
        ({"seed": "one"}, "seed must be a whole number, 0 or more, not 'one'"),
        ({"workers": 1.5}, "workers must be a whole number, 0 or more, not 1.5"),
        ({"starts": 0}, "starts must be a whole number, 1 or more, not 0"),
        ({"ensembles": 1}, "ensembles must be a whole number, 2 or more, not 1"),
        ({"ess": 100}, "ess=100 is below draws=400"),
        ({"method": "guess"}, "method='guess'; give one of importance, mcmc"),
        ({"timeout": -1}, "timeout=-1; give a positive"),
        ({"path": "here.csv"}, r"'here.csv' does not end in .nc"),
        ({"path": "nowhere/a.nc"}, "folder 'nowhere' does not exist"),
        ({"problem": 3}, "problem is 3; give a Recipe"),
        ({"executor": 3}, "executor must be a concurrent.futures.Executor"),
    ],
)
def test_what_is_refused(change, message):
    given = {"problem": toy, "traces": toy_traces(2), **change}
    with pytest.raises(ValueError, match=message):
        quiet(given.pop("problem"), given.pop("traces"), **given)


def test_a_file_that_is_missing_costs_only_its_site(tmp_path):
    found = quiet(toy, {"a": toy_trace(0.1, 1), "b": tmp_path / "none.csv"})
    assert list(found["status"].values) == ["ok", "failed"]
    assert "none.csv" in found["reason"].values[1]


def test_dask_runs_a_batch():
    distributed = pytest.importorskip("distributed", reason="the extra 'cluster' is not installed")
    traces = toy_traces(6)
    with (
        distributed.LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None) as cluster,
        distributed.Client(cluster) as client,
    ):
        found = quiet(toy, traces, executor=client.get_executor())
    assert found.identical(quiet(toy, traces))


@pytest.mark.slow
@pytest.mark.benchmark
def test_two_processes_do_nearly_twice_as_much(tmp_path):
    """200 sites, each busy for a fixed time and noting when: on average more than 1.7 of them are under way at once.

    That is the throughput over one process, and does not depend on what else the machine does.
    """
    traces = {f"s{k}": toy_trace(0.1, k) for k in range(200)}
    table = {s: {"sleep": 0.1, "note": str(tmp_path / s)} for s in traces}
    with worker_pool(2) as pool:
        list(pool.map(abs, range(4)))
        quiet(toy, traces, table=table, executor=pool)
    times = np.array([np.loadtxt(tmp_path / s) for s in traces])
    start, end = times.T
    assert (end - start).sum() / (end.max() - start.min()) > 1.7


def test_the_prior_of_a_derived_quantity_is_stored():
    found = quiet(toy, toy_traces(1))
    described = json.loads(str(found["prior"].sel(quantity="Al|Si.stiffness").values[0]))
    assert described["family"] == "lognorm"
    known = np.std(np.log(1 / PRIOR.rvs(200_000, random_state=np.random.default_rng(0))))
    assert described["args"][0] == pytest.approx(known, rel=0.2)
    assert stats.lognorm(*described["args"], **described["kwds"]).median() == pytest.approx(20, rel=0.3)
