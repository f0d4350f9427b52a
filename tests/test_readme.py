"""README's two commands, its example and its table agree with what exists and with what CI runs."""

import ast
import re
import shutil
import subprocess
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import inverse
from inverse.description.sample.places import bind
from inverse.description.sample.stack_file import read_stack

FENCED = re.compile(r"^```(\w*)\n(.*?)^```$", re.MULTILINE | re.DOTALL)


@pytest.fixture(scope="module")
def readme(repository: Path) -> str:
    return (repository / "README.md").read_text(encoding="utf-8")


def blocks(text: str, language: str) -> list[str]:
    """Fenced blocks of one language, in order."""
    return [body for found, body in FENCED.findall(text) if found == language]


def scratch_tree(folder: Path, repository: Path, first: str, second: str) -> Path:
    """CI's script beside a README whose two commands are these."""
    (folder / ".ci").mkdir()
    shutil.copy(repository / ".ci" / "run", folder / ".ci" / "run")
    text = f"# x\n\n```bash\n{first}\n```\n\ntext\n\n```bash\n{second}\n```\n"
    (folder / "README.md").write_text(text, encoding="utf-8")
    return folder


def run_ci(folder: Path, step: str) -> subprocess.CompletedProcess[str]:
    command = ["bash", ".ci/run", step]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, stdin=subprocess.DEVNULL)


def test_two_commands_of_one_line_each(readme: str) -> None:
    first, second = blocks(readme, "bash")[:2]
    assert first.count("\n") == second.count("\n") == 1
    assert first.startswith("python3 -m venv .venv &&") and first.endswith("&& .venv/bin/python -m inverse\n")
    assert second == ".venv/bin/python -m pytest\n"


def test_ci_takes_both_commands_out_of_the_readme(repository: Path, tmp_path: Path) -> None:
    tree = scratch_tree(
        tmp_path, repository, "touch first", "test -f first && echo '== 3 passed in 0.12s =='"
    )
    done = run_ci(tree, "readme")
    assert done.returncode == 0, done.stderr
    assert done.stdout.splitlines()[-1] == "== 3 passed in 0.12s =="


@pytest.mark.parametrize(
    "commands", [("false", "echo '1 passed in 1s'"), ("true", "echo '1 failed in 1s'; exit 1")]
)
def test_ci_fails_where_a_command_fails(repository: Path, tmp_path: Path, commands: tuple[str, str]) -> None:
    done = run_ci(scratch_tree(tmp_path, repository, *commands), "readme")
    assert done.returncode == 1
    assert "Passed" not in done.stdout


def test_distribution_name_is_the_same_everywhere(readme: str, repository: Path) -> None:
    project = tomllib.loads((repository / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert f"`{project['name']}`" in readme


def names_used(source: str, module: str) -> set[str]:
    """Attributes of `module` that some Python source uses."""
    nodes = (node for node in ast.walk(ast.parse(source)) if isinstance(node, ast.Attribute))
    return {node.attr for node in nodes if isinstance(node.value, ast.Name) and node.value.id == module}


def test_names_in_the_example_exist(readme: str) -> None:
    used = set().union(*(names_used(block, "inv") for block in blocks(readme, "python")))
    assert {"read_trace", "Stack", "Inversion"} <= used
    assert sorted(name for name in used if not hasattr(inverse, name)) == []


def test_calls_in_the_table_exist(readme: str) -> None:
    rows = re.findall(r"^\| `([\w.]+)\(", readme, re.MULTILINE)
    assert len(rows) > 10
    missing = [row for row in rows if not _resolves(row)]
    assert missing == []


def test_no_module_takes_the_name_of_a_public_call(readme: str, repository: Path) -> None:
    """Importing `inverse/x.py` binds `inverse.x` to the module, over any lazily loaded function `x`."""
    rows = re.findall(r"^\| `(\w+)\(", readme, re.MULTILINE)
    assert "first_look" in rows
    assert [row for row in rows if (repository / "inverse" / f"{row}.py").exists()] == []


def _resolves(dotted: str) -> bool:
    target: object = inverse
    for name in dotted.replace("inversion.", "Inversion.").split("."):
        if not hasattr(target, name):
            return False
        target = getattr(target, name)
    return callable(target)


def test_files_named_exist(readme: str, repository: Path) -> None:
    links = re.findall(r"\]\(([^)#:]+)\)", readme)
    assert links
    assert [link for link in links if not (repository / link).exists()] == []


def test_the_example_runs_as_printed_and_is_the_bundled_one(readme, repository, monkeypatch):
    """From the folder of the README, up to the fit; the priors are those of the stack file, to its two digits."""
    monkeypatch.chdir(repository)
    (source,) = (block for block in blocks(readme, "python") if "read_trace" in block)
    printed: dict[str, Any] = {}
    exec(source.partition("fit = ")[0], printed)
    bundled = bind(*read_stack(repository / "inverse" / "example" / "stack.toml")).priors
    ours = bind(printed["stack"], printed["setup"]).priors
    assert printed["inversion"].names[: len(ours)] == tuple(ours) == tuple(bundled)
    for name, prior in bundled.items():
        np.testing.assert_allclose(ours[name].ppf([0.1, 0.5, 0.9]), prior.ppf([0.1, 0.5, 0.9]), rtol=0.01)
