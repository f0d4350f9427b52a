"""Comparing process splits: the made experiment of the shared traces, edge cases and the words."""

import json

import numpy as np
import pytest
import xarray as xr
from experiments import site_draws
from scipy import stats

from inverse.description.unknowns import describe_prior
from inverse.study.splits.compare import compare_splits
from inverse.study.splits.scatter import SplitPriors

COMPLIANCE = "Al|Si.compliance"
PRIOR = stats.halfcauchy(scale=0.05)


@pytest.fixture(scope="module")
def truth(splits):
    return json.loads((splits / "truth.json").read_text())["traces"]


def made(truth, keep=lambda t: True, seed=0, relative=0.02):
    """Draws as a fit of each of the 24 traces gives them (Cramer-Rao widths there: 1.6 to 2.4 %), and labels."""
    rng = np.random.default_rng(seed)
    results = {name: site_draws(rng, t["stiffness_GPa_nm"], relative) for name, t in truth.items() if keep(t)}
    labels = {name: {"split": truth[name]["split"], "wafer": truth[name]["wafer"]} for name in results}
    return {"results": results, "labels": labels, "quantity": COMPLIANCE, "prior": PRIOR, "seed": 1}


@pytest.fixture(scope="module")
def compared(truth):
    return compare_splits(**made(truth), margin=0.1)


def realised(truth, split):
    return np.exp(np.mean([np.log(t["stiffness_GPa_nm"]) for t in truth.values() if t["split"] == split]))


def test_realised_medians_lie_in_their_intervals(compared, truth):
    for name, near in (("A", 5.9), ("B", 6.9), ("C", 19.4)):
        assert realised(truth, name) == pytest.approx(near, abs=0.05)
        centre = compared.split(name).centre
        assert 1 / centre.high < realised(truth, name) < 1 / centre.low


def test_the_stiffest_split_is_found_beyond_doubt(compared):
    assert compared.pair("C", "B").better > 0.999 and compared.pair("C", "B").decided
    assert compared.pair("C", "A").better > 0.999
    assert compared.split("C").rank == pytest.approx((1.0, 0.0, 0.0), abs=1e-3)
    assert "Decided: split C is the best, with the lowest Al|Si.compliance" in repr(compared)
    assert repr(compared).count("Decided") == 1 and "Al|Si.compliance is lower in C than in A: " in repr(
        compared
    )


def test_the_wafer_scatter_leaves_b_over_a_open(compared):
    """By hand: a ratio of 6.94 / 5.90 at 10 % scatter and 4 wafers is 2.3 standard errors of a t with 9 degrees."""
    pair = compared.pair("B", "A")
    by_hand = stats.t(9).cdf(np.log(6.94 / 5.90) / (0.1 * np.sqrt(2 / 4)))
    assert pair.better == pytest.approx(by_hand, abs=0.03)
    assert 0.5 < pair.better_by_margin < pair.better


def test_scatter_is_found(compared):
    for split in compared.splits:
        assert split.between.low < 0.1 < split.between.high
        assert split.within.low < 0.03 < split.within.high


def test_a_pair_reads_the_same_either_way_round(compared):
    forth, back = compared.pair("A", "C"), compared.pair("C", "A")
    assert forth.ratio.median == pytest.approx(1 / back.ratio.median)
    assert (forth.difference.low, forth.difference.high) == (-back.difference.high, -back.difference.low)
    assert forth.better + back.better == pytest.approx(1, abs=1e-12)
    assert forth.better_by_margin == back.worse_by_margin


