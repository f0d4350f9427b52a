import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import h5py
import numpy as np
import pytest
from densities import CorrelatedGaussian, gaussian

from inverse.inference.mcmc import checkpoint as checkpoint_module
from inverse.inference.mcmc.checkpoint import read_checkpoint
from inverse.inference.mcmc.ensembles import run_ensembles

NAMES = ("a", "b", "c")
HERE = Path(__file__).parent


def starts(ensembles=3, walkers=12):
    return np.random.default_rng(0).normal(size=(ensembles, walkers, 3))


def fixed_run(steps, path=None, log_prob=gaussian, points=None, **settings):
    settings = {"seed": 5, "names": NAMES, "chunk": 20, "progress": False, "problem_hash": "p1"} | settings
    points = starts() if points is None else points
    return run_ensembles(log_prob, points, ess=1e9, max_steps=steps, checkpoint=path, **settings)


def assert_same_draws(one, other):
    for name in ("chain", "log_prob", "acceptance", "ess", "rhat"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name), err_msg=name)
    for name in (
        "steps_total",
        "burn_in",
        "thin",
        "converged",
        "evaluations",
        "rejected_evaluations",
        "message",
    ):
        assert getattr(one, name) == getattr(other, name), name


# ---- resuming


def test_resumed_run_equals_an_uninterrupted_one(tmp_path):
    whole = fixed_run(700)
    for stops in ((100, 700), (1, 2, 33, 250, 700), (700, 700)):
        path = tmp_path / f"{stops}.h5"
        for steps in stops:
            run = fixed_run(steps, path)
        assert_same_draws(run, whole)


def test_resumed_run_stops_where_an_uninterrupted_one_does(tmp_path):
    settings = {"seed": 5, "names": NAMES, "progress": False, "ess": 1500, "chunk": 50}
    whole = run_ensembles(gaussian, starts(), **settings)
    path = tmp_path / "run.h5"
    run_ensembles(gaussian, starts(), max_steps=130, checkpoint=path, **settings)
    for _ in range(2):
        assert_same_draws(run_ensembles(gaussian, starts(), checkpoint=path, **settings), whole)


def test_interrupted_run_is_resumable(tmp_path):
    def press(news):
        if news["steps"] >= 90:
            raise KeyboardInterrupt

    path = tmp_path / "run.h5"
    run = fixed_run(300, path, progress=press)
    assert run.interrupted
    assert read_checkpoint(path).commit.steps == run.steps_total
    assert_same_draws(fixed_run(300, path), fixed_run(300))


def test_thinned_run_resumes(tmp_path):
    path = tmp_path / "run.h5"
    whole = fixed_run(500, memory=0.1)
    assert whole.thin > 1
    fixed_run(333, path, memory=0.1)
    assert_same_draws(fixed_run(500, path, memory=0.1), whole)


def test_resuming_with_an_executor(tmp_path):
    from concurrent.futures import ThreadPoolExecutor

    path = tmp_path / "run.h5"
    with ThreadPoolExecutor(2) as threads:
        fixed_run(60, path, executor=threads)
    assert_same_draws(fixed_run(150, path), fixed_run(150))


def test_file_made_but_still_empty(tmp_path):
    """Killed before the first step: starts that differ by rounding give way to the stored ones."""
    path = tmp_path / "run.h5"

    class Armed:
        calls = 0

        def __call__(self, points):
            Armed.calls += 1
            if Armed.calls > 6:
                raise KeyboardInterrupt
            return gaussian(points)

    with pytest.raises(KeyboardInterrupt):
        fixed_run(50, path, log_prob=Armed())
    assert read_checkpoint(path).commit.steps == 0
    assert_same_draws(fixed_run(50, path, points=starts() * (1.0 + 1e-12)), fixed_run(50))


# ---- killing

