"""Numbers for people: a value and its uncertainty, rounded together.

The rule is that of JCGM 100:2008, 7.2.6: an uncertainty is given to at most two significant digits,
and the value is rounded to the same decimal place.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal

from inverse.report.unit_text import siunitx_unit, unit_text

__all__ = ["STYLES", "decimal_place", "fixed", "format_limit", "format_range", "format_value", "format_width"]

STYLES = ("plain", "markdown", "latex")
_LARGEST = Decimal(10) ** 6
_SMALLEST = Decimal(10) ** -3
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def format_value(
    value: float,
    uncertainty: float | Sequence[float],
    *,
    digits: int = 2,
    style: str = "plain",
    unit: str = "",
) -> str:
    r"""Write a value with its standard uncertainty, both rounded to the same decimal place.

    Parameters
    ----------
    value : float
        The estimate, in `unit`.
    uncertainty : float or (float, float)
        Standard uncertainty, or the pair (above, below), both positive, in `unit`.
    digits : int
        Significant digits of the uncertainty, 1 or 2.
    style : {"plain", "markdown", "latex"}
        ``latex`` writes siunitx macros.
    unit : str
        Unit as results carry it, such as ``nm/GPa``; ``""`` or ``"1"`` for none.

    Returns
    -------
    str
        ``60.03(12) nm``, ``\qty{60.03(12)}{\nano\metre}`` or, with a pair, ``52 +6 -5 nm``. An uncertainty of
        zero is written ``(exact)``; one that is not finite, ``(uncertainty not determined)``.

    Raises
    ------
    ValueError
        If the style is unknown, `digits` is not 1 or 2, or an uncertainty is negative.

    References
    ----------
    JCGM 100:2008, 7.2.2 (the forms) and 7.2.6 (the rounding).

    Examples
    --------
    >>> format_value(60.0312, 0.1179, unit="nm")
    '60.03(12) nm'
    >>> format_value(52.3, (6.1, 4.8), digits=1)
    '52 +6 -5'
    """
    _check_style(style)
    _check_digits(digits)
    above, below = _pair(uncertainty)
    if math.isnan(value):
        return _not_finite(value)
    if math.isinf(value):
        return _attach(_not_finite(value), unit, style)
    if not (math.isfinite(above) and math.isfinite(below)):
        return f"{_attach(_shortest(value), unit, style)} (uncertainty not determined)"
    if above == 0 and below == 0:
        return f"{_attach(_shortest(value), unit, style)} (exact)"
    if isinstance(uncertainty, Sequence):
        return _asymmetric(value, above, below, digits, style, unit)
    return _symmetric(value, above, digits, style, unit)


def format_limit(
    limit: float,
    side: str,
    *,
    mass: float = 0.95,
    digits: int = 2,
    style: str = "plain",
    unit: str = "",
    width: float = math.inf,
) -> str:
    r"""Write a one-sided limit, rounded so that the statement stays true.

    Parameters
    ----------
    limit : float
        Quantile that bounds the quantity, in `unit`.
    side : {"<", ">"}
        ``<`` for an upper limit (rounded up), ``>`` for a lower limit (rounded down).
    mass : float
        Probability of the statement.
    digits, style, unit
        As in `format_value`; the digits are those of the limit itself.
    width : float
        Half the width of the interval beside the limit: where rounding would move the limit by a quarter of it or
        more, it gets the digits of that width.

    Returns
    -------
    str
        ``> 14 GPa/nm (95 %)``.

    Raises
    ------
    ValueError
        If `side` or `style` is unknown or `digits` is not 1 or 2.

    Examples
    --------
    >>> format_limit(14.73, ">", unit="GPa/nm")
    '> 14 GPa/nm (95 %)'
    """
    _check_style(style)
    _check_digits(digits)
    if side not in ("<", ">"):
        raise ValueError(f"side = {side!r}; give '<' for an upper limit or '>' for a lower limit.")
    if math.isfinite(limit) and limit != 0:
        exact, mode = _decimal(limit), ROUND_CEILING if side == "<" else ROUND_FLOOR
        rounded = exact.quantize(Decimal(1).scaleb(exact.adjusted() - digits + 1), mode)
        if 0 < width <= 4 * abs(float(rounded - exact)):
            rounded = exact.quantize(Decimal(1).scaleb(decimal_place(width, digits)), mode)
        text = _written(rounded)
    else:
        text = _not_finite(limit) if limit != 0 else "0"
    percent = rf"{mass * 100:.4g}\,\%" if style == "latex" else f"{mass * 100:.4g} %"
    relation = f"${side}$" if style == "latex" else side
    return f"{relation} {_attach(text, unit, style)} ({percent})"


def decimal_place(uncertainty: float, digits: int = 2) -> int:
    """Return the power of ten to which a number with this uncertainty is rounded.

    Parameters
    ----------
    uncertainty : float
        Finite and positive.
    digits : int
        Significant digits kept.

    Returns
    -------
    int
        -2 for 0.12 with two digits; 0.0996 gives -2 too, because it rounds to 0.10.

    Raises
    ------
    ValueError
        If the uncertainty is not finite and positive.
    """
    if not (math.isfinite(uncertainty) and uncertainty > 0):
        raise ValueError(f"uncertainty = {uncertainty!r}; expected a finite positive number.")
    exact = _decimal(uncertainty)
    place = exact.adjusted() - digits + 1
    return _round(exact, place).adjusted() - digits + 1


def fixed(value: float, place: int) -> str:
    """Write `value` rounded to the power of ten `place`, with an exponent only where it is huge or tiny.

    Parameters
    ----------
    value : float
        May be infinite or nan.
    place : int
        Power of ten of the last digit kept.

    Returns
    -------
    str
        ``fixed(60.0312, -2)`` is ``60.03``.
    """
    if not math.isfinite(value):
        return _not_finite(value)
    return _written(_round(_decimal(value), place))


def format_width(width: float, digits: int = 2) -> str:
    """Write a width or a ratio by itself, to `digits` significant digits (``0.24``, ``12``, ``inf``)."""
    if not (math.isfinite(width) and width > 0):
        return "0" if width == 0 else _not_finite(width)
    return fixed(width, decimal_place(width, digits))


def format_range(low: float, high: float, place: int) -> str:
    """Write an interval, both ends rounded to the power of ten `place` (``59.91 to 60.15``)."""
    return f"{fixed(low, place)} to {fixed(high, place)}"


def _check_style(style: str) -> None:
    if style not in STYLES:
        raise ValueError(f"style = {style!r}; expected one of {', '.join(STYLES)}.")


def _check_digits(digits: int) -> None:
    if digits not in (1, 2):
        raise ValueError(f"digits = {digits!r}; an uncertainty is given to 1 or 2 significant digits.")


def _pair(uncertainty: float | Sequence[float]) -> tuple[float, float]:
    both = tuple(uncertainty) if isinstance(uncertainty, Sequence) else (uncertainty, uncertainty)
    if len(both) != 2 or any(u < 0 for u in both):
        raise ValueError(
            f"uncertainty = {uncertainty!r}; expected one standard uncertainty or the pair (above, below), "
            "none of them negative."
        )
    return float(both[0]), float(both[1])


def _symmetric(value: float, uncertainty: float, digits: int, style: str, unit: str) -> str:
    place = decimal_place(uncertainty, digits)
    exact, spread = _round(_decimal(value), place), _round(_decimal(uncertainty), place)
    exponent = _exponent(exact, spread, place)
    shown = exact.scaleb(-exponent)
    return _attach(f"{shown:f}({spread.scaleb(-place):f}){_power(exponent)}", unit, style)


def _asymmetric(value: float, above: float, below: float, digits: int, style: str, unit: str) -> str:
    place = decimal_place(min(u for u in (above, below) if u > 0), digits)
    numbers = [_round(_decimal(x), place) for x in (value, above, below)]
    exponent = _exponent(numbers[0], max(numbers[1:]), place)
    shown, plus, minus = (f"{x.scaleb(-exponent):f}" for x in numbers)
    if style == "plain":
        body = f"{shown} +{plus} -{minus}"
        return _attach(f"({body}){_power(exponent)}" if exponent else body, unit, style)
    factor = rf" \times 10^{{{exponent}}}" if exponent else ""
    body = f"${shown}^{{+{plus}}}_{{-{minus}}}{factor}$"
    if unit in ("", "1"):
        return body
    return rf"{body}~\unit{{{siunitx_unit(unit)}}}" if style == "latex" else f"{body} {unit_text(unit)}"


def _exponent(value: Decimal, uncertainty: Decimal, place: int) -> int:
    """Return the power of ten to take out, 0 where plain figures are readable and honest."""
    size = max(abs(value), uncertainty)
    readable = _SMALLEST <= size < _LARGEST and place <= 0
    return 0 if readable else size.adjusted()


def _power(exponent: int) -> str:
    return f"e{exponent}" if exponent else ""


def _attach(number: str, unit: str, style: str) -> str:
    """Put the unit behind a number written as mantissa(digits)e-exponent."""
    bare = unit in ("", "1")
    if style == "latex":
        if number.endswith("inf"):
            number = number.replace("inf", r"$\infty$")
            return number if bare else rf"{number}~\unit{{{siunitx_unit(unit)}}}"
        return rf"\num{{{number}}}" if bare else rf"\qty{{{number}}}{{{siunitx_unit(unit)}}}"
    if style == "markdown" and "e" in number and number[-1].isdigit():
        mantissa, exponent = number.split("e")
        number = f"{mantissa} × 10{exponent.translate(_SUPERSCRIPT)}"
    return number if bare else f"{number} {unit_text(unit)}"


def _decimal(value: float) -> Decimal:
    # repr gives the shortest figures that stand for this float, so 0.15 is not 0.1499...
    return Decimal(repr(float(value)))


def _round(exact: Decimal, place: int) -> Decimal:
    rounded = exact.quantize(Decimal(1).scaleb(place), ROUND_HALF_EVEN)
    return abs(rounded) if rounded == 0 else rounded


def _written(number: Decimal) -> str:
    if number == 0 or _SMALLEST <= abs(number) < _LARGEST:
        return f"{number:f}"
    return f"{number.scaleb(-number.adjusted()):f}e{number.adjusted()}"


def _shortest(value: float) -> str:
    return _written(_decimal(value).normalize())


def _not_finite(value: float) -> str:
    if math.isnan(value):
        return "not determined"
    return "inf" if value > 0 else "-inf"