def test_stiffness_and_compliance_say_the_same(truth):
    """A batch of compliances, asked about stiffness: medians invert, better means higher."""
    given = made(truth)
    names = list(given["results"])
    data = {COMPLIANCE: (("site", "draw"), np.stack([given["results"][n] for n in names]))}
    text = json.dumps(describe_prior(PRIOR))
    data["prior"] = (("site", "quantity"), np.full((len(names), 1), text, dtype=object))
    data["reason"] = ("site", np.full(len(names), "", dtype=object))
    coords = {"site": names, "quantity": [COMPLIANCE]}
    coords |= {c: ("site", [given["labels"][n][c] for n in names]) for c in ("split", "wafer")}
    batch = xr.Dataset(data, coords=coords)
    compliance = compare_splits(batch, quantity=COMPLIANCE, seed=1)
    stiffness = compare_splits(batch, quantity="Al|Si.stiffness", seed=1)
    assert stiffness.question.better == "higher" and compliance.question.better == "lower"
    assert stiffness.unit == "GPa/nm"
    for name in "ABC":
        assert stiffness.split(name).centre.median == pytest.approx(
            1 / compliance.split(name).centre.median, rel=0.01
        )
    assert stiffness.pair("B", "A").better == pytest.approx(compliance.pair("B", "A").better, abs=0.01)


def test_shrunken_wafers_lie_between_their_sites_and_their_split(truth):
    """With sites known to 15 % only, the most extreme wafer is drawn towards its split's centre."""
    given = made(truth, relative=0.15)
    compared = compare_splits(**given)
    own = {}
    for name, draws in given["results"].items():
        own.setdefault(given["labels"][name]["wafer"], []).append(np.median(np.log(draws)))
    for split in compared.splits:
        wafers = [w for w in compared.wafers if w.split == split.name]
        far = max(wafers, key=lambda w: abs(np.mean(own[w.wafer]) - np.log(split.centre.median)))
        raw, centre = np.mean(own[far.wafer]), np.log(split.centre.median)
        assert abs(np.log(far.centre.median) - centre) < abs(raw - centre)


def test_ties_are_undecided(truth):
    given = made(truth, lambda t: t["split"] == "A")
    twin = {name.replace("A", "D"): draws for name, draws in given["results"].items()}
    labels = {n: {"split": n[0], "wafer": n[:2]} for n in [*given["results"], *twin]}
    compared = compare_splits(**{**given, "results": given["results"] | twin, "labels": labels}, margin=0.5)
    (pair,) = compared.pairs
    assert pair.better == pytest.approx(0.5, abs=0.015) and not pair.decided
    assert "Undecided which split is the best" in compared.verdict[0]
    assert "Whether Al|Si.compliance is lower in " in compared.verdict[1]
    assert "They agree within 50 % with probability" in compared.verdict[1]


def test_one_wafer_in_a_split_borrows_the_scatter_of_the_others(truth):
    compared = compare_splits(**made(truth, lambda t: t["split"] != "A" or t["wafer"] == "A1"))
    assert any("split A has one wafer" in w for w in compared.warnings)
    few, many = compared.split("A").centre, compared.split("B").centre
    assert np.log(few.high / few.low) > 1.5 * np.log(many.high / many.low)
    assert compared.split("A").wafers == 1 and compared.split("A").sites == 2


def test_one_wafer_everywhere_rests_on_the_prior(truth):
    compared = compare_splits(**made(truth, lambda t: t["wafer"].endswith("1")))
    assert any("every split has one wafer" in w for w in compared.warnings)
    assert not compared.pair("B", "A").decided


def test_one_site_a_split_is_answered_widely(truth):
    compared = compare_splits(**made(truth, lambda t: t["wafer"].endswith("1") and t["site"] == 1))
    assert any("every wafer has one site" in w for w in compared.warnings)
    interval = compared.pair("B", "A").ratio
    assert interval.low < 0.8 and interval.high > 1.2


def test_unequal_counts_are_taken_as_they_are(truth):
    compared = compare_splits(
        **made(truth, lambda t: not (t["split"] == "B" and (t["site"] == 2 or "4" in t["wafer"])))
    )
    assert [(s.wafers, s.sites) for s in compared.splits] == [(4, 8), (3, 3), (4, 8)]
    assert compared.pair("C", "B").decided