SCRIPT = """
import sys
import numpy as np
from densities import CorrelatedGaussian
from inverse.inference.mcmc.ensembles import run_ensembles

run_ensembles(
    CorrelatedGaussian(10, 0.8),
    np.random.default_rng(0).normal(size=(2, 20, 10)),
    seed=5, names=[f"x{k}" for k in range(10)], ess=1e9, max_steps=100000, chunk=10, progress=False,
    checkpoint=sys.argv[1], problem_hash="p1", memory=20.0,
)
"""


def start_and_kill(path, after_steps, delay):
    """Run the script until it has passed some steps, then a moment longer, and kill it."""
    paths = os.pathsep.join([str(HERE), str(HERE.parents[1])])
    process = subprocess.Popen(
        [sys.executable, "-c", SCRIPT, str(path)], env={**os.environ, "PYTHONPATH": paths}
    )
    try:
        deadline = time.monotonic() + 60.0
        while not path.exists() or read_checkpoint(path).commit.steps <= after_steps:
            assert process.poll() is None, "the script ended by itself"
            assert time.monotonic() < deadline, "the script does not get on"
            time.sleep(0.005)
        time.sleep(delay)
    finally:
        process.send_signal(signal.SIGKILL)
        process.wait()
    return read_checkpoint(path).commit.steps


def assert_kills_leave_no_trace(path, kills):
    """Kill and resume some times; all steps are those of a run never killed."""
    rng = np.random.default_rng(1)
    steps = 0
    for _ in range(kills):
        reached = start_and_kill(path, steps, rng.uniform(0.0, 0.1))
        assert reached > steps
        steps = reached
    points = np.random.default_rng(0).normal(size=(2, 20, 10))
    settings = {
        "seed": 5,
        "names": [f"x{k}" for k in range(10)],
        "ess": 1e9,
        "max_steps": steps + 35,
        "chunk": 10000,
        "progress": False,
        "problem_hash": "p1",
        "memory": 20.0,
    }
    resumed = run_ensembles(CorrelatedGaussian(10, 0.8), points, checkpoint=path, **settings)
    assert_same_draws(resumed, run_ensembles(CorrelatedGaussian(10, 0.8), points, **settings))


def test_killed_run_resumes_to_the_same_draws(tmp_path):
    assert_kills_leave_no_trace(tmp_path / "run.h5", 1)


@pytest.mark.slow
def test_run_killed_25_times_resumes_to_the_same_draws(tmp_path):
    assert_kills_leave_no_trace(tmp_path / "run.h5", 25)


@pytest.mark.parametrize("field", ["steps", "keys", "position", "accepted", "checksum"])
def test_torn_commit_record_falls_back_to_the_one_before(tmp_path, field):
    """What a kill in the middle of a write leaves: rows beyond the commit, and half a record."""
    path = tmp_path / "run.h5"
    fixed_run(100, path)
    with h5py.File(path, "r+") as file:
        records = file["commits"][:]
        newest = int(np.argmax(records["steps"]))
        older = int(records["steps"].min())
        records[field][newest] = records[field][newest] + 1
        file["commits"][:] = records
        file["chain"][older:] = np.nan
    assert read_checkpoint(path).commit.steps == older < 100
    assert_same_draws(fixed_run(150, path), fixed_run(150))


def test_damaged_file_is_refused(tmp_path):
    path = tmp_path / "run.h5"
    fixed_run(20, path)
    with h5py.File(path, "r+") as file:
        records = file["commits"][:]
        records["checksum"] += 1
        file["commits"][:] = records
    with pytest.raises(ValueError, match="neither commit record of the checkpoint is whole"):
        fixed_run(40, path)


def test_appending_touches_no_table_of_the_file(tmp_path):
    """Beyond datasets' own bytes nothing changes on disk, so that no kill can leave a half-written table."""
    path = tmp_path / "run.h5"
    fixed_run(20, path)
    with h5py.File(path, "r") as file:
        places = [(file[name].id.get_offset(), file[name].id.get_storage_size()) for name in file]
    before = path.read_bytes()
    fixed_run(100, path)
    after = path.read_bytes()
    assert len(before) == len(after)
    for offset, size in places:
        blank = bytes(size)
        before = before[:offset] + blank + before[offset + size :]
        after = after[:offset] + blank + after[offset + size :]
    assert before == after


