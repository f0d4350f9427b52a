"""Noise per delay from repeated scans: a known course is recovered, and few scans do not rule the fit by chance."""

import numpy as np
import pytest
from problems import SETUP, bonded
from scipy import special, stats

import inverse as inv
from inverse.inference.problem.scans import moderated, relative_noise

DELAY = np.linspace(-5.0, 60.0, 261)


def course(delay):
    """Noise that grows threefold along the stage."""
    return 1 + 2 * (delay - delay[0]) / (delay[-1] - delay[0])


def standard_errors(seed, scans, sd):
    values = sd * np.random.default_rng(seed).standard_normal((scans, sd.size))
    return values.std(axis=0, ddof=1) / np.sqrt(scans)


@pytest.mark.parametrize("scans", [2, 3, 5, 20])
def test_smooth_course_is_recovered_from_few_scans(scans):
    truth = course(DELAY) / np.median(course(DELAY))
    scatter = standard_errors(scans, scans, course(DELAY))
    found = relative_noise(scatter, np.full(DELAY.size, scans))
    plain = scatter / np.median(scatter)
    error, before = (np.sqrt(np.mean(np.log(r / truth) ** 2)) for r in (found, plain))
    # A mean of 21 log variances, each of variance trigamma((n - 1)/2); at the ends of the trace, of 11.
    expected = np.sqrt(special.polygamma(1, (scans - 1) / 2) / 21) / 2
    assert error < 1.4 * expected
    assert error < 0.6 * before


def test_weights_of_three_scans_lose_little_against_known_weights():
    sd = course(DELAY)
    losses = []
    for seed in range(20):
        scatter = standard_errors(seed, 3, sd)
        for relative in (relative_noise(scatter, np.full(DELAY.size, 3)), scatter):
            weight = 1 / relative**2
            # Variance of a weighted mean with these weights over that with the right ones.
            losses.append((weight**2 * sd**2).sum() / weight.sum() ** 2 * (1 / sd**2).sum())
    moderate, plain = np.median(np.reshape(losses, (-1, 2)), axis=0)
    # Weights wrong by a relative deviation e cost e^2; e = 2 x 0.14 for three scans.
    assert moderate < 1.1
    assert plain > 2


def test_delays_that_are_noisier_than_their_neighbours_stay_so_when_scans_are_many():
    sd = np.where(np.arange(DELAY.size) % 10 == 0, 5.0, 1.0)
    found = relative_noise(standard_errors(1, 30, sd), np.full(DELAY.size, 30))
    assert np.median(found[::10]) == pytest.approx(5.0, rel=0.25)


def test_moderated_variances_are_unbiased_for_variances_of_a_scaled_inverse_chi_squared_law():
    # d0 = 6 degrees of freedom about 2.0, of which 4 more are seen: the posterior mean's own formula with d0 known.
    rng = np.random.default_rng(4)
    true = 2.0 * 6 / rng.chisquare(6, 20000)
    seen = true * rng.chisquare(4, true.size) / 4
    found = moderated(seen, np.full(true.size, 4.0))
    np.testing.assert_allclose(np.median(found / ((6 * 2.0 + 4 * seen) / 10)), 1.0, rtol=0.02)


def test_standard_errors_that_cannot_be_are_refused():
    good = np.ones(30)
    with pytest.raises(ValueError, match="must be finite and not negative, most of them above zero"):
        relative_noise(np.where(np.arange(30) == 3, np.nan, good), None)
    with pytest.raises(ValueError, match="would outweigh all others; give the number of scans"):
        relative_noise(np.where(np.arange(30) == 3, 0.0, good), None)
    with pytest.raises(ValueError, match="need 2 scans or more at each delay; there are 1"):
        relative_noise(good, np.ones(30))


def test_scans_of_a_trace_set_the_noise_of_the_inversion_and_its_weights():
    stack = bonded(thickness=stats.uniform(50, 20), velocity=6.42, compliance=0.02)
    clean = inv.simulate(stack, SETUP, DELAY, values={"Al.thickness": 60.0})["reflectance_change"].values
    level = 0.02 * np.ptp(clean[DELAY > 3])
    rng = np.random.default_rng(2)
    scans = clean + level * course(DELAY) * rng.standard_normal((3, DELAY.size))
    trace = inv.make_trace(DELAY, reflectance_change=scans.mean(axis=0))
    with_scans = trace.assign(
        reflectance_change_scatter=("delay", scans.std(axis=0, ddof=1) / np.sqrt(3)),
        reflectance_change_scans=("delay", np.full(DELAY.size, 3)),
    )
    problem = inv.Inversion(stack, SETUP, with_scans, noise="white")
    (member,) = problem.posterior.members
    noise = member.model.channels[0].noise
    truth = course(noise.delay) / np.median(course(noise.delay))
    assert np.sqrt(np.mean(np.log(noise.relative / truth) ** 2)) < 0.2
    fit = problem.least_squares(starts=3, seed=1)
    white = fit.values[fit.names.index("noise.white")]
    assert white == pytest.approx(level * np.median(course(noise.delay)) / np.sqrt(3), rel=0.15)
    assert abs(fit.values[0] - 60.0) < 3 * fit.sd[0]
