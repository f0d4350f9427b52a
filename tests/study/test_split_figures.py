"""Figures and tables of a comparison: what they draw is what was found."""

from types import SimpleNamespace

import numpy as np
import pytest
import xarray as xr
from experiments import site_draws
from matplotlib import colormaps
from scipy import stats

from inverse.plot.splits_figure import split_differences, splits, wafer_map
from inverse.report.splits import _pair_cells, splits_table
from inverse.study.splits.compare import compare_splits
from inverse.study.splits.comparison import Interval, Pair, Question
from inverse.study.splits.equivalent_layer import EquivalentLayer

COMPLIANCE = "Al|Si.compliance"
PRIOR = stats.halfcauchy(scale=0.05)


@pytest.fixture(scope="module")
def compared():
    rng = np.random.default_rng(1)
    labels = {
        f"{s}{w}{k}": {"split": s, "wafer": f"{s}{w}"} for s in "AB" for w in range(3) for k in range(2)
    }
    results = {n: site_draws(rng, 6.0 if n[0] == "A" else 15.0) for n in labels}
    values = PRIOR.ppf((np.arange(20_000) + 0.5) / 20_000)
    weight = np.exp(-0.5 * (values / 0.05) ** 2)
    results["B00"] = rng.choice(values, 400, p=weight / weight.sum())
    return compare_splits(results, quantity=COMPLIANCE, labels=labels, prior=PRIOR, seed=1, margin=0.1)


def test_the_forest_has_a_row_for_each_split_wafer_and_site(compared):
    (ax,) = splits(compared).axes
    names = [label.get_text() for label in ax.get_yticklabels()]
    assert len(names) == 2 + 6 + 12
    assert names[:4] == ["A", "wafer A0", "A00", "A01"]
    assert ax.get_xscale() == "log" and ax.get_xlabel() == "Al|Si.compliance (nm/GPa)"
    line = ax.lines[0].get_xdata()
    assert (line[0], line[1]) == (compared.splits[0].centre.low, compared.splits[0].centre.high)


def test_a_site_that_sets_a_limit_has_an_arrow(compared):
    (ax,) = splits(compared).axes
    (arrow,) = ax.texts
    assert arrow.arrow_patch is not None
    assert arrow.xy == (
        pytest.approx(ax.get_xlim()[0]),
        [t.get_text() for t in ax.get_yticklabels()].index("B00"),
    )
    limit = float(np.quantile(next(s.draws for s in compared.sites if s.name == "B00"), 0.975))
    assert any(line.get_marker() == "|" and line.get_xdata() == pytest.approx(limit) for line in ax.lines)


def test_long_names_get_a_line_of_their_own_and_wide_ratios_a_logarithmic_axis():
    rng = np.random.default_rng(3)
    values = PRIOR.ppf((np.arange(20_000) + 0.5) / 20_000)
    weight = np.exp(-0.5 * (values / 0.01) ** 2)
    names = [f"{s}{w}" for s in "AB" for w in range(2)]
    long = {"A": "a wet clean of sixty seconds", "B": "a plasma clean with oxygen"}
    labels = {n: {"split": long[n[0]], "wafer": n} for n in names}
    results = {n: rng.choice(values, 400, p=weight / weight.sum()) for n in names}
    both = compare_splits(results, quantity=COMPLIANCE, labels=labels, prior=PRIOR, seed=1)
    (ax,) = split_differences(both).axes
    assert ax.get_title(loc="left").count("\n") == 1
    assert ax.get_xscale() == "log"


def test_differences_show_margin_and_interval(compared):
    (ax,) = split_differences(compared).axes
    band = ax.patches[0].get_extents().transformed(ax.transData.inverted())
    assert (band.x0, band.x1) == (pytest.approx(1 / 1.1), pytest.approx(1.1))
    assert ax.get_xlabel() == "ratio of Al|Si.compliance; light band: within 10 %"
    assert ax.get_title(loc="left") == "B / A: P(lower) above 0.999, decided"
    ratio = compared.pair("B", "A").ratio
    top = ax.lines[1].get_xdata()[ax.lines[1].get_ydata().argmax()]
    assert ratio.low < top < ratio.high and top == pytest.approx(ratio.median, rel=0.1)


@pytest.fixture
def mapped():
    rng = np.random.default_rng(2)
    values = rng.uniform(0.1, 0.2, (9, 1)) * (1 + 0.03 * rng.standard_normal((9, 400)))
    values[4] = np.nan
    coords = {"site": [str(k) for k in range(9)], "x": ("site", np.repeat([-50.0, 0, 50], 3)),
              "y": ("site", np.tile([-50.0, 0, 50], 3)), "wafer": ("site", ["W1"] * 9)}  # fmt: skip
    return xr.Dataset({COMPLIANCE: (("site", "draw"), values, {"units": "nm/GPa"})}, coords=coords)


