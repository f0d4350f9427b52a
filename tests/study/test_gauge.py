"""The reference wafer: bias, repeatability and tool-to-tool scatter, and how a comparison carries them."""

import numpy as np
import pytest
from scipy import stats

from inverse.study.splits.compare import compare_splits
from inverse.study.splits.gauge import reference_wafer

COMPLIANCE = "Al|Si.compliance"
WIDE = stats.uniform(1e-6, 10)


def measured(rng, value, relative, count=300):
    seen = value * np.exp(relative * rng.standard_normal())
    return np.abs(seen * (1 + relative * rng.standard_normal(count)))


def study(rng, biases, repeats, repeat=0.03, own=0.01, **options):
    """A sample of 0.1 nm/GPa measured on tools that are off by known factors."""
    results, labels = {}, {}
    for tool, bias in biases.items():
        for k in range(repeats):
            true = 0.1 * np.exp(bias + repeat * rng.standard_normal())
            results[f"{tool}{k}"] = measured(rng, true, own)
            labels[f"{tool}{k}"] = {"tool": tool}
    return reference_wafer(
        results, quantity=COMPLIANCE, reference=0.1, labels=labels, prior=WIDE, seed=1, **options
    )


def test_each_tools_bias_is_found_within_its_standard_error():
    found = study(np.random.default_rng(1), {"north": 0.10, "south": -0.05}, 12)
    assert found.tools == ("north", "south")
    for estimate, known in zip(found.tool_bias, (0.10, -0.05), strict=True):
        assert estimate.low < known < estimate.high
        # Twelve repetitions of 3.2 %: half-width 1.96 x 0.032 / sqrt(12) = 0.018, a little more for the scatter's own.
        assert 0.015 < (estimate.high - estimate.low) / 2 < 0.026


def test_repeatability_and_tool_to_tool_scatter_cover_the_truth():
    rng = np.random.default_rng(2)
    biases = {f"tool {k}": 0.08 * rng.standard_normal() for k in range(8)}
    found = study(rng, biases, 5)
    assert found.repeatability.low < np.hypot(0.03, 0.01) < found.repeatability.high
    assert found.unexplained.low < 0.03 < found.unexplained.high
    assert found.reproducibility.low < 0.08 < found.reproducibility.high


def test_one_way_analysis_of_variance_agrees():
    """With normal results and a flat enough prior the classical components of variance come out."""
    rng = np.random.default_rng(3)
    values = rng.normal(0, 0.1, 10)[:, None] + rng.normal(0, 0.03, (10, 6))
    results = {
        f"{i}-{j}": 0.1 * np.exp(v + 0.001 * rng.standard_normal(200))
        for i, row in enumerate(values)
        for j, v in enumerate(row)
    }
    labels = {name: {"tool": name.split("-")[0]} for name in results}
    found = reference_wafer(results, quantity=COMPLIANCE, reference=0.1, labels=labels, prior=WIDE, seed=1)
    inside = values.var(axis=1, ddof=1).mean()
    between = values.mean(axis=1).var(ddof=1) - inside / 6
    assert found.repeatability.median == pytest.approx(np.sqrt(inside), rel=0.05)
    assert found.reproducibility.median == pytest.approx(np.sqrt(between), rel=0.15)
    assert found.bias.median == pytest.approx(values.mean(), abs=0.01)


def test_the_references_own_uncertainty_is_carried():
    sharp = study(np.random.default_rng(4), {"a": 0.0}, 20)
    blunt = study(np.random.default_rng(4), {"a": 0.0}, 20, reference_uncertainty=0.005)
    widths = [(s.bias.high - s.bias.low) / (2 * 1.96) for s in (sharp, blunt)]
    assert widths[1] == pytest.approx(np.hypot(widths[0], 0.05), rel=0.05)


SCORES = stats.norm.ppf((np.arange(16) + 0.5) / 16)
REPEATS = 0.03 * SCORES / SCORES.std(ddof=1)  # sixteen results, standard deviation 3 % exactly
NORTH, SOUTH = 0.12, 0.02


def hand_worked(tools, reference_uncertainty=0.0):
    rng, results, labels = np.random.default_rng(10), {}, {}
    for tool, bias in tools.items():
        for k, deviation in enumerate(REPEATS):
            results[f"{tool}{k}"] = 0.1 * np.exp(bias + deviation + 1e-4 * rng.standard_normal(200))
            labels[f"{tool}{k}"] = {"tool": tool}
    return reference_wafer(
        results,
        quantity=COMPLIANCE,
        reference=0.1,
        labels=labels,
        prior=WIDE,
        seed=1,
        reference_uncertainty=reference_uncertainty,
    )