def test_failed_growth_leaves_the_old_file(tmp_path, monkeypatch):
    path = tmp_path / "run.h5"
    fixed_run(190, path)

    def fail(*arguments):
        raise OSError("disk full")

    monkeypatch.setattr(checkpoint_module.os, "replace", fail)
    with pytest.raises(OSError, match="disk full"):
        fixed_run(400, path)
    monkeypatch.undo()
    assert_same_draws(fixed_run(400, path), fixed_run(400))
    assert [item.name for item in tmp_path.iterdir()] == ["run.h5"]


# ---- reading


def test_file_is_readable_while_the_run_goes_on(tmp_path):
    path = tmp_path / "run.h5"
    seen = []

    def look(news):
        stored = read_checkpoint(path)
        with h5py.File(path, "r") as file:
            seen.append((news["steps"], stored.commit.steps, len(file["chain"])))

    run = fixed_run(300, path, progress=look)
    assert all(steps == committed <= capacity for steps, committed, capacity in seen)
    assert seen[-1][0] == 300
    stored = read_checkpoint(path)
    np.testing.assert_array_equal(stored.chain[:, run.burn_in :], run.chain)
    np.testing.assert_array_equal(stored.log_prob[:, run.burn_in :], run.log_prob)
    assert stored.names == NAMES and stored.problem_hash == "p1"


# ---- refusals


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"problem_hash": "p2"}, "belongs to another run.*problem_hash: 'p1' there, 'p2' here"),
        ({"seed": 6}, "seed: '5' there, '6' here"),
        ({"names": ("a", "b", "d")}, "names: .*'c'.* there, .*'d'.* here"),
        ({"points": starts(ensembles=4)}, "ensembles: 3 there, 4 here"),
        ({"points": starts(walkers=14)}, "walkers: 12 there, 14 here"),
        ({"points": starts() * 1.01}, "starts: the walkers start elsewhere"),
    ],
)
def test_checkpoint_of_another_run_is_refused_and_left_alone(tmp_path, change, message):
    path = tmp_path / "run.h5"
    fixed_run(40, path)
    before = path.read_bytes()
    with pytest.raises(ValueError, match=message):
        fixed_run(80, path, **change)
    assert path.read_bytes() == before


def test_other_moves_are_refused(tmp_path):
    from emcee.moves import DEMove, StretchMove

    path = tmp_path / "run.h5"
    fixed_run(40, path)
    for moves in (
        StretchMove(),
        [(DEMove(), 0.7), (StretchMove(), 0.3)],
        [(DEMove(gamma0=1.0), 0.8), (StretchMove(), 0.2)],
    ):
        with pytest.raises(ValueError, match=r"moves: '0\.8 DEMove"):
            fixed_run(80, path, moves=moves)
    assert_same_draws(fixed_run(80, path, moves=[(DEMove(), 0.8), (StretchMove(), 0.2)]), fixed_run(80))


def test_changed_density_is_refused_though_its_hash_was_forgotten(tmp_path):
    path = tmp_path / "run.h5"
    fixed_run(40, path)
    with pytest.raises(ValueError, match="log density of the stored walkers has changed"):
        fixed_run(80, path, log_prob=lambda points: 1.1 * gaussian(points))


def test_file_of_another_kind_is_refused_and_left_alone(tmp_path):
    text, other = tmp_path / "notes.h5", tmp_path / "other.h5"
    text.write_text("not HDF5")
    with h5py.File(other, "w") as file:
        file["x"] = 1
    with pytest.raises(ValueError, match="cannot be read as a checkpoint"):
        fixed_run(40, text)
    with pytest.raises(ValueError, match="is not a checkpoint of this version"):
        fixed_run(40, other)
    assert text.read_text() == "not HDF5"