def censored(rng, count=400):
    """Draws of a compliance of which the data say only that it is below about 0.01 nm/GPa."""
    values = PRIOR.ppf((np.arange(100_000) + 0.5) / 100_000)
    weight = np.exp(-0.5 * (values / 0.01) ** 2)
    return rng.choice(values, count, p=weight / weight.sum())


def test_all_sites_censored_decide_nothing():
    rng = np.random.default_rng(4)
    names = [f"{s}{w}" for s in "AB" for w in (1, 2, 3)]
    results = {name: censored(rng) for name in names}
    labels = {name: {"split": name[0], "wafer": name} for name in names}
    compared = compare_splits(results, quantity=COMPLIANCE, labels=labels, prior=PRIOR, seed=1)
    assert any("all sites set only a limit" in w for w in compared.warnings)
    assert not compared.pairs[0].decided
    assert compared.pairs[0].better == pytest.approx(0.5, abs=0.1)
    assert compared.pairs[0].ratio.low < 0.2 and compared.pairs[0].ratio.high > 5
    assert compared.pairs[0].open_side == "<>" and "not determined, as both set only limits" in repr(compared)
    assert {s.open_side for s in (*compared.splits, *compared.wafers)} == {"<"}


def test_splits_that_set_only_limits_stay_near_them():
    """Six limits of 0.01 (standard deviation): a common centre far below would be the prior's doing."""
    rng = np.random.default_rng(4)
    names = [f"{s}{w}" for s in "AB" for w in (1, 2, 3)]
    labels = {name: {"split": name[0], "wafer": name} for name in names}
    compared = compare_splits(
        {name: censored(rng) for name in names}, quantity=COMPLIANCE, labels=labels, prior=PRIOR, seed=1
    )
    for split in compared.splits:
        assert 0.0001 < split.centre.median < split.centre.high < 0.02


def test_a_censored_split_against_a_bounded_one_is_decided():
    """A bond too good to bound is better than one at 0.15 nm/GPa, and the ratio has no telling upper end."""
    rng = np.random.default_rng(5)
    labels = {f"{s}{w}": {"split": s, "wafer": f"{s}{w}"} for s in "AB" for w in range(4)}
    results = {n: censored(rng) if n[0] == "B" else site_draws(rng, 6.5) for n in labels}
    compared = compare_splits(results, quantity=COMPLIANCE, labels=labels, prior=PRIOR, seed=1)
    pair = compared.pair("B", "A")
    assert pair.decided and pair.better > 0.999
    assert any("4 of 8 sites set only a limit" in w for w in compared.warnings)
    assert pair.ratio.high / pair.ratio.low > 20
    assert pair.open_side == "<" and compared.pair("A", "B").open_side == ">"
    assert f"ratio below {pair.ratio.high:.3g} (97.5 %)" in repr(compared)
    assert compared.split("A").open_side == "" and compared.split("B").open_side == "<"


def test_failed_sites_are_left_out_and_named():
    values = np.abs(np.random.default_rng(1).normal(0.1, 0.01, (4, 100)))
    values[3] = np.nan
    batch = xr.Dataset(
        {
            COMPLIANCE: (("site", "draw"), values),
            "reason": ("site", ["", "", "", "TraceError: NaN at 3 delays"]),
        },
        coords={"site": list("abcd"), "split": ("site", list("ABBA")), "wafer": ("site", list("abcd"))},
    )
    compared = compare_splits(batch, quantity=COMPLIANCE, seed=1)
    assert "site 'd' was left out: TraceError: NaN at 3 delays" in compared.warnings
    assert any("the prior of 3 sites is not known" in w for w in compared.warnings)


