"""Break one coefficient at a time in a scratch copy: the fast tests named beside it must notice.

`mutations.toml` holds the list. Each entry replaces one text, which must stand in its file exactly once, and
runs a few tests. A change that they do not notice is a coefficient that nothing protects.
"""

import os
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
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


def run_tests(scratch: Path, tests: list[str]) -> tuple[int, str]:
    """Run tests in a copy until the first fails; the exit status and what was said."""
    options = ["-x", "-q", "-p", "no:cacheprovider", "-p", "no:nbmake", "-o", "addopts=-m 'not slow'"]
    command = [sys.executable, "-m", "pytest", *options, *tests]
    environment = {**os.environ, "PYTHONPATH": str(scratch)}
    try:
        run = subprocess.run(
            command, cwd=scratch, env=environment, capture_output=True, text=True, timeout=SECONDS
        )
    except subprocess.TimeoutExpired:
        return FAILED, f"stopped after {SECONDS} s"
    return run.returncode, run.stdout[-1500:] + run.stderr[-500:]


def judge(mutant: dict, copies: Queue) -> str:
    """What is wrong with a mutant; empty if the tests noticed it."""
    scratch = copies.get()
    try:
        with broken(scratch, mutant):
            status, said = run_tests(scratch, mutant["tests"])
    except ValueError as error:
        return str(error)
    finally:
        copies.put(scratch)
    if status == FAILED:
        return ""
    return f"survived: {label(mutant)}" if status == PASSED else f"{label(mutant)}: pytest broke off\n{said}"


@pytest.mark.slow
@pytest.mark.unproven
def test_no_mutant_survives(repository, tmp_path):
    copies: Queue = Queue()
    for number in range(PROCESSES):
        copies.put(copy_tree(repository, tmp_path / str(number)))
    everything = sorted({test for mutant in LIST for test in mutant["tests"]})
    status, said = run_tests(copies.queue[0], everything)
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
