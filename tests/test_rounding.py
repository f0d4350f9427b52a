"""Rounding of a value with its uncertainty: JCGM 100:2008, 7.2.2 and 7.2.6 (from memory)."""

import math

import pytest

from inverse.report.rounding import (
    decimal_place,
    fixed,
    format_limit,
    format_range,
    format_value,
    format_width,
)
from inverse.report.unit_text import axis_label, siunitx_unit, unit_text


@pytest.mark.parametrize(
    ("value", "uncertainty", "digits", "text"),
    [
        (100.02147, 0.00035, 2, "100.02147(35)"),  # JCGM 100 7.2.2: m_S = 100,021 47(35) g
        (10.0571, 0.0285, 2, "10.057(28)"),  # a tie goes to the even digit
        (60.0312, 0.1179, 2, "60.03(12)"),
        (60.0312, 0.1179, 1, "60.0(1)"),
        (60.0312, 0.0996, 2, "60.03(10)"),  # the uncertainty rounds up into the next decade
        (52.34, 5.14, 2, "52.3(51)"),
        (52.34, 5.14, 1, "52(5)"),
        (1234.4, 25.3, 2, "1234(25)"),
        (1234.4, 253, 2, "1.23(25)e3"),  # zeros that mean nothing are not written
        (50000838, 32, 2, "5.0000838(32)e7"),
        (1.234e17, 3.1e15, 2, "1.234(31)e17"),
        (-4.2e-6, 3e-8, 2, "-4.200(30)e-6"),
        (-0.001, 0.3, 2, "0.00(30)"),  # no minus zero
        (1e-9, 2.0, 1, "0(2)"),
        (0.15, 0.01, 1, "0.15(1)"),
    ],
)
def test_value_is_rounded_to_the_place_of_its_uncertainty(value, uncertainty, digits, text):
    assert format_value(value, uncertainty, digits=digits) == text


@pytest.mark.parametrize(
    ("style", "text"),
    [
        ("plain", "60.03(12) nm"),
        ("markdown", "60.03(12) nm"),
        ("latex", r"\qty{60.03(12)}{\nano\metre}"),
    ],
)
def test_styles(style, text):
    assert format_value(60.0312, 0.1179, style=style, unit="nm") == text


def test_styles_of_exponents_and_dimensionless_numbers():
    assert format_value(1.2e17, 3e15, style="markdown", unit="W/m3/K") == "1.200(30) × 10¹⁷ W/m³/K"
    assert (
        format_value(1.2e17, 3e15, style="latex", unit="W/m3/K")
        == r"\qty{1.200(30)e17}{\watt\per\metre\cubed\per\kelvin}"
    )
    assert format_value(1.162, 0.04, style="latex", unit="1") == r"\num{1.162(40)}"
    assert format_value(1.162, 0.04, unit="1") == "1.162(40)"


def test_asymmetric_uncertainty():
    assert format_value(52.3, (6.1, 4.8), digits=1, unit="GPa/nm") == "52 +6 -5 GPa/nm"
    assert (
        format_value(52.3, (6.1, 4.8), digits=1, style="markdown", unit="GPa/nm") == "$52^{+6}_{-5}$ GPa/nm"
    )
    assert (
        format_value(52.3, (6.1, 4.8), digits=1, style="latex", unit="GPa/nm")
        == r"$52^{+6}_{-5}$~\unit{\giga\pascal\per\nano\metre}"
    )
    assert format_value(5.23e8, (6.1e7, 4.8e7), style="latex") == r"$5.23^{+0.61}_{-0.48} \times 10^{8}$"
    assert format_value(5.23e8, (6.1e7, 4.8e7), unit="K") == "(5.23 +0.61 -0.48)e8 K"
    assert format_value(0.5, (0.2, 0.0)) == "0.50 +0.20 -0.00"
    # The smaller of the two sets the place: it would vanish at the place of the larger
    assert format_value(52.347, (12.3, 0.48)) == "52.35 +12.30 -0.48"


