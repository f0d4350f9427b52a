"""The inverse transform against known pairs, each met by the Gaussian cross-correlation of pump and probe.

The method leaves 1e-6 of what leaves the window to wrap around into it, and the splines and the cut spectrum
as much again: 2.5e-6 of the peak is allowed.
"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from records import one
from scipy import special

from inverse.response.inverse_laplace import powers, time_grid, to_delays

RMS = 0.3
EVEN = np.arange(-4, 120, 0.1)


def off_grid(seed=3):
    rng = np.random.default_rng(seed)
    return np.sort(rng.uniform(-4, 120, 700))


def gaussian(t, rms=RMS):
    return np.exp(-((t / rms) ** 2) / 2) / (np.sqrt(2 * np.pi) * rms)


def step(t, rms=RMS):
    return special.ndtr(t / rms)


def decay(t, rate, rms=RMS):
    """exp(-rate t) from t = 0 on, met by the Gaussian."""
    return np.exp((rate * rms) ** 2 / 2 - rate * t) * special.ndtr(t / rms - rate * rms)


def ringing(t, rate, w, rms=RMS):
    """exp(-rate t) cos(w t) from t = 0 on, met by the Gaussian; by quadrature over the pulse."""
    x, weight = np.polynomial.legendre.leggauss(400)
    # f(t - x) for x from -6 rms to min(t, 6 rms): the start of the ringing cuts the interval
    top = np.clip(t, -6 * rms, 6 * rms)[:, None]
    half = (top + 6 * rms) / 2
    delay = half * (x + 1) - 6 * rms
    since = t[:, None] - delay
    return (half * weight * gaussian(delay, rms) * np.exp(-rate * since) * np.cos(w * since)).sum(axis=1)


def check(found, expected):
    np.testing.assert_allclose(found, expected, rtol=0, atol=2.5e-6 * np.abs(expected).max())


def back(delay, spectrum, at=0.0, rms=RMS, stretch=1.5):
    grid = time_grid(delay, rms, earliest=0.0, stretch=stretch)
    shifted = spectrum(grid.s) * grid.pulse * powers(grid, one(at - grid.origin))
    return to_delays(grid, shifted[:, None])[0, 0]


PAIRS = {
    "Gaussian": (lambda s: np.ones_like(s), gaussian),
    "step": (lambda s: 1 / s, step),
    "fast decay": (lambda s: 1 / (s + 2.0), lambda t: decay(t, 2.0)),
    "slow decay": (lambda s: 1 / (s + 0.01), lambda t: decay(t, 0.01)),
    "ringing": (lambda s: (s + 0.02) / ((s + 0.02) ** 2 + 4), lambda t: ringing(t, 0.02, 2.0)),
}


@pytest.mark.parametrize("delay", [EVEN, off_grid()], ids=["even", "off the grid"])
@pytest.mark.parametrize("name", PAIRS)
def test_known_pairs_come_back(name, delay):
    spectrum, expected = PAIRS[name]
    check(back(delay, spectrum), expected(delay))


@pytest.mark.parametrize("stretch", [1.3, 1.5, 2.0])
@pytest.mark.parametrize("name", PAIRS)
def test_window_length_does_not_matter(name, stretch):
    spectrum, expected = PAIRS[name]
    delay = off_grid(4)
    check(back(delay, spectrum, stretch=stretch), expected(delay))


@pytest.mark.parametrize("rms", [0.05, 0.3, 1.5])
@pytest.mark.parametrize("last", [1.0, 30.0, 900.0])
def test_any_pulse_and_trace_length(rms, last):
    delay = np.linspace(-2, last, 301)
    check(back(delay, lambda s: 1 / (s + 0.05), rms=rms), decay(delay, 0.05, rms))


@given(at=st.floats(-3.5, 100.0))
def test_shift_of_the_origin(at):
    check(back(EVEN, lambda s: 1 / (s + 0.1), at=at), decay(EVEN - at, 0.1))


def test_nothing_comes_before_the_pulse():
    delay = np.linspace(-20, 200, 2000)
    for spectrum, _ in PAIRS.values():
        found = back(delay, spectrum)
        assert np.abs(found[delay < -7 * RMS]).max() < 2e-6 * np.abs(found).max()


def test_order_of_the_delays_does_not_matter():
    delay = off_grid(6)
    shuffle = np.random.default_rng(1).permutation(delay.size)
    spectrum, _ = PAIRS["step"]
    np.testing.assert_allclose(back(delay[shuffle], spectrum), back(delay, spectrum)[shuffle], rtol=1e-12)


def test_transform_is_linear_and_batched():
    grid = time_grid(EVEN, RMS, earliest=0.0)
    rng = np.random.default_rng(2)
    spectra = np.exp(-np.linspace(0, 5, grid.s.shape[1])) * rng.normal(size=(3, 2, 1))
    together = to_delays(grid, spectra.astype(complex))
    assert together.shape == (3, 2, EVEN.size)
    single = to_delays(grid, (spectra[:1, :1] / spectra[0, 0, 0]).astype(complex))
    np.testing.assert_allclose(together, spectra[..., :1] * single, rtol=1e-9, atol=1e-12)


@given(t=st.floats(-50.0, 400.0))
def test_powers_are_exponentials(t):
    grid = time_grid(EVEN, RMS, earliest=0.0)
    expected = np.exp(-grid.s * t)
    np.testing.assert_allclose(powers(grid, one(t)), expected, rtol=1e-10)


def test_transform_of_the_pulse_is_the_gaussians():
    # Two-sided transform of a Gaussian of unit area: exp((s rms)^2 / 2)
    grid = time_grid(EVEN, RMS, earliest=0.0)
    x, weight = np.polynomial.legendre.leggauss(300)
    t = 8 * RMS * x
    numerical = (8 * RMS * weight * gaussian(t)) @ np.exp(-t[:, None] * grid.s)
    np.testing.assert_allclose(grid.pulse[0], numerical, atol=1e-12)


def test_delay_that_is_not_finite_is_refused():
    with pytest.raises(ValueError, match="delay is not finite; remove such points"):
        time_grid(np.array([0.0, np.nan]), RMS, earliest=0.0)
