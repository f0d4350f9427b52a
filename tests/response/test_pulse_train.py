"""Heat that earlier pulses leave, against sums of single pulses and closed forms of conduction."""

import numpy as np
import pytest
from build import crystal, metal, one, stacked
from scipy.integrate import quad

import inverse as inv
from inverse.response.basis import basis, columns
from inverse.response.inverse_laplace import time_grid
from inverse.response.pulse_train import PulseTrain, pulse_train, residual

DELAY = np.linspace(-5.0, 800.0, 30)
WAVELENGTHS = (400.0, 800.0)
PERIOD = 12500.0  # 80 MHz


def polylogarithm(z):
    """Li_1/2(z) = (1 / sqrt(pi)) * integral of x^(-1/2) / (e^x / z - 1) over x > 0, with x = u^2."""

    def integrand(u, part):
        return getattr(2 / (np.exp(u * u) / z - 1), part) / np.sqrt(np.pi)

    return complex(*(quad(integrand, 0, 8, args=(part,), limit=400)[0] for part in ("real", "imag")))


def single(sample, delay, layout, rms=31.25):
    return basis(sample, WAVELENGTHS, time_grid(np.asarray(delay, float), rms, 0.0), one(0.0), layout, 1)[0]


@pytest.mark.parametrize("share", [0.0125, 0.13, 0.37])
def test_an_opaque_half_space_sums_to_a_polylogarithm(share):
    # Heat of a thin skin: T = c / sqrt(t), so R(0) = c / sqrt(T) * sum of exp(-i w m T) / sqrt(m), in the thermo-optic
    # columns; what is left is the skin's (8 nm) and the trace's own age, both under (skin)^2 / (D T) = 1e-4
    sample, layout = stacked(metal()), columns(["metal"])
    train = PulseTrain(PERIOD, 2 * np.pi * share / PERIOD, "in-phase")
    found = residual(sample, WAVELENGTHS, np.array([0.0]), train, one(0.0), layout, 1)[0, :, 0]
    late = single(sample, [6000.0], layout)[:, 0]
    series = polylogarithm(np.exp(-2j * np.pi * share))
    for column in (2, 3):
        expected = late[column] * np.sqrt(6000.0 / PERIOD) * series
        assert abs(found[column] / expected - 1) < 1e-3


def test_every_function_is_the_sum_of_its_single_pulses():
    # A film on an insulator that is cooled from above by a liquid would still go as t^-1/2; so add 400 pulses and
    # average the last two partial sums, which alternate at this modulation
    sample = stacked(metal(60.0), crystal(), compliance=[0.02], resistance=[1e4])
    layout = columns(["metal", "crystal"])
    train = PulseTrain(PERIOD, np.pi / PERIOD, "in-phase")
    found = residual(sample, WAVELENGTHS, DELAY, train, one(0.0), layout, 1)[0]
    pulses = np.arange(1, 401)
    late = single(sample, (DELAY + PERIOD * pulses[:, None]).ravel(), layout, rms=400.0)
    late = late.reshape(len(late), len(pulses), len(DELAY))
    signs = np.where(pulses % 2, -1.0, 1.0)[None, :, None]
    partial = np.cumsum(late * signs, axis=1)
    expected = (partial[:, -3] + 2 * partial[:, -2] + partial[:, -1]) / 4
    scale = np.abs(expected).max(axis=1, keepdims=True)
    assert (
        np.abs(found.imag).max() < 1e-5 * np.abs(found.real).max()
    )  # at half the rate there is no quadrature
    np.testing.assert_allclose(found.real / scale, expected / scale, atol=5e-3)


def test_time_zero_shifts_what_is_left_too():
    sample, layout = stacked(metal()), columns(["metal"])
    train = PulseTrain(PERIOD, 2 * np.pi * 0.1 / PERIOD, "in-phase")
    early = residual(sample, WAVELENGTHS, DELAY, train, one(0.0), layout, 1)
    late = residual(sample, WAVELENGTHS, DELAY + 20.0, train, one(20.0), layout, 1)
    np.testing.assert_allclose(late, early, atol=1e-6 * np.abs(early).max())


