"""Savage-Dickey ratio against quadrature for a likelihood that is normal in the compliance."""

import numpy as np
import pytest
import xarray as xr
from fake_results import posterior
from scipy import integrate, stats

from inverse.inference.checks.nested_ratio import savage_dickey

NAME = "Al|Si.compliance"
SCALE = 0.05
WIDTH = 0.01


def draws(centre: float, prior, seed: int, shape=(4, 1000)) -> np.ndarray:
    """Independent draws of prior x normal likelihood."""
    return quantiles(centre, prior, np.random.default_rng(seed).uniform(size=shape))


def quantiles(centre: float, prior, share: np.ndarray) -> np.ndarray:
    """Quantiles of prior x normal likelihood, by inverting the distribution function on a grid."""
    low, high = prior.support()
    x = np.linspace(max(low, centre - 9 * WIDTH), min(high, max(centre, 0) + 9 * WIDTH), 200001)
    mass = np.cumsum(prior.pdf(x) * np.exp(-0.5 * ((x - centre) / WIDTH) ** 2))
    return np.interp(share, mass / mass[-1], x)


def exact(centre: float, prior, at: float = 0.0) -> float:
    def likelihood(x):
        return np.exp(-0.5 * ((x - centre) / WIDTH) ** 2)

    low, high = prior.support()
    ends = max(low, centre - 9 * WIDTH), min(high, max(centre, 0) + 9 * WIDTH)
    evidence = integrate.quad(lambda x: likelihood(x) * prior.pdf(x), *ends, epsabs=0, limit=200)[0]
    return float(likelihood(at) / evidence)


def result(values: np.ndarray, prior) -> xr.DataTree:
    return xr.DataTree.from_dict({"posterior": posterior({NAME: values}, {NAME: prior})})


@pytest.mark.parametrize("centre", [-0.02, 0.0, 0.01, 0.02])
@pytest.mark.parametrize("family", ["halfcauchy", "halfnorm"])
def test_ratio_at_the_edge_agrees_with_quadrature(centre: float, family: str) -> None:
    prior = getattr(stats, family)(scale=SCALE)
    found = savage_dickey(result(draws(centre, prior, 1), prior), NAME)
    assert not found.is_bound
    assert abs(np.log(found.ratio / exact(centre, prior))) < 3 * found.error
    assert found.error < (0.12 if centre < 0.015 else 0.5)


@pytest.mark.parametrize("centre", [0.0, 0.01])
def test_without_sampling_noise_the_ratio_is_exact(centre: float) -> None:
    """Draws at even shares of the posterior, in random order: what is left is the fit's own bias."""
    prior = stats.halfcauchy(scale=SCALE)
    share = np.random.default_rng(4).permutation((np.arange(200_000) + 0.5) / 200_000).reshape(4, -1)
    found = savage_dickey(result(quantiles(centre, prior, share), prior), NAME)
    assert found.ratio == pytest.approx(exact(centre, prior), rel=5e-3)


def test_the_stated_error_is_that_of_repetitions() -> None:
    """Forty sets of draws: standardised errors have mean 0 and deviation 1 within their own errors."""
    prior = stats.halfcauchy(scale=SCALE)
    truth = np.log(exact(0.01, prior))
    found = [savage_dickey(result(draws(0.01, prior, seed), prior), NAME) for seed in range(40)]
    score = np.array([(np.log(f.ratio) - truth) / f.error for f in found])
    assert abs(score.mean()) < 3 / np.sqrt(40)
    assert 0.6 < score.std() < 1.4


