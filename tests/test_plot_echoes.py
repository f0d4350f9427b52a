"""Depth-time diagram and split of a trace: what is drawn, where, and in which unit."""

import numpy as np
import pytest

import inverse as inv
from inverse import plot

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)


@pytest.fixture(scope="module")
def stack():
    return inv.Stack(
        inv.Layer("SiO2", thickness=200.0),
        inv.Layer("W", thickness=60.0),
        inv.Substrate("Si", orientation="100"),
    )


@pytest.fixture(scope="module")
def figure(stack):
    return plot.echoes(stack, SETUP, [-2.0, 120.0])


def test_depth_grows_downwards_and_time_to_the_right(figure):
    image = figure.axes[0].images[0]
    assert image.get_extent() == [-2.0, 120.0, 390.0, 0.0]
    assert figure.axes[0].get_ylim() == (390.0, 0.0)
    assert figure.axes[0].get_ylabel() == "depth (nm)" and figure.axes[1].get_xlabel() == "delay (ps)"


def test_zero_is_the_middle_grey(figure):
    low, high = figure.axes[0].images[0].get_clim()
    assert low == -high
    assert figure.axes[0].images[0].get_cmap().name == "gray"


def test_the_pulse_is_where_sound_has_carried_it(figure):
    # Launched at the buried metal, 200 nm down; 20 ps later 20 ps x 5.97 nm/ps higher up, in the glass
    image = figure.axes[0].images[0]
    strain = np.asarray(image.get_array())
    column = int((20.0 + 2.0) / 122.0 * strain.shape[1])
    depth = (np.arange(strain.shape[0]) + 0.5) * 390.0 / strain.shape[0]
    glass = depth < 190.0
    velocity = inv.material("SiO2").velocity
    front = depth[glass][np.abs(strain[glass, column]) > 0.2 * np.abs(strain[glass, column]).max()].min()
    assert front == pytest.approx(200.0 - 20.0 * velocity, abs=8.0)


def test_arrivals_and_media_are_labelled(figure, stack):
    texts = {t.get_text() for t in figure.axes[0].texts}
    assert {"SiO2", "Si"} <= texts
    assert any("½ SiO2" in t for t in texts)
    times = [line.get_xdata()[0] for line in figure.axes[1].lines[1:]]
    assert min(times) == pytest.approx(200.0 / inv.material("SiO2").velocity)


def test_interfaces_are_lines_at_their_depth(figure):
    flat = [line.get_ydata()[0] for line in figure.axes[0].lines if list(line.get_xdata()) == [0, 1]]
    assert flat == [200.0, 260.0]


def test_trace_below_is_the_simulated_one(figure, stack):
    line = figure.axes[1].lines[0]
    expected = inv.simulate(stack, SETUP, line.get_xdata()).reflectance_change.values
    power = np.log10(expected / line.get_ydata())
    np.testing.assert_allclose(power, np.round(power[0]), atol=1e-9)
    assert figure.axes[1].get_ylabel().startswith("ΔR/R (10")


def test_a_bare_substrate_is_drawn_too():
    bare = plot.echoes(inv.Stack(inv.Substrate("Si", orientation="100")), SETUP, [0.0, 20.0])
    assert bare.axes[0].get_ylim()[0] == 160.0 and not bare.axes[0].lines


def test_shares_add_up_and_the_largest_comes_first(stack):
    delay = np.arange(-2, 40, 0.5)
    drawn = plot.shares(stack, SETUP, delay, most=4)
    curves = [ax.lines[1].get_ydata() for ax in drawn.axes]
    np.testing.assert_allclose(curves[0], np.sum(curves[1:], axis=0), atol=1e-9 * np.abs(curves[1]).max())
    peaks = [np.abs(c).max() for c in curves[1:5]]
    assert peaks == sorted(peaks, reverse=True)
    titles = [ax.get_title(loc="left") for ax in drawn.axes]
    assert titles[0] == "all together" and titles[-1].endswith("others") and len(titles) == 6


def test_shares_of_the_phase_have_its_unit(stack):
    drawn = plot.shares(stack, SETUP, np.arange(-2, 40, 0.5), channel="optical_phase")
    assert "rad)" in drawn.get_supylabel()


def test_an_unknown_channel_is_refused(stack):
    with pytest.raises(ValueError, match=r"channel='dR'; give one of reflectance_change, optical_phase"):
        plot.shares(stack, SETUP, np.arange(0, 40, 0.5), channel="dR")
