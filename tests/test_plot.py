"""Figures, tested on their artists and data: what is drawn, its labels, its scale, and that grey suffices."""

from types import SimpleNamespace

import matplotlib as mpl
import numpy as np
import pytest
import xarray as xr
from fake_results import draws, tree
from matplotlib.figure import Figure
from scipy import stats

import inverse as inv
from inverse import plot
from inverse.plot.corner_figure import LEVELS
from inverse.plot.style import COLUMN, decade, power_label

DELAY = np.concatenate([np.linspace(-5, 10, 151), np.linspace(10.2, 110, 300)])
FITTED = np.abs(DELAY) > 3
SIGNAL = 1e-4 * np.exp(-DELAY / 60) * (DELAY > 0)
WHITE = 2e-6


def measured(channels=("reflectance_change",)) -> xr.Dataset:
    rng = np.random.default_rng(0)
    units = {"reflectance_change": "1", "optical_phase": "rad"}
    return xr.Dataset(
        {
            n: ("delay", SIGNAL + WHITE * rng.standard_normal(DELAY.size), {"units": units[n]})
            for n in channels
        },
        {"delay": ("delay", DELAY, {"units": "ps"})},
    )


def posterior_with_data(channels=("reflectance_change",), **extra):
    rng = np.random.default_rng(1)
    predicted = {
        n: (("sample", "delay"), SIGNAL + WHITE * rng.standard_normal((400, DELAY.size))) for n in channels
    }
    return tree(
        observed_data=measured(channels),
        posterior_predictive=xr.Dataset({**predicted, **extra}, {"delay": DELAY}),
        constant_data=xr.Dataset({"used": ("delay", FITTED.astype("i1"))}, {"delay": DELAY}),
    )


@pytest.fixture(scope="module")
def fit_figure() -> Figure:
    wave = 2e-6 * np.sin(DELAY / 9)
    return plot.fit(
        posterior_with_data(reflectance_change_discrepancy=(("sample", "delay"), np.tile(wave, (400, 1))))
    )


def line(ax, label):
    return next(artist for artist in ax.get_lines() if artist.get_label() == label)


def test_fit_draws_data_and_median_at_one_scale(fit_figure):
    signal = fit_figure.axes[0]
    np.testing.assert_allclose(line(signal, "data").get_ydata(), measured()["reflectance_change"] * 1e5)
    np.testing.assert_allclose(line(signal, "median").get_ydata(), SIGNAL * 1e5, atol=0.6 * WHITE * 1e5)
    assert signal.get_ylabel() == "reflectance change (10⁻⁵)"
    assert fit_figure.axes[1].get_ylabel() == "residual (10⁻⁶)"
    assert fit_figure.axes[1].get_xlabel() == "delay (ps)"


@pytest.mark.parametrize(("label", "half"), [("68 % band", 0.9945), ("95 % band", 1.96)])
def test_fit_bands_are_central_intervals_of_the_predictive(fit_figure, label, half):
    band = next(c for c in fit_figure.axes[0].collections if c.get_label() == label)
    vertices = band.get_paths()[0].vertices
    at = DELAY[200]
    low, high = (f(vertices[np.isclose(vertices[:, 0], at), 1]) for f in (np.min, np.max))
    # 400 draws place a 95 % end-point to about 0.13 deviations
    assert (high - low) / 2 == pytest.approx(half * WHITE * 1e5, rel=0.2)


def test_fit_residuals_white_noise_and_discrepancy(fit_figure):
    signal, residual = fit_figure.axes
    difference = line(signal, "data").get_ydata() - line(signal, "median").get_ydata()
    points = next(artist for artist in residual.get_lines() if artist.get_marker() == ".")
    np.testing.assert_allclose(points.get_ydata(), difference * 10, atol=1e-9)
    assert line(residual, "± white noise").get_ydata()[0] == pytest.approx(2.0, rel=0.01)
    np.testing.assert_allclose(line(residual, "discrepancy").get_ydata(), 2 * np.sin(DELAY / 9))


def test_fit_hatches_what_was_not_fitted(fit_figure):
    patch = next(p for p in fit_figure.axes[0].patches if p.get_label() == "not fitted")
    corners = patch.get_xy(), patch.get_xy()[0] + patch.get_width()
    step = DELAY[1] - DELAY[0]
    assert corners[0][0] == pytest.approx(-3 - step / 2, abs=1e-6)
    assert corners[1] == pytest.approx(3 + step / 2, abs=1e-6)
    assert patch.get_hatch() == "////"


def test_fit_stacks_channels_with_their_units():
    figure = plot.fit(posterior_with_data(("reflectance_change", "optical_phase")))
    assert [ax.get_ylabel() for ax in figure.axes] == [
        "reflectance change (10⁻⁵)",
        "residual (10⁻⁶)",
        "optical phase (10⁻⁵ rad)",
        "residual (10⁻⁶ rad)",
    ]
    assert figure.get_size_inches()[0] == COLUMN


def test_fit_draws_into_given_axes():
    axes = Figure().subplots(2, 1)
    assert plot.fit(posterior_with_data(), axes=axes) is axes[0].figure
    with pytest.raises(ValueError, match="got 2 axes; give 4: signal and residuals"):
        plot.fit(posterior_with_data(("reflectance_change", "optical_phase")), axes=axes)