def test_the_stated_error_of_one_ensemble_and_of_repeated_draws() -> None:
    """One ensemble has no spread between ensembles: the regression's own error must do, correlation counted in."""
    prior = stats.halfcauchy(scale=SCALE)
    truth = np.log(exact(0.01, prior))
    single = [draws(0.01, prior, seed, shape=(1, 2000)) for seed in range(30)]
    found = [savage_dickey(result(values, prior), NAME) for values in single]
    score = np.array([(np.log(f.ratio) - truth) / f.error for f in found])
    assert 0.6 < score.std() < 1.5
    # Every draw five times in a row: no more is known, and five times as many draws are stated
    repeated = savage_dickey(result(np.repeat(single[0], 5, axis=1), prior), NAME)
    assert repeated.error == pytest.approx(found[0].error, rel=0.25)


def test_dependence_on_the_priors_scale_agrees_with_quadrature_over_two_decades() -> None:
    prior = stats.halfcauchy(scale=SCALE)
    found = savage_dickey(result(draws(0.005, prior, 2), prior), NAME)
    np.testing.assert_allclose(found.scales[[0, 4, 8]], [0.005, 0.05, 0.5])
    truth = [exact(0.005, stats.halfcauchy(scale=s)) for s in found.scales]
    assert np.all(np.abs(np.log(found.ratios / truth)) < 3 * found.errors)
    assert truth[8] / truth[0] > 20
    assert found.ratios[4] == pytest.approx(found.ratio, rel=1e-12)
    assert "as the prior's scale goes from 0.005 to 0.5 (it was 0.05)" in str(found)


def test_a_value_inside_the_prior() -> None:
    prior = stats.norm(0.0, 0.03)
    found = savage_dickey(result(draws(0.01, prior, 3), prior), NAME, at=0.015)
    assert abs(np.log(found.ratio / exact(0.01, prior, 0.015))) < 3 * found.error


def test_far_from_the_value_a_bound_is_given_and_no_number() -> None:
    """Seven deviations from zero: the ratio is 1e-10 and no draw can tell; the bound holds."""
    prior = stats.halfcauchy(scale=SCALE)
    found = savage_dickey(result(draws(0.07, prior, 4), prior), NAME)
    assert found.is_bound
    assert np.isnan(found.error)
    assert exact(0.07, prior) < found.ratio < 0.01
    assert "odds under" in str(found)
    truth = np.array([exact(0.07, stats.halfcauchy(scale=s)) for s in found.scales])
    assert np.all(truth < found.ratios)


def test_bound_by_hand() -> None:
    """No draw of 4000 below 0.5: at most 3 to 5 in 4000 (95 %) of the posterior lie where 0.383 of the prior does."""
    values = np.random.default_rng(2).uniform(0.5, 0.6, size=(4, 1000))
    found = savage_dickey(result(values, stats.halfnorm(scale=1.0)), NAME)
    assert found.is_bound
    assert 3 / 4000 / 0.383 < 1.05 * found.ratio
    assert found.ratio < 5 / 4000 / 0.383


def test_wrong_arguments_are_refused() -> None:
    prior = stats.loguniform(1e-3, 1.0)
    tree = result(draws(0.02, prior, 5), prior)
    with pytest.raises(ValueError, match="has density 0 at 0; the ratio needs a finite one"):
        savage_dickey(tree, NAME)
    with pytest.raises(ValueError, match=r"There is no unknown 'Al\.velocity'; there are Al\|Si\.compliance"):
        savage_dickey(tree, "Al.velocity")
    with pytest.raises(ValueError, match="takes the result of sample_posterior, not dict"):
        savage_dickey({}, NAME)


def test_a_prior_with_two_edges_may_be_narrowed_away_from_all_draws() -> None:
    """uniform(0, 0.2) narrowed to a tenth ends at 0.02, below every draw around 0.1: no ratio is finite there."""
    prior = stats.uniform(0, 0.2)
    found = savage_dickey(result(draws(0.1, prior, 2), prior), NAME, at=0.1)
    assert abs(np.log(found.ratio / exact(0.1, prior, at=0.1))) < 3 * found.error
    assert found.ratios[0] == np.inf and np.isnan(found.errors[0])
    assert np.isfinite(found.ratios[-1]) and "to inf" not in str(found)
