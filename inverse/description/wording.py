"""Numbers in sentences: shares in per cent, values with their spread; no exponent where none is needed."""

from __future__ import annotations

import math

__all__ = ["percent", "plain", "plus_minus"]


def percent(share: float, digits: int = 2) -> str:
    """Write a share or a relative width: ``0.012 %``, ``100 %``, ``250 %``.

    Parameters
    ----------
    share : float
        1 for 100 %.
    digits : int
        Significant digits, at least those before the point.
    """
    return f"{plain(100 * share, digits)} %"


def plain(value: float, digits: int = 2) -> str:
    """Write a number to some significant digits: ``230`` and ``0.012``, ``2.5e17`` only beyond 1e6 or 1e-4."""
    if not math.isfinite(value) or value == 0:
        return f"{value:g}"
    size = abs(value)
    place = math.floor(math.log10(float(f"{size:.{digits - 1}e}"))) - digits + 1
    if not 1e-4 <= size < 1e6:
        mantissa, power = f"{value:.{digits - 1}e}".split("e")
        return f"{mantissa}e{int(power)}"
    return f"{round(value, -place):.{max(0, -place)}f}"


def plus_minus(value: float, spread: float) -> str:
    """Write a value with its standard uncertainty, both to the place of its second digit: ``9 ± 20``, ``2.20 ± 0.12``.

    References
    ----------
    JCGM 100:2008, 7.2.6.
    """
    if not (math.isfinite(spread) and spread > 0):
        return f"{value:.4g} ± {spread:g}"
    place = math.floor(math.log10(float(f"{spread:.1e}"))) - 1
    size = max(abs(value), spread)
    if not 1e-4 <= size < 1e6:
        power = math.floor(math.log10(size))
        digits = max(0, power - place)
        return f"({value / 10.0**power:.{digits}f} ± {spread / 10.0**power:.{digits}f})e{power}"
    return f"{round(value, -place):.{max(0, -place)}f} ± {round(spread, -place):.{max(0, -place)}f}"