def test_fit_refuses_a_result_without_predictions():
    with pytest.raises(ValueError, match="without observed_data and posterior_predictive"):
        plot.fit(tree())


def test_fit_of_least_squares():
    trace = measured()
    predicted = xr.Dataset({"reflectance_change": (("sample", "delay"), SIGNAL[None])}, {"delay": DELAY})
    inversion = SimpleNamespace(
        parts=[None],
        trace=trace,
        predict=lambda values: predicted,
        posterior=SimpleNamespace(members=[SimpleNamespace(model=SimpleNamespace(used=FITTED))]),
    )
    found = SimpleNamespace(inversion=inversion, names=("noise.white",), values=np.array([WHITE]))
    signal, residual = plot.fit(found).axes
    np.testing.assert_allclose(line(signal, "best fit").get_ydata(), SIGNAL * 1e5)
    assert line(residual, "± white noise").get_ydata()[0] == pytest.approx(2.0)
    assert not signal.collections


@pytest.fixture(scope="module")
def corner_figure() -> Figure:
    return plot.corner(tree())


def grid(figure, count):
    return np.array(figure.axes, dtype=object).reshape(count, count)


def test_corner_shows_the_unknowns_but_not_the_noise(corner_figure):
    axes = grid(corner_figure, 3)
    assert [ax.get_xlabel() for ax in axes[2]] == [
        "Al\n.thickness\n(nm)",
        "Al\n.velocity\n(nm/ps)",
        "Al|Si\n.compliance\n(10⁻³ nm/GPa)",
    ]
    assert [ax.get_ylabel() for ax in axes[1:, 0]] == [ax.get_xlabel() for ax in axes[2, 1:]]


def test_corner_contours_hold_the_stated_mass(corner_figure):
    ax = grid(corner_figure, 3)[1, 0]
    pair = np.column_stack([draws()[n].ravel() for n in ("Al.thickness", "Al.velocity")])
    contours = next(c for c in ax.collections if len(c.get_paths()) == 2)
    held = sorted(path.contains_points(pair).mean() for path in contours.get_paths())
    # 4000 draws in bins: a smoothed contour widens by under two per cent of mass
    np.testing.assert_allclose(held, LEVELS, atol=0.025)
    assert "contours hold 68 % and 95 %" in corner_figure.texts[0].get_text()


def test_corner_draws_quantiles_and_prior(corner_figure):
    ax = grid(corner_figure, 3)[1, 1]
    marks = sorted(v.get_xdata()[0] for v in ax.get_lines() if v.get_linestyle() == "--")
    np.testing.assert_allclose(marks, np.quantile(draws()["Al.velocity"], [0.16, 0.5, 0.84]))
    prior = line(ax, "prior")
    assert prior.get_xdata()[np.argmax(prior.get_ydata())] == pytest.approx(6.42, abs=0.01)
    # As many draws from the prior would fill these bins: here the posterior is the prior.
    width = np.diff(ax.get_xlim())[0] / 30
    assert prior.get_ydata().max() == pytest.approx(4000 * width * stats.norm.pdf(0) / 0.10, rel=0.02)


def test_corner_scales_the_prior_with_its_axis(corner_figure):
    ax = grid(corner_figure, 3)[2, 2]  # compliance in 10^-3 nm/GPa
    width = np.diff(ax.get_xlim())[0] / 30 * 1e-3
    expected = 4000 * width * stats.halfcauchy(scale=0.05).pdf(0)
    assert line(ax, "prior").get_ydata()[0] == pytest.approx(expected, rel=0.01)


def test_corner_of_chosen_names_and_heavy_tails():
    figure = plot.corner(tree(), names=["Al|Si.stiffness", "noise.white"])
    axes = grid(figure, 2)
    assert axes[1, 1].get_xlabel() == "noise\n.white\n(10⁻⁶)"
    stiffness = draws()["Al|Si.stiffness"]
    assert axes[0, 0].get_xlim()[1] < 0.1 * stiffness.max()


def test_corner_breaks_long_names():
    values = {"Al|Si.boundary_conductance": 100 + np.random.default_rng(1).standard_normal((4, 200))}
    figure = plot.corner(tree(values))
    assert figure.axes[0].get_xlabel() == "Al|Si\n.boundary_\nconductance"


def test_corner_refuses():
    with pytest.raises(ValueError, match=r"names holds W\.thickness; the posterior has Al\.thickness"):
        plot.corner(tree(), names=["W.thickness"])
    with pytest.raises(ValueError, match=r"Al\.thickness is 60 in every draw"):
        plot.corner(tree({"Al.thickness": np.full((4, 100), 60.0)}))
    with pytest.raises(ValueError, match=r"Al\|Si\.stiffness has draws that are not finite"):
        plot.corner(tree({"Al|Si.stiffness": np.full((4, 100), np.inf)}), names=["Al|Si.stiffness"])
    with pytest.raises(ValueError, match="got a dict without a group 'posterior'"):
        plot.corner({})


