"""Break one coefficient at a time in a scratch copy: the fast tests named beside it must notice.

`mutations.toml` holds the list. Each entry replaces one text, which must stand in its file exactly once, and
runs a few tests. A change that they do not notice is a coefficient that nothing protects.
"""

import json
import os
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import ExitStack, contextmanager
from itertools import count
from pathlib import Path
from queue import Queue
from shutil import copyfile

import pytest

LIST = tomllib.loads((Path(__file__).parent / "mutations.toml").read_text())["mutant"]
PROCESSES = 2
SECONDS = 180
PASSED, FAILED = 0, 1
# Bytecode is told fresh by whole seconds, and two changes may fall into one: give every writing its own.
_seconds = count(1_000_000_000)


def label(mutant: dict) -> str:
    return f"{mutant['file']}: {mutant['original']}  ->  {mutant['mutated']}"


def copy_tree(repository: Path, scratch: Path) -> Path:
    """Copy every file that git tracks or has yet to, as it stands in the working tree."""
    command = ["git", "ls-files", "-z", "--cached", "--others", "--exclude-standard"]
    listed = subprocess.run(command, cwd=repository, capture_output=True, check=True)
    for name in filter(None, listed.stdout.decode().split("\0")):
        if (repository / name).exists():
            (scratch / name).parent.mkdir(parents=True, exist_ok=True)
            copyfile(repository / name, scratch / name)
    return scratch


def write(path: Path, text: str) -> None:
    path.write_text(text)
    second = next(_seconds)
    os.utime(path, (second, second))


@contextmanager
def broken(scratch: Path, mutant: dict) -> Iterator[None]:
    path = scratch / mutant["file"]
    whole = path.read_text()
    if whole.count(mutant["original"]) != 1:
        found = whole.count(mutant["original"])
        raise ValueError(f"{label(mutant)}: the original text stands {found} times, once is needed")
    write(path, whole.replace(mutant["original"], mutant["mutated"]))
    try:
        yield
    finally:
        write(path, whole)


# Imports what takes longest once and forks for every run; the package itself is imported afresh each time.
SERVER = """
import json, os, signal, sys, time
import numpy, pytest, scipy.integrate, scipy.linalg, scipy.optimize, scipy.stats, xarray

for line in sys.stdin:
    arguments, log, seconds = json.loads(line)
    child = os.fork()
    if child == 0:
        os.setsid()
        file = os.open(log, os.O_WRONLY | os.O_CREAT | os.O_TRUNC)
        os.dup2(file, 1)
        os.dup2(file, 2)
        status = 70
        try:
            status = int(pytest.main(arguments))
            sys.stdout.flush()
        finally:
            os._exit(status)
    end, done = time.monotonic() + seconds, 0
    while not done:
        done, status = os.waitpid(child, os.WNOHANG)
        time.sleep(0.02)
        if not done and time.monotonic() > end:
            os.killpg(child, signal.SIGKILL)
            end += 1e9
    print(os.waitstatus_to_exitcode(status), flush=True)
"""


class Copy:
    """A scratch copy of the repository and a process that runs its tests."""

    def __init__(self, scratch: Path) -> None:
        self.scratch = scratch
        environment = {**os.environ, "PYTHONPATH": str(scratch), "OPENBLAS_NUM_THREADS": "1"}
        self.process = subprocess.Popen(
            [sys.executable, "-c", SERVER],
            cwd=scratch,
            env=environment,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )

    def run(self, tests: list[str], seconds: int = SECONDS) -> tuple[int, str]:
        """Run tests until the first fails; the exit status and what was said. A run that is stopped has failed."""
        options = ["-x", "-q", "-p", "no:cacheprovider", "-p", "no:nbmake", "-o", "addopts=-m 'not slow'"]
        log = self.scratch / "said.txt"
        self.process.stdin.write(json.dumps([[*options, *tests], str(log), seconds]) + "\n")
        self.process.stdin.flush()
        status = int(self.process.stdout.readline())
        return (FAILED if status < 0 else status), log.read_text(errors="replace")[-2000:]

    def close(self) -> None:
        self.process.stdin.close()
        self.process.stdout.close()
        self.process.wait()


def judge(mutant: dict, copies: Queue) -> str:
    """What is wrong with a mutant; empty if the tests noticed it."""
    copy = copies.get()
    try:
        with broken(copy.scratch, mutant):
            status, said = copy.run(mutant["tests"])
    except ValueError as error:
        return str(error)
    finally:
        copies.put(copy)
    if status == FAILED:
        return ""
    return f"survived: {label(mutant)}" if status == PASSED else f"{label(mutant)}: pytest broke off\n{said}"


@pytest.mark.slow
@pytest.mark.skipif(not hasattr(os, "fork"), reason="runs are forked")
def test_no_mutant_survives(repository, tmp_path):
    copies: Queue = Queue()
    with ExitStack() as stack:
        for number in range(PROCESSES):
            copy = Copy(copy_tree(repository, tmp_path / str(number)))
            stack.callback(copy.close)
            copies.put(copy)
        everything = sorted({test for mutant in LIST for test in mutant["tests"]})
        status, said = copies.queue[0].run(everything, seconds=10 * SECONDS)
        assert status == PASSED, f"the tests fail without any change, so they can tell nothing:\n{said}"
        with ThreadPoolExecutor(PROCESSES) as pool:
            verdicts = list(pool.map(lambda mutant: judge(mutant, copies), LIST))
    trouble = [verdict for verdict in verdicts if verdict]
    assert not trouble, f"{len(trouble)} of {len(LIST)}:\n" + "\n".join(trouble)


def test_every_mutant_changes_something_and_names_tests_that_exist(repository):
    for mutant in LIST:
        assert mutant["original"] != mutant["mutated"], label(mutant)
        assert (repository / mutant["file"]).exists(), label(mutant)
        for test in mutant["tests"]:
            assert (repository / test.split("::")[0]).exists(), f"{label(mutant)}: {test}"