def setup(**bench):
    return inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3, **bench)


TRAIN = {"repetition_rate": 80.0, "modulation_frequency": 5.0}
STACK = inv.Stack(
    inv.Layer("Al", thickness=60.0, dn_dT=1e-4 + 1e-4j),
    inv.Interface(boundary_conductance=100.0),
    inv.Substrate("Si", orientation="100"),
)


def test_channels_of_a_trace():
    delay = np.arange(-5.0, 60.0, 0.5)
    plain, x, y = (
        inv.simulate(STACK, setup(**TRAIN, lockin_channel=c), delay).reflectance_change.values
        for c in (None, "in-phase", "out-of-phase")
    )
    # Before the pulse only the heat of earlier ones is there; in phase it is warm, out of phase it lags behind
    before = delay < -2
    assert np.abs(plain[before]).max() < 1e-6 * np.abs(plain).max()
    assert np.sign(x[before].mean()) == np.sign(plain[-1]) and np.sign(y[before].mean()) == -np.sign(
        plain[-1]
    )
    # The channels differ from one pulse's trace by something smooth: no echo is in it
    for smooth in (x - plain, y):
        assert np.abs(np.diff(smooth, 2)).max() < 1e-4 * np.abs(plain).max()


@pytest.mark.parametrize(("frequency", "change"), [(0.5, 5e-4), (10.0, 8e-3)])
def test_a_ratio_is_the_in_phase_channel_over_a_constant(frequency, change):
    # What divides the laser's drift out adds nothing of its own to the trace: a fit of the ratio is one of the channel
    delay = np.arange(-5.0, 100.0, 0.5)
    train = {"repetition_rate": 80.0, "modulation_frequency": frequency}
    x, y = (
        inv.simulate(STACK, setup(**train, lockin_channel=c), delay).reflectance_change.values
        for c in ("in-phase", "out-of-phase")
    )
    assert 1e-5 < np.ptp(y) / np.abs(y).mean() < change
    constant = x / y.mean()
    assert np.abs(x / y - constant).max() < change * np.ptp(constant)


def test_shares_still_add_up():
    found = inv.simulate(
        STACK, setup(**TRAIN, lockin_channel="in-phase"), np.arange(-5.0, 60.0, 0.5), shares=True
    )
    assert "earlier pulses" in found.part.values
    np.testing.assert_allclose(
        found.reflectance_change_share.sum("part"), found.reflectance_change, atol=1e-15
    )


def test_a_train_is_asked_for():
    assert pulse_train(setup(**TRAIN)) is None
    train = pulse_train(setup(**TRAIN, lockin_channel="out-of-phase"))
    assert train.period == 12500.0 and train.modulation == pytest.approx(2 * np.pi * 5e-6)


@pytest.mark.parametrize(
    ("bench", "message"),
    [
        ({"lockin_channel": "X", **TRAIN}, r"lockin_channel = 'X'; give one of in-phase, out-of-phase"),
        ({"lockin_channel": "in-phase"}, "needs a repetition_rate and a modulation_frequency"),
        (
            {"lockin_channel": "in-phase", "repetition_rate": 80.0, "modulation_frequency": 50.0},
            "between 0 and half of it",
        ),
    ],
)
def test_a_train_without_its_frequencies_is_refused(bench, message):
    with pytest.raises(ValueError, match=message):
        setup(**bench)


def test_a_trace_longer_than_the_period_is_refused():
    train = PulseTrain(700.0, 1e-3, "in-phase")
    with pytest.raises(ValueError, match="later than the next pulse of the train"):
        residual(stacked(metal()), WAVELENGTHS, DELAY, train, one(0.0), columns(["metal"]), 1)
