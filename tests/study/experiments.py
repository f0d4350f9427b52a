"""Invented experiments at the level of splits, wafers and sites."""

from __future__ import annotations

import numpy as np

from inverse.study.splits.decisions import decided, pairs_of, tail_probability
from inverse.study.splits.hierarchy import sample_normal_hierarchy
from inverse.study.splits.normal_sites import NormalWafer
from inverse.study.splits.scatter import SplitPriors


def normal_experiment(rng, centres, wafers=4, sites=2, between=0.1, within=0.03, noise=0.02):
    """Wafers of each split, with normal site likelihoods."""
    out = []
    for centre in centres:
        middle = centre + between * rng.standard_normal(wafers)
        seen = middle[:, None] + np.hypot(within, noise) * rng.standard_normal((wafers, sites))
        out.append([NormalWafer(row, np.full(sites, noise)) for row in seen])
    return out


def decisions(splits, seed, level=0.05, draws=4000):
    """Which pairs of splits the library calls different."""
    centre = sample_normal_hierarchy(splits, SplitPriors(), seed=seed, draws=draws).centre
    tails = [tail_probability(centre[:, a] - centre[:, b]) for a, b in pairs_of(len(splits))]
    return decided(tails, len(splits), level)


def site_draws(rng, stiffness, relative=0.02, count=400):
    """Draws of a compliance, normal about a value that is itself that far from the truth, under a wide prior."""
    compliance = 1 / stiffness
    seen = compliance * (1 + relative * rng.standard_normal())
    return np.abs(seen + relative * compliance * rng.standard_normal(count))


def monte_carlo_error(draws):
    """Standard errors of mean and of standard deviation of independent draws."""
    spread = draws.std(axis=0)
    fourth = ((draws - draws.mean(axis=0)) ** 4).mean(axis=0)
    return spread / np.sqrt(len(draws)), np.sqrt((fourth - spread**4) / len(draws)) / (2 * spread)
