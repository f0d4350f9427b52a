"""Checks of plain arguments at the public door: seeds, whole numbers, names that are nearly right."""

from __future__ import annotations

import os
from collections.abc import Iterable
from difflib import get_close_matches
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["checked_delay", "checked_path", "checked_seed", "nearest", "refuse_unknown_names", "whole_number"]


def checked_delay(given: Any) -> NDArray[np.float64]:
    """Return delays as an array of one dimension.

    Raises
    ------
    ValueError
        If there is none, they are not numbers, or of more dimensions.
    """
    try:
        delay = np.atleast_1d(np.asarray(given, dtype=float))
    except (TypeError, ValueError):
        raise ValueError(
            f"delay is a {type(given).__name__} that is not numbers; give an array in ps."
        ) from None
    if delay.size == 0:
        raise ValueError("There is no delay; give one or more, in ps.")
    if delay.ndim > 1:
        raise ValueError(f"delay has shape {delay.shape}; give an array of one dimension, in ps.")
    return delay


def checked_path(given: Any) -> Path:
    """Return the path of a file, there or yet to be written.

    Raises
    ------
    ValueError
        If it is neither a text nor a path, or a folder's.
    """
    if not isinstance(given, str | os.PathLike):
        raise ValueError(f"Got a {type(given).__name__} in place of a path; give a text or a pathlib.Path.")
    path = Path(given)
    if path.is_dir():
        raise ValueError(f"'{path}' is a folder; give the name of a file in it.")
    return path


def whole_number(name: str, value: Any, least: int) -> int:
    """Return a whole number that is at least `least`.

    Raises
    ------
    ValueError
        If `value` is anything else, True and 3.0 included.
    """
    if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < least:
        raise ValueError(f"{name} must be a whole number, {least} or more, not {value!r}.")
    return int(value)


def checked_seed(seed: Any) -> int:
    """Return a seed: a whole number, 0 or more. None is none, as its draws could never be had again.

    Raises
    ------
    ValueError
        If it is anything else.
    """
    return whole_number("seed", seed, 0)


def nearest(name: str, known: Iterable[str]) -> str:
    """Return " Did you mean 'velocity'?" where a known name is near, nothing otherwise."""
    near = get_close_matches(str(name), list(known), n=1, cutoff=0.6)
    return f" Did you mean '{near[0]}'?" if near else ""


def refuse_unknown_names(where: str, given: Iterable[str], known: Iterable[str]) -> None:
    """Refuse names that are not known, with the nearest that is.

    Raises
    ------
    ValueError
        If there is one.
    """
    known = list(known)
    strange = sorted(set(map(str, given)) - set(known))
    if strange:
        hints = "".join(dict.fromkeys(nearest(name, known) for name in strange))
        raise ValueError(f"{where} got {', '.join(strange)}.{hints} It takes {', '.join(known)}.")
