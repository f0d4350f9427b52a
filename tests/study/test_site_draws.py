"""A site's draws by importance: the same posterior as by chains, and chains where weights will not do."""

import numpy as np
import pytest
from aluminium_on_silicon import AL, SETUP, SI, split_trace, stack
from scipy import stats

import inverse as inv
from inverse.inference.mcmc.importance import ImportanceDraws
from inverse.study.batches.site import Effort
from inverse.study.batches.site_draws import site_draws

SITE = {"site": split_trace("A11")}
STIFFNESS = "Al|Si.stiffness"


@pytest.fixture(scope="module")
def recipe():
    """Few unknowns, for speed."""
    film = inv.Layer(AL, thickness=stats.uniform(40, 40), velocity=stats.norm(6.42, 0.10))
    bond = inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0)
    return inv.Recipe(inv.Stack(film, bond, inv.Substrate(SI)), SETUP, time_zero=0.0, noise="white")


@pytest.fixture(scope="module")
def weighted(recipe):
    return inv.batch(recipe, SITE, seed=1, starts=3, workers=0, progress=False)


def test_the_results_say_how_a_site_was_sampled(weighted):
    assert weighted["status"].values[0] == "ok" and weighted["method"].values[0] == "importance"
    assert np.unique(weighted["Al|Si.compliance"].values).size > 250


def test_derived_quantities_have_units_and_priors(weighted):
    assert weighted[STIFFNESS].attrs["units"] == "GPa/nm"
    assert np.allclose(weighted[STIFFNESS], 1 / weighted["Al|Si.compliance"])
    assert "lognorm" in str(weighted["prior"].sel(quantity=STIFFNESS).values[0])


def test_where_weights_cannot_be_trusted_chains_are_run(recipe, weighted, monkeypatch):
    monkeypatch.setattr(ImportanceDraws, "suffice", lambda self, ess: False)
    walked = inv.batch(recipe, SITE, seed=1, starts=3, ensembles=2, max_steps=10, workers=0, progress=False)
    assert walked["method"].values[0] == "mcmc"
    assert set(walked.data_vars) == set(weighted.data_vars)
    assert walked["prior"].sel(quantity="Al.velocity").equals(weighted["prior"].sel(quantity="Al.velocity"))


@pytest.mark.slow
def test_both_methods_give_one_posterior():
    """Quantiles apart by no more than the Monte Carlo errors of 500 and 1,000 effective draws allow.

    A probability p is met to sqrt(p (1 - p) / 500) by either; 14 quantities, three probabilities each.
    """
    recipe = inv.Recipe(stack(AL, inv.Substrate(SI)), SETUP)
    given = {"starts": 3, "workers": 0, "progress": False}
    weighted = inv.batch(recipe, SITE, seed=1, **given)
    walked = inv.batch(recipe, SITE, seed=2, ess=1000, method="mcmc", **given)
    assert walked["status"].values[0] == "ok"
    allowed = stats.norm.isf(0.005 / 42)
    for name in walked["quantity"].values:
        for p in (0.16, 0.5, 0.84):
            edge = float(walked["quantile"].sel(quantity=name, probability=p).values[0])
            share = float((weighted[name] < edge).mean())
            error = np.sqrt(p * (1 - p) * (1 / 400 + 1 / 500 + 1 / 1000))
            assert abs(share - p) < allowed * error, (name, p, share)


def test_points_are_taken_as_often_as_their_weight_says():
    weights = np.array([0.5, 0.25, 0.125, 0.125])
    found = ImportanceDraws(np.arange(4.0)[:, None], weights, 3.0, 0.1, 1.0)
    taken = found.resample_evenly(16, np.random.default_rng(1))[:, 0]
    assert list(np.bincount(taken.astype(int))) == [8, 4, 2, 2]


def test_weights_suffice_by_shape_size_and_spread():
    made = [
        ImportanceDraws(np.zeros((1, 1)), np.ones(1), ess, shape, spread)
        for ess, shape, spread in ((500, 0.7, 0.7), (499, 0.2, 1.0), (900, 0.71, 1.0), (900, 0.2, 0.69))
    ]
    assert [m.suffice(500) for m in made] == [True, False, False, False]


def test_a_deadline_is_looked_at_between_rounds(recipe):
    """In a thread no alarm can ring; the sampler asks."""

    def late():
        raise TimeoutError

    inversion = recipe(SITE["site"], {})
    fit = inversion.least_squares(seed=1, starts=1)
    with pytest.raises(TimeoutError):
        site_draws(inversion, fit, Effort(), 1, late)


def test_a_thickness_beyond_the_end_of_its_prior_is_said_in_the_sites_row():
    film = inv.Layer(AL, thickness=stats.uniform(20, 35), velocity=6.42)
    bond = inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0)
    recipe = inv.Recipe(inv.Stack(film, bond, inv.Substrate(SI)), SETUP, time_zero=0.0, noise="white")
    found = inv.batch(recipe, SITE, seed=1, starts=3, max_steps=100, workers=0, progress=False)
    assert "Al.thickness is pressed against the upper end of its prior, 55 nm" in str(
        found["warning"].values[0]
    )
