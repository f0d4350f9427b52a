"""Intervals under Student's t noise hold the truth as often as they say, with outliers and without, and are narrow."""

import numpy as np
import pytest
from linear import linear_problem

from inverse.inference.mcmc.draws import draw_posterior
from inverse.inference.minima.least_squares import Fit, basin_distance, ranked, refine
from inverse.inference.problem.noise import Noise, noise_priors

DELAY = np.arange(1.0, 81.0)
SHAPES = np.stack(
    [
        np.exp(-DELAY / 40),
        np.exp(-DELAY / 12) * np.sin(DELAY / 3),
        np.exp(-DELAY / 25) * np.cos(DELAY / 5),
        np.zeros(DELAY.size),
    ]
)
WHITE, DRIFT, TIME = 0.2, 0.2, 6.0
REPLICATES = 50
STARTS = np.array([[a, b, 0.0, 0.0, 0.0] for a in np.linspace(-2, 2, 9) for b in np.linspace(-2, 2, 9)])


def draw(rng, outliers):
    """Draw both unknowns and a trace with drift; if asked, six in a hundred delays are ten times as noisy."""
    truth = rng.standard_normal(2)
    path = Noise("correlated", DELAY, np.ones(DELAY.size)).draw(
        rng, {"white": 0.0, "discrepancy": DRIFT, "correlation_time": TIME}
    )
    white = WHITE * rng.standard_normal(DELAY.size)
    white *= np.where(rng.random(DELAY.size) < 0.06, 10.0, 1.0) if outliers else 1.0
    return truth, SHAPES[0] + truth @ SHAPES[1:3] + path + white


def sampled(data, model, seed):
    """Draw both unknowns from the posterior, shape (draws, 2), the noise unknown with its default priors."""
    level = 1.4826 * np.median(np.abs(np.diff(data))) / np.sqrt(2)
    priors = noise_priors(model, level, DELAY)
    problem = linear_problem(DELAY, SHAPES, data, priors, model=model, width=3.0)
    problem.fingerprint = lambda: f"{model} {seed}"
    fit = Fit(problem, problem.names, minima(problem.posterior), seed)
    found = draw_posterior(problem, fit, seed=seed, ess=200)
    assert found.converged, found.message
    return found.values[:, :2]


def minima(posterior):
    """Distinct minima from the two best of a grid, far apart: the amplitude may have either sign."""
    physical = np.array([True, True, False, False, False])
    order = np.argsort(-posterior(STARTS))
    far = np.linalg.norm(STARTS - STARTS[order[0]], axis=1)[order] > 1.5
    basins = []
    for start in STARTS[[order[0], order[far][0]]]:
        basin = refine(posterior, physical, start)
        if all(basin_distance(basin.z, other) > 1.0 for other in basins):
            basins.append(basin)
    return ranked(basins)


def study(model, outliers):
    """Return the posterior distribution function at the truth and the deviations, each of shape (replicates, 2)."""
    levels, deviations = [], []
    for replicate in range(REPLICATES):
        truth, data = draw(np.random.default_rng([7, replicate]), outliers)
        draws = sampled(data, model, replicate)
        levels.append((draws < truth).mean(axis=0))
        deviations.append(draws.std(axis=0))
    return np.array(levels), np.array(deviations)


def held(levels, mass):
    return float((np.abs(levels - 0.5) < mass / 2).mean())


@pytest.mark.slow
@pytest.mark.parametrize("outliers", [False, True], ids=["clean", "outliers"])
def test_intervals_hold_the_truth_as_often_as_they_say(outliers):
    levels, deviations = study("student", outliers)
    for mass in (0.5, 0.68, 0.9, 0.95):
        # Three standard deviations of a binomial share; false alarms in the 8 comparisons: 2 %.
        band = 3 * np.sqrt(mass * (1 - mass) / levels.size)
        assert held(levels, mass) == pytest.approx(mass, abs=band), mass
    plain = np.median(study("correlated", outliers)[1], axis=0)
    robust = np.median(deviations, axis=0)
    # Admitting outliers costs little where there are none, and pays where there are.
    assert (robust < (0.85 if outliers else 1.1) * plain).all()