def half_width(interval, log=False):
    low, high = (np.log(interval.low), np.log(interval.high)) if log else (interval.low, interval.high)
    return (high - low) / 2


def test_a_bias_worked_by_hand():
    """One tool, sixteen results 12 % high on average: repeatability 3 %, u(mean) = 3 % / sqrt(16) = 0.75 %.

    JCGM 100 (from memory): 4.2.3 for the mean, G.3 for Student's t of 15 degrees, 2.131 x 0.75 % = 1.60 %. With a
    reference known to 2 %, 5.1.2 adds in squares: sqrt(1.60^2 + (1.96 x 2)^2) % = 4.23 %.
    """
    sharp, blunt = hand_worked({"north": NORTH}), hand_worked({"north": NORTH}, 0.002)
    for found, expected in ((sharp, 0.0160), (blunt, 0.0423)):
        assert found.bias.median == pytest.approx(NORTH, abs=0.001)
        assert half_width(found.bias) == pytest.approx(expected, rel=0.06)
        assert found.repeatability.median == pytest.approx(0.03, rel=0.05)


def test_what_a_comparison_carries_worked_by_hand():
    """Split A on north, B on south, each bias known to 0.75 %, the reference, which both share, to 5 %.

    The ratio gains the variances of two biases, the reference's cancels (JCGM 100, 5.2, correlated inputs; from
    memory); a centre gains both. With 15 degrees and a pooled scatter of 30 the bias' variance is 0.75^2 x 30 / 28.
    """
    rng = np.random.default_rng(11)
    given = splits_on(rng, lambda s, w: "north" if s == "A" else "south", {"north": NORTH, "south": SOUTH})
    plain = compare_splits(**given)
    carried = compare_splits(**given, reference=hand_worked({"north": NORTH, "south": SOUTH}, 0.005))
    ratios = [c.pairs[0].ratio for c in (plain, carried)]
    assert np.log(ratios[0].median / ratios[1].median) == pytest.approx(NORTH - SOUTH, abs=0.006)
    of_bias = 0.0075**2 * 30 / 28
    before, after = (half_width(r, log=True) for r in ratios)
    assert after == pytest.approx(np.sqrt(before**2 + 1.96**2 * 2 * of_bias), rel=0.03)
    before, after = (half_width(c.splits[0].centre, log=True) for c in (plain, carried))
    assert after == pytest.approx(np.sqrt(before**2 + 1.96**2 * (of_bias + 0.05**2)), rel=0.03)


def test_a_tool_without_a_name_is_the_studys_only_one():
    """No scatter between tools enters: the centre gains the variance of one bias, 0.75^2 x 15 / 13, and no more."""
    given = splits_on(np.random.default_rng(12), lambda s, w: "north", {"north": NORTH})
    given["labels"] = {n: {"split": r["split"], "wafer": r["wafer"]} for n, r in given["labels"].items()}
    plain, carried = compare_splits(**given), compare_splits(**given, reference=hand_worked({"north": NORTH}))
    before, after = (half_width(c.splits[0].centre, log=True) for c in (plain, carried))
    assert after == pytest.approx(np.sqrt(before**2 + 1.96**2 * 0.0075**2 * 15 / 13), rel=0.03)
    assert "Corrected for the bias on the reference wafer (12 %)" in carried.verdict[-1]


def splits_on(rng, tool_of, biases):
    """Two equal splits, four wafers each, two sites a wafer, seen through tools that are off."""
    results, labels = {}, {}
    for s in "AB":
        for w in range(4):
            middle = 0.1 * np.exp(0.03 * rng.standard_normal())
            for k in range(2):
                tool = tool_of(s, w)
                results[f"{s}{w}{k}"] = measured(rng, middle * np.exp(biases[tool]), 0.01)
                labels[f"{s}{w}{k}"] = {"split": s, "wafer": f"{s}{w}", "tool": tool}
    return {"results": results, "labels": labels, "quantity": COMPLIANCE, "prior": WIDE, "seed": 1}


BIASES = {"north": 0.20, "south": -0.10}


