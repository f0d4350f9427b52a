"""Tables: intervals against closed forms, limits where a bound is touched, flags, texts in every format."""

import json
import re

import numpy as np
import pytest
import xarray as xr
from fake_results import DRAWS, INFORMATION, PRIORS, Fit, Minimum, draws, tree
from scipy import stats

from inverse.inference.checks.prior_view import touches, view_of_distribution
from inverse.report.tables import budget_table, constants_table, table


@pytest.fixture(scope="module")
def made():
    return table(tree())


def test_median_and_central_intervals(made):
    row = made["Al.thickness"]
    error = 0.12 / np.sqrt(4 * DRAWS)
    assert row.median == pytest.approx(60.03, abs=4 * 1.2533 * error)
    for (low, high), mass in zip(row.intervals, (0.68, 0.95), strict=True):
        expected = stats.norm(60.03, 0.12).interval(mass)
        np.testing.assert_allclose([low, high], expected, atol=4 * 2.7 * error)
    assert row.limits == () and row.flags == ()


def test_narrowed_is_prior_width_over_posterior_width(made):
    row = made["Al.thickness"]
    assert row.prior_width == pytest.approx(0.68 * 40)
    assert row.narrowed == pytest.approx(0.68 * 40 / (2 * 0.9945 * 0.12), rel=0.05)


def test_prior_only_is_flagged(made):
    assert made["Al.velocity"].flags == ("prior only",)
    assert made["Al.velocity"].narrowed == pytest.approx(1, rel=0.05)


def test_narrow_posterior_far_from_its_prior_is_flagged():
    values = {"Al.velocity": draws()["Al.velocity"] + 0.3}
    assert table(tree(values))["Al.velocity"].flags == ("far from prior",)


@pytest.mark.parametrize(
    ("prior", "value", "surprised"),
    [
        (stats.norm(6.42, 0.1), 6.60, False),
        (stats.norm(6.42, 0.1), 6.63, True),
        (stats.halfcauchy(scale=0.05), 1e-4, False),  # in the lowest 2.5 %, but at the peak of the density
        (stats.halfcauchy(scale=0.05), 1.0, False),  # a heavy tail is meant: P(x > 1) = 3 %
        (stats.halfcauchy(scale=0.05), 10.0, True),
        (stats.uniform(40, 40), 40.1, False),
    ],
)
def test_prior_is_surprised_only_by_improbable_values_of_low_density(prior, value, surprised):
    assert view_of_distribution(prior, (0.0, np.inf)).is_surprised_by(value) is surprised


def test_few_effective_draws_are_flagged():
    # Every half of an ensemble holds the same 30 values in its own order: R-hat has nothing to see.
    rng = np.random.default_rng(5)
    score = stats.norm.ppf((np.arange(30) + 0.5) / 30)
    halves = np.array([rng.permutation(score) for _ in range(8)]).reshape(4, 60)
    made = table(tree({"Al.thickness": 60 + 0.1 * halves}, information={}))
    assert made["Al.thickness"].flags == ("few effective draws",)
    assert any(line.endswith("NOT converged. Sample longer.") for line in made.header)
    made = table(tree({"Al.thickness": 60 + 0.1 * halves}))
    assert any(line.endswith("converged, but fewer than 400 effective draws.") for line in made.header)


def test_compliance_at_zero_gives_an_upper_limit(made):
    row = made["Al|Si.compliance"]
    assert row.flags == ("upper limit",)
    assert [limit.side for limit in row.limits] == ["<", "<"]
    # |N(0, s)|: the 95 % quantile is 1.95996 s, its standard error from 4000 draws 0.03 s
    assert row.limits[1].value == pytest.approx(1.95996 * 0.005, rel=0.06)
    assert re.fullmatch(r"< 0\.0\d+ nm/GPa \(95 %\)", row.statement())


def test_stiffness_inherits_a_lower_limit(made):
    row = made["Al|Si.stiffness"]
    assert row.flags == ("lower limit",)
    assert row.limits[1].value == pytest.approx(1 / made["Al|Si.compliance"].limits[1].value, rel=1e-3)
    assert re.fullmatch(r"> (9\d|1\d0) GPa/nm \(95 %\)", row.statement())


def test_derived_quantity_that_is_not_monotone_inherits_nothing(made):
    assert made["Al.round_trip"].limits == ()
    values = draws()
    values["Al.reflection"] = values["Al|Si.compliance"] * values["Al.velocity"] ** 4  # correlated, no more
    assert table(tree(values))["Al.reflection"].limits == ()
    assert made["Al.round_trip"].prior_width is None


