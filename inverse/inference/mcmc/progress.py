"""Telling the user how sampling goes: a bar, plain lines, or a function of the user's own."""

from __future__ import annotations

import os
import sys
import time
import warnings
from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

SECONDS_BETWEEN_LINES = 10.0


@dataclass(frozen=True)
class Progress:
    """How far a run has come.

    Attributes
    ----------
    steps, max_steps : int
        Steps made by each ensemble, and the most it may make.
    least_ess, target_ess : float
        Smallest effective sample size of any name (NaN before the first check, an estimate while far from the
        target), and the target.
    largest_rhat, target_rhat : float
        Largest R-hat of any name (NaN before the first check), and the target.
    checked_at : int
        Steps at which the two were computed, 0 before the first check.
    """

    steps: int
    max_steps: int
    least_ess: float
    target_ess: float
    largest_rhat: float
    target_rhat: float
    checked_at: int

    def numbers(self) -> str:
        """Say the smallest effective sample size and the largest R-hat beside their targets, and when they were so."""
        if not self.checked_at:
            return f"not yet judged (target ESS {self.target_ess:.0f}, R-hat {self.target_rhat:g})"
        when = f", at step {self.checked_at}" if self.checked_at < self.steps else ""
        return (
            f"ESS {self.least_ess:.0f} of {self.target_ess:.0f}, R-hat {self.largest_rhat:.3f} (target "
            f"{self.target_rhat:g}){when}"
        )


class Silent:
    """Shows nothing."""

    def show(self, progress: Progress) -> None:
        """Take the news."""

    def close(self) -> None:
        """End the display."""


class Listener(Silent):
    """Hands the news to a function as a dict."""

    def __init__(self, function: Callable[[dict[str, Any]], object]) -> None:
        self.function = function

    def show(self, progress: Progress) -> None:
        """Call the function."""
        self.function(asdict(progress))


class Lines(Silent):
    """Writes a line to stderr now and then, where a bar cannot redraw itself."""

    def __init__(self) -> None:
        self.last_time = time.monotonic()
        self.unwritten = ""

    def show(self, progress: Progress) -> None:
        """Write a line if the last one is some seconds old."""
        self.unwritten = (
            f"sampling: {progress.steps} of at most {progress.max_steps} steps, {progress.numbers()}"
        )
        if time.monotonic() - self.last_time >= SECONDS_BETWEEN_LINES:
            self.close()

    def close(self) -> None:
        """Write the last news if it has not been written."""
        if self.unwritten:
            print(self.unwritten, file=sys.stderr, flush=True)
        self.unwritten = ""
        self.last_time = time.monotonic()


class Bar(Silent):
    """A tqdm bar, in a terminal or a notebook."""

    def __init__(self) -> None:
        with warnings.catch_warnings():
            # In a notebook without ipywidgets tqdm warns and draws a text bar, which is all that is wanted.
            warnings.simplefilter("ignore")
            from tqdm.auto import tqdm
        self.make = tqdm
        self.bar: Any = None

    def show(self, progress: Progress) -> None:
        """Move the bar."""
        if self.bar is None:
            self.bar = self.make(total=progress.max_steps, desc="sampling", unit="step")
        self.bar.set_postfix_str(progress.numbers(), refresh=False)
        self.bar.update(progress.steps - self.bar.n)

    def close(self) -> None:
        """Leave the bar as it stands."""
        if self.bar is not None:
            self.bar.close()


def _can_redraw() -> bool:
    in_notebook = "ipykernel" in sys.modules
    return not os.environ.get("CI") and (in_notebook or sys.stderr.isatty())


def reporter(progress: bool | Callable[[dict[str, Any]], object]) -> Silent:
    """Choose the display.

    Parameters
    ----------
    progress : bool or callable
        True for a bar (plain lines where stderr is no terminal, or under CI), False for nothing, or a
        function that takes a dict with the fields of `Progress`.
    """
    if callable(progress):
        return Listener(progress)
    if not isinstance(progress, bool):
        raise ValueError(f"progress must be True, False or a function of one dict, not {progress!r}")
    if not progress:
        return Silent()
    return Bar() if _can_redraw() else Lines()
