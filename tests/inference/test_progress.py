import io
from dataclasses import replace

import pytest

from inverse.inference.mcmc import progress
from inverse.inference.mcmc.progress import Bar, Lines, Progress, Silent, reporter

NEWS = Progress(200, 1000, 312.4, 1000, 1.0234, 1.01, 200)


def test_plain_lines_where_stderr_is_no_terminal(capsys, monkeypatch):
    monkeypatch.setattr(progress, "SECONDS_BETWEEN_LINES", 0.0)
    display = reporter(True)
    assert isinstance(display, Lines)
    display.show(NEWS)
    display.close()
    captured = capsys.readouterr()
    assert captured.err == "sampling: 200 of at most 1000 steps, ESS 312 of 1000, R-hat 1.023 (target 1.01)\n"
    assert captured.out == ""


def test_lines_come_seldom_but_the_last_one_always(capsys):
    display = Lines()
    for _ in range(50):
        display.show(NEWS)
    assert capsys.readouterr().err == ""
    display.close()
    assert capsys.readouterr().err.count("\n") == 1


def test_numbers_of_an_earlier_step_say_so():
    assert replace(NEWS, steps=240).numbers() == "ESS 312 of 1000, R-hat 1.023 (target 1.01), at step 200"
    assert replace(NEWS, checked_at=0).numbers() == "not yet judged (target ESS 1000, R-hat 1.01)"


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_bar_in_a_terminal(monkeypatch):
    terminal = Terminal()
    monkeypatch.setattr("sys.stderr", terminal)
    monkeypatch.delenv("CI", raising=False)
    display = reporter(True)
    assert isinstance(display, Bar)
    display.show(NEWS)
    display.close()
    shown = terminal.getvalue()
    assert "200/1000" in shown
    assert "ESS 312 of 1000, R-hat 1.023" in shown


def test_no_bar_under_ci(monkeypatch):
    monkeypatch.setattr("sys.stderr", Terminal())
    monkeypatch.setenv("CI", "true")
    assert isinstance(reporter(True), Lines)


def test_nothing_when_not_wanted(capsys):
    display = reporter(False)
    assert type(display) is Silent
    display.show(NEWS)
    display.close()
    assert capsys.readouterr() == ("", "")


def test_other_values_are_refused():
    with pytest.raises(ValueError, match="progress must be True, False or a function of one dict, not 3"):
        reporter(3)
