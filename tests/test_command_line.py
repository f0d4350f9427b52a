"""What `python -m inverse` says, and what it returns, where its arguments will not do."""

from pathlib import Path

import pytest

from inverse.__main__ import EXAMPLE, main


def test_a_trace_without_a_stack_is_refused(capsys):
    assert main([str(EXAMPLE / "wafer07.csv")]) == 2
    assert "Give both a trace and a stack file" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("trace", "stack", "said"),
    [
        ("nofile.csv", "stack.toml", "error: no file"),
        ("wafer07.csv", "nofile.toml", "error: There is no stack file"),
        ("wafer07.csv", "wafer07.csv", "error: 'wafer07.csv' is not a TOML file"),
    ],
)
def test_files_that_will_not_do_are_named(tmp_path, capsys, trace, stack, said):
    arguments = [str(EXAMPLE / trace), str(EXAMPLE / stack), "--out", str(tmp_path / "out")]
    assert main(arguments) == 1
    assert said in capsys.readouterr().err


def test_a_folder_that_cannot_be_made_is_said_before_the_work(tmp_path: Path, capsys):
    taken = tmp_path / "taken"
    taken.write_text("", encoding="utf-8")
    assert main(["--out", str(taken)]) == 1
    captured = capsys.readouterr()
    assert (
        f"error: The folder '{taken}' for the results cannot be made (File exists); give another"
        in captured.err
    )
    assert captured.out == ""


def test_a_seed_that_is_none_is_refused(tmp_path, capsys):
    assert main(["--seed", "-1", "--out", str(tmp_path / "out")]) == 1
    assert "error: seed must be a whole number, 0 or more, not -1." in capsys.readouterr().err