def test_a_derived_quantity_that_ends_before_its_bound_keeps_both_sides():
    """|R| of a perfect bond between unlike media is that of their impedances, not 0."""
    values = draws()
    floor = 0.2 + values["Al|Si.compliance"]
    values["Al|Si.reflection"] = floor
    row = table(tree(values))["Al|Si.reflection"]
    assert row.limits == () and row.intervals[1][0] > 0.2
    values["Al|Si.reflection"] = floor - 0.2
    assert table(tree(values))["Al|Si.reflection"].limits[0].side == "<"


def test_the_table_says_where_constants_outweigh_an_interval():
    """The 68 % interval of the thickness is 0.12 nm to either side."""
    shares = {"Al.thickness": 4.7, "Al.velocity": 0.01}
    made = table(tree(draws(), information={**INFORMATION, "constant_shares": shares}))
    assert "constants ± 4.7 nm" in made["Al.thickness"].flags
    assert not any("constants" in flag for flag in made["Al.velocity"].flags)
    assert any("what is not known of them would add more than the interval" in line for line in made.header)
    plain = table(tree(draws()))
    assert not any("constants" in flag for row in plain.rows for flag in row.flags)
    assert not any("what is not known of them" in line for line in plain.header)


def test_compliance_away_from_zero_has_two_sides():
    values = {"Al|Si.compliance": 0.05 + 0.01 * np.random.default_rng(1).standard_normal((4, 1000))}
    row = table(tree(values))["Al|Si.compliance"]
    assert row.limits == () and row.flags == ()


@pytest.mark.parametrize(("distance", "touched"), [(0.0, True), (1.5, True), (2.6, False), (50.0, False)])
def test_bound_is_touched_within_about_two_deviations(distance, touched):
    sample = stats.truncnorm(-distance, np.inf).rvs(4000, random_state=np.random.default_rng(2))
    assert touches(sample, -distance, "<") is touched
    assert touches(-sample, distance, ">") is touched


def test_prior_edge_is_flagged_and_limited():
    values = {"Al.thickness": 80 - np.abs(np.random.default_rng(1).standard_normal((4, 1000)))}
    row = table(tree(values))["Al.thickness"]
    assert row.flags == ("lower limit", "prior edge")
    assert row.limits[1].side == ">" and row.limits[1].value == pytest.approx(80 - 1.96, abs=0.15)


def test_both_edges_give_no_limit():
    values = {"Al.thickness": np.random.default_rng(1).uniform(40, 80, (4, 1000))}
    row = table(tree(values))["Al.thickness"]
    assert row.limits == () and set(row.flags) == {"prior only", "prior edge"}


def test_prior_is_cut_where_the_quantity_cannot_be():
    # A normal prior on a compliance has no mass below zero: its 68 % width is that of the half normal.
    values = {"Al|Si.compliance": np.abs(0.005 * np.random.default_rng(1).standard_normal((4, 1000)))}
    row = table(tree(values, {"Al|Si.compliance": stats.norm(0, 0.1)}))["Al|Si.compliance"]
    low, high = stats.halfnorm(scale=0.1).interval(0.68)
    assert row.prior_width == pytest.approx(high - low, rel=1e-6)
    assert row.flags[0] == "upper limit"


def test_ensembles_that_disagree_are_not_converged():
    values = draws()
    values["Al.thickness"][0] += 1.0
    made = table(tree(values))
    assert "not converged" in made["Al.thickness"].flags
    assert any("NOT converged" in line for line in made.header)


def test_run_that_says_not_converged_is_believed():
    information = {
        **INFORMATION,
        "convergence": {"converged": False, "message": "20000 more steps are needed"},
    }
    header = "\n".join(table(tree(information=information)).header)
    assert "NOT converged. 20000 more steps are needed" in header


def test_draws_that_are_not_numbers_are_counted():
    values = draws()
    values["Al.thickness"][0, :7] = np.nan
    row = table(tree(values))["Al.thickness"]
    assert "7 draws are not a number" in row.flags
    values["Al.thickness"][:] = np.nan
    row = table(tree(values))["Al.thickness"]
    assert row.flags == ("all draws are not a number",)


def test_infinite_stiffness_of_perfect_bonds():
    compliance = np.where(np.arange(4000).reshape(4, 1000) % 2, 0.0, 0.004)
    with np.errstate(divide="ignore"):
        row = table(tree({"Al|Si.stiffness": 1 / compliance}))["Al|Si.stiffness"]
    assert row.intervals[1] == (250.0, np.inf)


def test_prior_draws_serve_derived_quantities():
    rng = np.random.default_rng(1)
    prior = 18.7 + 3 * rng.standard_normal((1, 4000))
    group = xr.Dataset({"Al.round_trip": (("chain", "draw"), prior)})
    row = table(tree(prior=group))["Al.round_trip"]
    assert row.prior_width == pytest.approx(2 * 0.9945 * 3, rel=0.05)