def test_a_wafer_map_shows_value_and_uncertainty(mapped):
    figure = wafer_map(mapped, COMPLIANCE, radius=75)
    left, right = figure.axes[:2]
    drawn, crosses = left.collections
    known = np.delete(np.median(mapped[COMPLIANCE], axis=1), 4)
    assert np.allclose(drawn.get_array(), known)
    assert np.allclose(crosses.get_offsets(), [[0.0, 0.0]])
    spread = np.delete(np.diff(np.quantile(mapped[COMPLIANCE], [0.16, 0.84], axis=1), axis=0)[0], 4) / 2
    assert np.allclose(right.collections[0].get_array(), spread)
    assert figure.axes[2].get_ylabel() == "Al|Si.compliance (nm/GPa)"


def test_the_maps_colours_grow_in_lightness(mapped):
    """Luminance by the weights of ITU-R BT.709 (from memory), which is what grey printing keeps."""
    name = wafer_map(mapped, COMPLIANCE).axes[0].collections[0].get_cmap().name
    colours = colormaps[name](np.linspace(0, 1, 64))[:, :3]
    linear = np.where(colours <= 0.04045, colours / 12.92, ((colours + 0.055) / 1.055) ** 2.4)
    assert np.all(np.diff(linear @ [0.2126, 0.7152, 0.0722]) > 0)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda d: d.drop_vars("x"), "no coordinate x; give batch a table"),
        (
            lambda d: d.rename({COMPLIANCE: "other"}),
            "the results hold no 'Al|Si.compliance'; they hold other",
        ),
        (
            lambda d: d.assign_coords(wafer=("site", ["W1"] * 4 + ["W2"] * 5)),
            r"hold 2 wafers \(W1, W2\); give wafer=",
        ),
    ],
)
def test_maps_that_cannot_be_drawn(mapped, change, message):
    with pytest.raises(ValueError, match=message):
        wafer_map(change(mapped), COMPLIANCE)


def test_an_unknown_wafer_is_refused(mapped):
    with pytest.raises(ValueError, match="there is no wafer 'W9'; the results hold W1"):
        wafer_map(mapped, COMPLIANCE, wafer="W9")


def test_tables_hold_the_numbers(compared):
    pairs = splits_table(compared).markdown()
    assert "| B / A |" in pairs and "| decided |" in pairs and "P(by more than 10 %)" in pairs
    assert "familywise error of 5 %" in pairs and "as SiO2 thickness, at least, nm" in pairs
    centres = repr(splits_table(compared, "splits"))
    assert "half-Cauchy with scale 0.2 between wafers" in centres
    assert f"{compared.splits[0].centre.median:.4f}" in centres
    assert splits_table(compared, "wafers").latex().count(r"\\") == 7


def cells(**given):
    made = {"difference": Interval(0.0, -1e-6, 1e-6), "ratio": Interval(1.0, 0.004, 249.0), "better": 0.5}
    made |= {"better_by_margin": 0.4, "worse_by_margin": 0.4, "tail": 0.9, "decided": False, **given}
    pair = Pair("B", "A", **made)
    question = Question(COMPLIANCE, 0.0, "lower", 0.05, True, EquivalentLayer("SiO2", 160.0, True))
    return _pair_cells(SimpleNamespace(question=question, unit="nm/GPa"), pair)


def test_limits_and_wide_ranges_are_written_as_such():
    thin, thick = Interval(0.0, -5e-6, 5e-6), Interval(-13.1, -13.9, -12.1)
    wide = cells(open_side="", equivalent_thickness=thick)
    assert wide[1:3] == ("1", "0.004 to 249") and wide[-1] == "-13.10 (-13.90 to -12.10)"
    limit = cells(open_side="<", equivalent_thickness=thick)
    assert limit[1:3] == ("< 249", "limit, 97.5 %")
    both = cells(open_side="<>", equivalent_thickness=thin)
    assert both[1:3] == ("none", "both set only limits") and both[-1] == "below 0.01 either way"
    soft = cells(open_side="<>", equivalent_thickness=Interval(0.0, -0.4, 0.3))
    assert soft[-1] == "below 0.4 either way"


def test_what_is_no_comparison_is_refused(compared):
    with pytest.raises(ValueError, match="splits_table takes what compare_splits returned, not a int"):
        splits_table(3)
    with pytest.raises(ValueError, match="kind='sites'; give one of pairs, splits, wafers"):
        splits_table(compared, "sites")
    with pytest.raises(ValueError, match="give what compare_splits returned, not a list"):
        splits([])
