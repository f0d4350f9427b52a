"""Numbers in sentences: JCGM 100:2008, 7.2.6 for two digits of an uncertainty; never 1e+02 %."""

import pytest

from inverse.description.wording import percent, plain, plus_minus


@pytest.mark.parametrize(
    ("value", "spread", "said"),
    [
        (9.4, 20.3, "9 ± 20"),
        (60.0312, 0.1179, "60.03 ± 0.12"),
        (60.0312, 0.0996, "60.03 ± 0.10"),
        (1234.0, 250.0, "1230 ± 250"),
        (2.5e-8, 1.04e-9, "(2.50 ± 0.10)e-8"),
        (3.0, 0.0, "3 ± 0"),
    ],
)
def test_a_value_and_its_spread_end_at_the_same_place(value, spread, said):
    assert plus_minus(value, spread) == said


@pytest.mark.parametrize(
    ("share", "digits", "said"),
    [
        (1.0, 1, "100 %"),
        (1.04, 2, "100 %"),
        (12.34, 2, "1200 %"),
        (0.996, 2, "100 %"),
        (0.00012, 2, "0.012 %"),
        (0.5, 3, "50.0 %"),
        (0.0, 2, "0 %"),
    ],
)
def test_a_share_is_never_in_exponent_form(share, digits, said):
    assert percent(share, digits) == said


def test_plain_keeps_an_exponent_for_what_is_huge_or_tiny():
    assert [plain(x) for x in (230.0, 0.012, -4.65, 2.46e17, 1.8e-8)] == [
        "230",
        "0.012",
        "-4.7",
        "2.5e17",
        "1.8e-8",
    ]