def test_a_known_bias_between_tools_is_taken_out():
    rng = np.random.default_rng(5)
    given = splits_on(rng, lambda s, w: "north" if s == "A" else "south", BIASES)
    fooled = compare_splits(**given)
    assert fooled.pairs[0].decided
    assert any("2 tools measured (north, south) and no reference study" in w for w in fooled.warnings)
    corrected = compare_splits(**given, reference=study(rng, BIASES, 10))
    assert not corrected.pairs[0].decided
    assert corrected.pairs[0].ratio.low < 1 < corrected.pairs[0].ratio.high
    for split in corrected.splits:
        assert split.centre.low < 0.1 < split.centre.high
    assert "Corrected for the bias on the reference wafer (" in corrected.verdict[-1]
    assert "% of north, -" in corrected.verdict[-1] and "% of south)" in corrected.verdict[-1]


def test_a_bias_that_splits_share_leaves_their_ratio_alone():
    """One tool, known to 5 % only: centres get wider by that, the ratio does not."""
    rng = np.random.default_rng(6)
    given = splits_on(rng, lambda s, w: "north", BIASES)
    blunt = study(rng, {"north": 0.20}, 10, reference_uncertainty=0.005)
    plain, carried = compare_splits(**given), compare_splits(**given, reference=blunt)
    width = [np.log(c.pairs[0].ratio.high / c.pairs[0].ratio.low) for c in (plain, carried)]
    assert width[1] == pytest.approx(width[0], rel=0.03)
    centre = [np.log(c.splits[0].centre.high / c.splits[0].centre.low) / 3.92 for c in (plain, carried)]
    assert centre[1] == pytest.approx(np.hypot(centre[0], 0.05), rel=0.1)


def test_a_tool_that_did_not_measure_the_reference_is_drawn_from_the_scatter():
    rng = np.random.default_rng(7)
    given = splits_on(rng, lambda s, w: "north" if s == "A" else "west", {**BIASES, "west": 0.05})
    tools = {f"t{k}": b for k, b in enumerate((0.1, -0.1, 0.05, -0.05))}
    compared = compare_splits(**given, reference=study(rng, {**tools, "north": 0.20}, 8))
    assert any("tool west did not measure the reference wafer" in w for w in compared.warnings)
    ratio = compared.pairs[0].ratio
    # Two results of one unknown tool of 0.1 scatter: no less than about 1.96 x 0.1 either way.
    assert np.log(ratio.high / ratio.low) / 2 > 0.15


def test_it_reads_as_text():
    text = repr(study(np.random.default_rng(1), {"north": 0.10, "south": -0.05}, 4))
    assert "Reference 0.1 nm/GPa, Al|Si.compliance" in text
    assert "bias of north" in text and "tool to tool" in text


def test_without_labels_all_is_one_tool():
    rng = np.random.default_rng(8)
    results = {f"r{k}": measured(rng, 0.11, 0.01) for k in range(6)}
    found = reference_wafer(results, quantity=COMPLIANCE, reference=0.1, prior=WIDE, seed=1)
    assert found.tools == ("the tool",)
    assert found.bias.low < np.log(1.1) < found.bias.high


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"reference": 0.0}, "reference=0.0; give the known value, above zero"),
        ({"reference": 0.1, "reference_uncertainty": -1.0}, "reference_uncertainty=-1.0"),
    ],
)
def test_a_reference_that_will_not_do(change, message):
    results = {k: measured(np.random.default_rng(1), 0.1, 0.01) for k in "ab"}
    with pytest.raises(ValueError, match=message):
        reference_wafer(results, quantity=COMPLIANCE, prior=WIDE, seed=1, **change)


def test_one_measurement_is_refused():
    with pytest.raises(ValueError, match="measured 1 time; two or more"):
        reference_wafer({"a": np.linspace(0.9, 1.1, 60)}, quantity=COMPLIANCE, reference=1.0, seed=1)


def test_a_study_of_another_quantity_is_refused():
    rng = np.random.default_rng(9)
    given = splits_on(rng, lambda s, w: "north", BIASES)
    results = {k: rng.normal(60, 0.1, 100) for k in "abc"}
    other = reference_wafer(results, quantity="Al.thickness", reference=60.0, seed=1)
    with pytest.raises(ValueError, match=r"study is of 'Al\.thickness', not of 'Al\|Si\.compliance'"):
        compare_splits(**given, reference=other)