@pytest.fixture(scope="module")
def section_figure() -> Figure:
    return plot.section(
        inv.Stack(
            inv.Layer("Al", thickness=stats.uniform(40, 40)),
            inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0),
            inv.Layer("W", thickness=2.5),
            inv.Layer("Al", thickness=inv.Unknown("d_bottom", stats.norm(30, 2))),
            inv.Interface(boundary_conductance=np.inf, roughness=1.5),
            inv.Substrate("Si", orientation="100"),
        )
    )


def test_section_is_drawn_top_to_bottom(section_figure):
    ax = section_figure.axes[0]
    texts = [t.get_text() for t in ax.texts]
    assert "air or vacuum" in texts
    slabs = ["Al\nprior 46 to 74 nm", "W\n2.5 nm", "Al#2\nd_bottom\nprior 28.0 to 32.0 nm", "Si\nsubstrate"]
    heights = [next(t for t in ax.texts if t.get_text() == text).get_position()[1] for text in slabs]
    assert heights == sorted(heights) and ax.yaxis_inverted()
    assert any(text.startswith("not to scale") for text in texts)


def test_section_labels_interfaces_where_they_are(section_figure):
    notes = {t.get_text(): t.xy[1] for t in section_figure.axes[0].texts if hasattr(t, "xy")}
    assert notes == {
        "compliance\nprior 0.013 to 0.195 nm/GPa\nconductance 100 MW/m²/K": 1,
        "perfect bond\nideal thermal contact\nroughness 1.5 nm": 3,
    }


def test_section_tells_materials_apart_by_hatching(section_figure):
    hatches = {
        p.get_label(): p.get_hatch() for p in section_figure.axes[0].patches if p.get_label()[0] != "_"
    }
    assert hatches["Al"] == hatches["Al#2"]
    assert len({hatches["Al"], hatches["W"], hatches["Si"]}) == 3


def test_section_lines_are_drawn_to_their_full_width(section_figure):
    section_figure.canvas.draw()
    ax = section_figure.axes[0]
    left = min(ax.transData.transform((x, 0))[0] for line in ax.lines for x in line.get_xdata())
    widest = max(line.get_linewidth() for line in ax.lines) * section_figure.dpi / 72
    assert left - widest / 2 > ax.bbox.x0


def test_section_text_stays_on_the_page(section_figure):
    section_figure.canvas.draw()
    page = section_figure.bbox
    for text in section_figure.axes[0].texts:
        box = text.get_window_extent()
        assert box.x0 >= page.x0 and box.x1 <= page.x1 and box.y0 >= page.y0 and box.y1 <= page.y1


def test_section_draws_periods_once_and_leaves_vacuum_blank():
    period = inv.Layer("Al", thickness=5.0), inv.Interface(compliance=0.1, boundary_conductance=1.0)
    ramp = inv.Graded("Al", "W", thickness=30.0, slices=6)
    figure = plot.section(inv.Stack(inv.Repeat(9, *period), ramp, inv.Substrate("vacuum")))
    texts = [t.get_text() for t in figure.axes[0].texts]
    slabs = ["Al\n5 nm\n9 times", "Al-W\n30 nm\nin 6 slices", "vacuum\nfree below"]
    assert [t for t in texts if t in slabs] == slabs
    looks = {p.get_label(): (p.get_facecolor()[0], p.get_hatch()) for p in figure.axes[0].patches}
    assert looks["vacuum"] == (1.0, "")


def test_section_says_mass_and_unevenness():
    film = inv.Layer("Al", thickness=20.0, thickness_spread=0.4)
    figure = plot.section(
        inv.Stack(film, inv.Interface(boundary_conductance=np.inf, areal_mass=2.0), inv.Substrate("W"))
    )
    texts = [t.get_text() for t in figure.axes[0].texts]
    assert "Al\n20 nm\nuneven, rms 0.4 nm" in texts
    assert "perfect bond\nideal thermal contact\nmass 2 mg/m²" in texts


def test_section_refuses_other_objects():
    with pytest.raises(ValueError, match="which has no parts; give a Stack"):
        plot.section("Al/Si")


def test_figures_show_themselves_and_leave_pyplot_alone(fit_figure):
    import matplotlib.pyplot as plt

    before = dict(mpl.rcParams)
    plot.corner(tree())
    plot.section(inv.Stack(inv.Substrate("Si", orientation="100")))
    assert plt.get_fignums() == []
    assert dict(mpl.rcParams) == before
    assert fit_figure._repr_png_().startswith(b"\x89PNG")


def test_figures_are_shown_once_in_a_notebook(fit_figure):
    from IPython.core.formatters import DisplayFormatter

    shown, _ = DisplayFormatter().format(fit_figure)
    assert shown["image/png"].startswith(b"\x89PNG")


def test_power_of_ten_of_an_axis():
    assert decade(np.array([3e-5, -2e-4, np.nan])) == -4
    assert decade(np.array([0.3, 20.0])) == 0
    assert decade(np.zeros(3)) == 0
    assert power_label("residual", "rad", -7) == "residual (10⁻⁷ rad)"
    assert power_label("ratio", "", 0) == "ratio"