def test_sites_that_are_not_as_they_should_be_are_named():
    values = np.abs(np.random.default_rng(1).normal(0.1, 0.01, (4, 100)))
    batch = xr.Dataset(
        {
            COMPLIANCE: (("site", "draw"), values),
            "status": ("site", ["ok", "not converged", "nothing learnt", "ok"]),
            "warning": ("site", ["", "residuals are correlated.", "", "residuals are correlated."]),
        },
        coords={"site": list("abcd"), "split": ("site", list("ABBA")), "wafer": ("site", list("abcd"))},
    )
    said = repr(compare_splits(batch, quantity=COMPLIANCE, seed=1))
    assert "1 of 4 sites (b) did not converge and count all the same" in said
    assert "1 of 4 sites (c) taught nothing" in said
    assert "2 of 4 sites (b, d) have residuals unlike the noise" in said


def test_a_decided_difference_of_bonds_names_the_interlayer(compared):
    """Of draws without a stack c33 of SiO2 alone, 2.2 g/cm3 x (5.968 nm/ps)^2 = 78.4 GPa, times the compliance."""
    pair = compared.pair("A", "C")
    by_hand = 78.4 * (compared.split("A").centre.median - compared.split("C").centre.median)
    assert pair.equivalent_thickness.median == pytest.approx(by_hand, rel=0.02)
    assert any("of at least" in w and "SiO2 interlayer (inertia not counted)" in w for w in compared.warnings)


def test_results_of_stacks_count_the_interlayers_inertia(truth):
    """Between Z1 = 17.33 and Z2 = 19.64 (Al, Si: g/cm3 x nm/ps) silica of 13.13 acts as 78.36 / 0.4856 = 161.4 GPa.

    By hand: (1 - (13.13 / 17.33)^2) (1 - (13.13 / 19.64)^2) = 0.4263 x 0.5532 = 0.2358, the root 0.4856.
    """
    given = made(truth)
    names = list(given["results"])
    draws = np.stack([given["results"][n] for n in names])
    variables = {
        COMPLIANCE: (("site", "draw"), draws),
        "Al|Si.equivalent_thickness": (("site", "draw"), 161.4 * draws),
    }
    coords = {c: ("site", [given["labels"][n][c] for n in names]) for c in ("split", "wafer")}
    batch = xr.Dataset(variables, coords={"site": names, **coords})
    compared = compare_splits(batch, quantity=COMPLIANCE, seed=1)
    assert compared.question.layer.per_compliance == pytest.approx(161.4)
    assert any("as well be one of 1" in w and "(inertia counted)" in w for w in compared.warnings)
    between = compare_splits(batch.drop_vars("Al|Si.equivalent_thickness"), quantity=COMPLIANCE, seed=1)
    assert between.question.layer is None and between.pairs[0].equivalent_thickness is None
    other = compare_splits(batch, quantity=COMPLIANCE, seed=1, interlayer=("alumina", 3.95, 10.8))
    assert (
        other.question.layer.per_compliance == pytest.approx(3.95 * 10.8**2)
        and not other.question.layer.exact
    )


def test_another_quantity_has_no_interlayer():
    rng = np.random.default_rng(2)
    labels = {f"{s}{w}": {"split": s, "wafer": w} for s in "AB" for w in range(3)}
    results = {n: rng.normal(60 if n[0] == "A" else 63, 0.2, 300) for n in labels}
    compared = compare_splits(
        results, quantity="Al.thickness", labels=labels, prior=stats.uniform(40, 40), seed=1
    )
    assert compared.pairs[0].equivalent_thickness is None
    assert compared.pairs[0].ratio.median == pytest.approx(60 / 63, rel=0.005)


def test_a_signed_quantity_is_compared_by_differences():
    rng = np.random.default_rng(2)
    labels = {f"{s}{w}": {"split": s, "wafer": w} for s in "AB" for w in range(4)}
    results = {n: rng.normal(-0.1 if n[0] == "A" else 0.3, 0.05, 300) for n in labels}
    compared = compare_splits(
        results,
        quantity="time_zero",
        labels=labels,
        prior=stats.norm(0, 5),
        seed=1,
        margin=0.1,
        better="lower",
    )
    (pair,) = compared.pairs
    assert pair.ratio is None and pair.difference.median == pytest.approx(-0.4, abs=0.05)
    assert "difference -0.4" in compared.verdict[1] and "by more than 0.1 ps" in compared.verdict[1]