def test_header_says_what_was_fitted():
    delay = np.linspace(3.5, 110, 450)
    observed = xr.Dataset(
        {"reflectance_change": ("delay", np.zeros(450))}, {"delay": ("delay", delay, {"units": "ps"})}
    )
    header = "\n".join(table(tree(observed_data=observed)).header)
    assert "Stack: Al on Si" in header
    assert "reflectance_change, 450 delays from 3.5 to 110 ps" in header
    assert "Noise model: correlated" in header
    assert "4 ensembles, 1000 draws each" in header and ": converged." in header
    assert "Warning: 4 delays were left out" in header


def test_plain_text_is_aligned(made):
    lines = repr(made).splitlines()
    rule = next(i for i, line in enumerate(lines) if line.startswith("---"))
    starts = [match.start() for match in re.finditer(r"-+", lines[rule])]
    assert [lines[rule - 1][start:].split("  ")[0] for start in starts] == list(made.sheet().columns)
    for line in lines[rule + 1 :]:
        assert all(start == 0 or line[start - 2 : start].strip() == "" for start in starts)


def test_interval_texts_are_rounded_to_the_uncertainty(made):
    cells = dict(zip(made.sheet().columns, made.sheet().cells[0], strict=True))
    assert re.fullmatch(r"60\.0\d", cells["median"])
    assert re.fullmatch(r"59\.9\d to 60\.1\d", cells["68 % interval"])
    assert cells["prior 68 % width"] == "27"


def test_statement_of_a_skewed_quantity():
    values = {"Al.thickness": 60 + np.random.default_rng(1).gamma(1.5, 1.0, (4, 1000))}
    assert re.fullmatch(r"61\.\d\d? \+1\.\d+ -0\.\d+ nm", table(tree(values))["Al.thickness"].statement())


def test_markdown_has_one_cell_per_column(made):
    lines = [line for line in made.markdown().splitlines() if line.startswith("|")]
    assert {len(re.split(r"(?<!\\)\|", line)) for line in lines} == {len(made.sheet().columns) + 2}
    assert r"Al\|Si.compliance" in made.markdown()


def test_html_is_escaped(made):
    assert "&lt; 0.0" in made._repr_html_()
    assert made._repr_html_().count("<tr>") == len(made.rows) + 1


def test_latex_uses_siunitx_and_escapes(made):
    text = made.latex()
    assert r"\unit{\nano\metre\per\giga\pascal}" in text
    assert r"Al\textbar{}Si.compliance" in text
    assert r"68 \% interval" in text
    assert re.search(r"\\num\{59\.9\d\} to \\num\{60\.1\d\}", text)
    body = [line for line in text.splitlines() if line.endswith(r"\\")]
    assert {line.count(" & ") for line in body} == {len(made.sheet().columns) - 1}


def test_to_dict_survives_json(made):
    data = json.loads(json.dumps(made.to_dict()))
    assert data["rows"][0]["name"] == "Al.thickness"
    assert data["mass"] == [0.68, 0.95]


def test_include_and_format():
    result = tree()
    assert [row.name for row in table(result, include="derived").rows] == ["Al|Si.stiffness", "Al.round_trip"]
    assert [row.name for row in table(result, include=["Al.velocity"]).rows] == ["Al.velocity"]
    assert [row.name for row in table(result, include="noise").rows] == ["noise.white"]
    assert table(result, format="plain") == repr(table(result))
    assert table(result, format="dict")["rows"][0]["name"] == "Al.thickness"
    assert table(result, format="latex").endswith(r"\end{tabular}")
    assert table(result, mass=(0.9,)).sheet().columns[3] == "90 % interval"


@pytest.mark.parametrize(
    ("keywords", "message"),
    [
        ({"mass": (68,)}, "probabilities between 0 and 1"),
        ({"format": "rtf"}, "expected None or one of plain"),
        ({"include": "priors"}, "expected one of all, unknown, noise, derived"),
        ({"include": ["Al.mass"]}, "include names Al.mass; the result holds Al.thickness"),
    ],
)
def test_table_refuses(keywords, message):
    with pytest.raises(ValueError, match=message):
        table(tree(), **keywords)


def test_table_refuses_other_objects():
    with pytest.raises(ValueError, match="table got dict; expected a DataTree"):
        table({"posterior": 1})


def test_unknown_row_is_named(made):
    with pytest.raises(ValueError, match=r"The table has no 'W\.thickness'; it holds Al.thickness"):
        made["W.thickness"]