@pytest.mark.parametrize(
    ("value", "uncertainty", "text"),
    [
        (60.5, 0.0, "60.5 nm (exact)"),
        (60.5, math.inf, "60.5 nm (uncertainty not determined)"),
        (60.5, math.nan, "60.5 nm (uncertainty not determined)"),
        (60.5, (1.0, math.inf), "60.5 nm (uncertainty not determined)"),
        (math.nan, 1.0, "not determined"),
        (math.inf, 1.0, "inf nm"),
    ],
)
def test_what_is_not_known_is_said(value, uncertainty, text):
    assert format_value(value, uncertainty, unit="nm") == text


@pytest.mark.parametrize(
    ("limit", "side", "text"),
    [
        (14.73, ">", "> 14 GPa/nm (95 %)"),  # down: it does lie above 14
        (14.73, "<", "< 15 GPa/nm (95 %)"),  # up
        (0.01234, "<", "< 0.013 GPa/nm (95 %)"),
        (math.inf, "<", "< inf GPa/nm (95 %)"),
        (0.0, ">", "> 0 GPa/nm (95 %)"),
    ],
)
def test_limits_stay_true(limit, side, text):
    assert format_limit(limit, side, unit="GPa/nm") == text


@pytest.mark.parametrize(
    ("limit", "side", "width", "text"),
    [
        (60.5372, "<", 0.012, "< 60.538 nm (95 %)"),
        (59.47216, ">", 0.009, "> 59.4721 nm (95 %)"),
        (0.00264, "<", 0.0008, "< 0.0027 nm (95 %)"),
        (14.73, ">", 30.0, "> 14 nm (95 %)"),
        (14.73, ">", math.inf, "> 14 nm (95 %)"),
        (14.73, ">", math.nan, "> 14 nm (95 %)"),
    ],
)
def test_limits_keep_the_digits_that_the_interval_beside_them_has(limit, side, width, text):
    assert format_limit(limit, side, unit="nm", width=width) == text


def test_limit_styles():
    assert (
        format_limit(14.73, ">", mass=0.9, style="latex", unit="GPa/nm")
        == r"$>$ \qty{14}{\giga\pascal\per\nano\metre} (90\,\%)"
    )
    assert (
        format_limit(math.inf, "<", style="latex", unit="nm") == r"$<$ $\infty$~\unit{\nano\metre} (95\,\%)"
    )


def test_plain_numbers():
    assert decimal_place(0.0996) == -2
    assert format_range(59.9134, 60.1487, -2) == "59.91 to 60.15"
    assert format_range(1234.4, 1789.0, 1) == "1230 to 1790"
    assert fixed(math.inf, 0) == "inf"
    assert [format_width(w) for w in (0.2357, 12.3, 0.0, math.inf, math.nan)] == [
        "0.24",
        "12",
        "0",
        "inf",
        "not determined",
    ]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"uncertainty": -1.0}, "none of them negative"),
        ({"uncertainty": (1.0, 2.0, 3.0)}, "the pair .above, below."),
        ({"digits": 3}, "1 or 2 significant digits"),
        ({"style": "html"}, "expected one of plain, markdown, latex"),
    ],
)
def test_format_value_refuses(arguments, message):
    with pytest.raises(ValueError, match=message):
        format_value(1.0, arguments.pop("uncertainty", 0.1), **arguments)


def test_other_refusals():
    with pytest.raises(ValueError, match="'<' for an upper limit"):
        format_limit(1.0, "<=")
    with pytest.raises(ValueError, match="expected a finite positive number"):
        decimal_place(0.0)


@pytest.mark.parametrize(
    ("unit", "text", "macros"),
    [
        ("nm/ps", "nm/ps", r"\nano\metre\per\pico\second"),
        ("g/cm3", "g/cm³", r"\gram\per\centi\metre\cubed"),
        ("MW/m2/K", "MW/m²/K", r"\mega\watt\per\metre\squared\per\kelvin"),
        ("1/K", "1/K", r"\per\kelvin"),
        ("THz", "THz", r"\tera\hertz"),
        ("mm", "mm", r"\milli\metre"),
        ("1", "", ""),
        ("arb. u.", "arb. u.", "arb. u."),
    ],
)
def test_units(unit, text, macros):
    assert unit_text(unit) == text
    assert siunitx_unit(unit) == macros


def test_axis_label():
    assert axis_label("Al.density", "g/cm3") == "Al.density (g/cm³)"
    assert axis_label("density ratio", "1") == "density ratio"