def test_equal_seeds_give_equal_comparisons(truth, compared):
    again = compare_splits(**made(truth), margin=0.1)
    assert again.pairs == compared.pairs and again.wafers == compared.wafers


def test_the_prior_of_the_sites_is_divided_out(truth):
    """A site prior as narrow as the data draws every site towards it; divided out, the scatter comes back."""
    tilted = stats.lognorm(0.03, scale=0.155)
    rng = np.random.default_rng(3)
    tight, loose, labels = {}, {}, {}
    for name, t in truth.items():
        if t["split"] != "C":
            seen = np.log(1 / t["stiffness_GPa_nm"]) + 0.02 * rng.standard_normal()
            precision = 0.03**-2 + 0.02**-2
            mean = (np.log(0.155) * 0.03**-2 + seen * 0.02**-2) / precision
            tight[name] = np.exp(mean + precision**-0.5 * rng.standard_normal(2000))
            loose[name] = np.exp(seen + 0.02 * rng.standard_normal(2000))
            labels[name] = {"split": t["split"], "wafer": t["wafer"]}
    given = {"quantity": COMPLIANCE, "labels": labels, "seed": 1}
    divided, kept = compare_splits(tight, **given, prior=tilted), compare_splits(tight, **given)
    known = compare_splits(loose, **given)
    for name in "AB":
        assert divided.split(name).centre.median == pytest.approx(known.split(name).centre.median, rel=0.01)
        assert divided.split(name).between.median == pytest.approx(known.split(name).between.median, rel=0.1)
        assert kept.split(name).between.median < 0.8 * known.split(name).between.median


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (
            {"labels": {"A11": {"split": "A", "wafer": "A1"}}},
            "site 'A12' has no row in the labels; they name A11. Add",
        ),
        ({"labels": None}, "labels are missing; give a table"),
        ({"level": 0}, "level=0; give a probability"),
        ({"margin": -1}, "margin=-1; give zero or a positive"),
        ({"better": "thicker"}, "better='thicker'; give 'higher' or 'lower'"),
        ({"scale": "cubic"}, "scale='cubic'; give 'log', 'linear'"),
        ({"draws": 10}, "draws must be a whole number, 1000 or more, not 10"),
        ({"seed": None}, "seed must be a whole number, 0 or more, not None"),
        ({"results": {}}, "give what batch returned"),
        ({"quantity": "Al.colour"}, "'Al.colour' names no known quantity"),
        ({"interlayer": ("SiO2", 78.4)}, r"interlayer=\('SiO2', 78.4\); give name, density in g/cm3"),
        ({"prior": 3}, "the prior of site 'A11' is 3; give a frozen"),
    ],
)
def test_what_is_refused(truth, change, message):
    with pytest.raises(ValueError, match=message):
        compare_splits(**{**made(truth), **change})


def test_a_site_without_a_wafer_is_refused(truth):
    given = made(truth)
    given["labels"]["B11"]["wafer"] = ""
    with pytest.raises(ValueError, match="site 'B11' has no 'wafer' in its labels"):
        compare_splits(**given)


def test_one_split_is_refused(truth):
    with pytest.raises(ValueError, match=r"all sites belong to split 'A'.*reference_wafer"):
        compare_splits(**made(truth, lambda t: t["split"] == "A"))


def test_an_unknown_split_or_a_split_against_itself_is_refused(compared):
    with pytest.raises(ValueError, match="no split 'D'; the comparison has A, B, C"):
        compared.pair("A", "D")
    with pytest.raises(ValueError, match="pair got 'A' twice"):
        compared.pair("A", "A")


@pytest.mark.parametrize("change", [{"between": -1.0}, {"centre_sd": 0.0}, {"within": np.nan}])
def test_priors_that_make_no_sense_are_refused(change):
    with pytest.raises(ValueError, match=f"SplitPriors got {next(iter(change))}="):
        SplitPriors(**change)