@pytest.fixture
def fit() -> Fit:
    return Fit(
        names=("Al.thickness", "Al|Si.compliance", "Al.velocity"),
        values=np.array([60.03, 0.001, 6.4]),
        sd=np.array([0.12, 0.005, np.inf]),
        units=("nm", "nm/GPa", "nm/ps"),
        flags=("2 minima; prior only", "", ""),
        minima=(Minimum(0.93), Minimum(0.07)),
    )


def test_least_squares_intervals_are_normal(fit):
    row = table(fit)["Al.thickness"]
    np.testing.assert_allclose(row.intervals[1], [60.03 - 1.959964 * 0.12, 60.03 + 1.959964 * 0.12])
    assert row.statement() == "60.03(12) nm"
    assert row.flags == ("2 minima", "prior only")


def test_least_squares_limit_at_a_bound(fit):
    row = table(fit)["Al|Si.compliance"]
    assert row.flags == ("upper limit",)
    # Normal cut at zero: P(x < limit) = [Phi((limit - v) / s) - Phi(-v / s)] / [1 - Phi(-v / s)]
    below = stats.norm.cdf(-0.001 / 0.005)
    score = (row.limits[1].value - 0.001) / 0.005
    assert (stats.norm.cdf(score) - below) / (1 - below) == pytest.approx(0.95)


def test_least_squares_without_information_says_so(fit):
    row = table(fit)["Al.velocity"]
    assert row.flags == ("not determined",)
    assert "not determined" in repr(table(fit))
    assert "linearised covariance" in table(fit).header[1]


def test_least_squares_hides_no_minimum(fit):
    assert table(fit).header[0].startswith("Least squares: 2 minima hold 93 %, 7 % of the probability")
    fit.minima = fit.minima[:1]
    assert table(fit).header[0] == "Least squares: one minimum found."


def test_least_squares_says_what_the_data_added(fit):
    assert table(fit)["Al.thickness"].narrowed == pytest.approx(0.68 * 40 / (2 * 0.99446 * 0.12), rel=1e-4)


def test_constants_carry_their_sources():
    listed = constants_table(tree())
    assert listed.sheet().cells[0] == ("Al", "heat_capacity", "2.430(20)", "J/cm3/K", "a handbook")
    assert listed.sheet().cells[1][2] == "2.329"
    assert "J/cm³/K" in repr(listed)
    assert listed.to_dict()["rows"][1]["source"] == "a paper"
    with pytest.raises(ValueError, match="carries no list of constants"):
        constants_table(tree(information={}))


def test_long_sources_are_broken_into_lines():
    entry = {**INFORMATION["constants"][0], "source": "a very long title " * 8}
    lines = repr(constants_table(tree(information={"constants": [entry]}))).splitlines()
    assert max(map(len, lines)) < 110
    assert " ".join(" ".join(lines[-3:]).split()).count("very long") == 8
    assert lines[-1].startswith(" " * lines[-3].index("a very"))


def test_budget_combines_by_root_sum_of_squares():
    # JCGM 100 H.1, budget of the end gauge, nm: combined 31.664, rounded to 32
    sources = {"standard": 25, "comparator": 9.68, "expansion": 2.88679, "temperature": 16.599}
    made = budget_table({"length": sources}, units={"length": "nm"}, stated={"length": 34.0})
    assert made.total("length") == pytest.approx(31.664, abs=2e-3)
    assert made.sheet().cells[0] == ("length", "standard", "25", "nm", "62.3 %")
    assert made.sheet().cells[4] == ("length", "combined", "32", "nm", "100.0 %")
    assert made.sheet().cells[5][1:3] == ("of the result itself", "34")
    assert made.to_dict()["total"]["length"] == made.total("length")


def test_budget_folds_what_is_small_and_knows_the_units_of_quantities():
    sources = {"noise": 3.0, "prior": 4.0, "first": 0.1, "second": 0.05, "third": 0.05}
    made = budget_table({"Al.c33": sources, "score": {"noise": 1.0}})
    cells = made.sheet().cells
    assert [row[1] for row in cells[:4]] == ["prior", "noise", "3 others, each under 0.1 %", "combined"]
    assert cells[2][2] == "0.12"  # root sum of squares
    assert cells[0][3] == "GPa"
    assert cells[4][3] == ""


@pytest.mark.parametrize(
    ("budget", "message"),
    [
        ({"x": {}}, "budget of 'x' is empty"),
        ({"x": {"noise": -1.0}}, "noise = -1.0; give a standard uncertainty"),
    ],
)
def test_budget_refuses(budget, message):
    with pytest.raises(ValueError, match=message):
        budget_table(budget)


def test_priors_of_the_fixture_are_those_of_the_table(made):
    assert {row.name for row in made.rows if row.prior_width is not None} == set(PRIORS)
