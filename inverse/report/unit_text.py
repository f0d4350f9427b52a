"""Units as people read them: superscripts for text and figures, siunitx macros for LaTeX."""

from __future__ import annotations

import re

__all__ = ["axis_label", "siunitx_unit", "unit_text"]

_SUPERSCRIPT = str.maketrans("0123456789", "⁰¹²³⁴⁵⁶⁷⁸⁹")
_PREFIXES = {
    "p": r"\pico", "n": r"\nano", "u": r"\micro", "m": r"\milli", "c": r"\centi",
    "k": r"\kilo", "M": r"\mega", "G": r"\giga", "T": r"\tera", "f": r"\femto",
}  # fmt: skip
_BASES = {
    "m": r"\metre", "s": r"\second", "g": r"\gram", "K": r"\kelvin", "Pa": r"\pascal", "J": r"\joule",
    "W": r"\watt", "Hz": r"\hertz", "N": r"\newton", "rad": r"\radian",
}  # fmt: skip
_POWERS = {"": "", "2": r"\squared", "3": r"\cubed"}
_FACTOR = re.compile(rf"({'|'.join(_PREFIXES)})?({'|'.join(_BASES)})([23]?)")


def unit_text(unit: str) -> str:
    """Return a unit for text and figures: ``g/cm3`` becomes ``g/cm³``, the unit one nothing.

    Parameters
    ----------
    unit : str
        Unit as results carry it.

    Returns
    -------
    str
        The same with superscripts; ``""`` for ``"1"``.
    """
    if unit == "1":
        return ""
    return re.sub(r"(?<=[A-Za-z])\d+", lambda found: found.group().translate(_SUPERSCRIPT), unit)


def siunitx_unit(unit: str) -> str:
    r"""Return a unit in siunitx macros: ``MW/m2/K`` becomes ``\mega\watt\per\metre\squared\per\kelvin``.

    Parameters
    ----------
    unit : str
        Factors joined by ``/``; a factor not known here is handed on as it is, which siunitx prints verbatim.

    Returns
    -------
    str
        The macros without braces.
    """
    factors = unit.split("/")
    macros = [_macro(factor) for factor in factors]
    if any(macro is None for macro in macros):
        return unit
    return r"\per".join(macro or "" for macro in macros)


def axis_label(name: str, unit: str) -> str:
    """Return ``name (unit)``, or the bare name for a number without unit."""
    text = unit_text(unit)
    return f"{name} ({text})" if text else name


def _macro(factor: str) -> str | None:
    if factor == "1":
        return ""
    found = _FACTOR.fullmatch(factor)
    if found is None:
        return None
    prefix, base, power = found.groups()
    return f"{_PREFIXES[prefix] if prefix else ''}{_BASES[base]}{_POWERS[power]}"
