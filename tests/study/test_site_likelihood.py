"""What a site's draws say once the prior is divided out."""

import numpy as np
import pytest
from scipy import stats

from inverse.study.splits.site_likelihood import fit_mixture, site_likelihood

PRIOR = stats.halfcauchy(scale=0.05)
SIXTY = np.linspace(1, 2, 60)


def drawn(log_likelihood, prior, seed=1, count=2000):
    """Posterior draws by weighing a fine set of the prior's quantiles."""
    values = prior.ppf((np.arange(200_000) + 0.5) / 200_000)
    weight = np.exp(log_likelihood(values) - log_likelihood(values).max())
    return np.random.default_rng(seed).choice(values, count, p=weight / weight.sum())


@pytest.mark.parametrize(("centre", "sd"), [(0.15, 0.003), (0.03, 0.01), (0.0, 0.01), (-0.01, 0.01)])
def test_the_likelihood_comes_back_from_the_draws(centre, sd):
    """The upper half of the likelihood within 0.25 of its logarithm; the plateau too where there is one."""

    def known(c):
        return -0.5 * ((c - centre) / sd) ** 2

    table = site_likelihood(drawn(known, PRIOR), PRIOR, logarithmic=True)
    expected = known(np.exp(table.nodes)) - known(max(centre, 0.0))
    high = expected > -1.5
    assert np.abs(table.log - expected)[high].max() < 0.25
    if known(0.0) > -1:
        assert table.left == pytest.approx(known(0.0) - known(max(centre, 0.0)), abs=0.25)
    if centre > 10 * sd:
        assert table.bounded == (True, True)


def test_the_prior_makes_no_difference():
    """Two priors, one likelihood: the tables agree though the posteriors do not."""

    def known(c):
        return -0.5 * ((c - 0.1) / 0.02) ** 2

    narrow = stats.lognorm(0.3, scale=0.07)
    posteriors = [drawn(known, p) for p in (PRIOR, narrow)]
    first, second = (
        site_likelihood(d, p, logarithmic=True).moments(-5, 0)
        for d, p in zip(posteriors, (PRIOR, narrow), strict=True)
    )
    assert np.mean(posteriors[0]) - np.mean(posteriors[1]) > 0.003
    assert first == pytest.approx(second, abs=0.015)


def test_a_prior_as_narrow_as_the_data_is_divided_out():
    """Normal in normal: a likelihood four of the prior's standard deviations away comes back."""
    prior, mean, sd = stats.norm(0.0, 1.0), 4.0, 1.0
    draws = np.random.default_rng(6).normal(mean / 2, np.sqrt(0.5), 4000)
    found = site_likelihood(draws, prior, logarithmic=False).moments(-20, 20)
    # The precision is a difference, 2 - 1, of which 2 is known to sqrt(2 / 4000): its square root to 2.2 %.
    assert found[1] == pytest.approx(sd, abs=3.5 * 0.022)
    assert found[0] == pytest.approx(mean, abs=3.5 * 2 * 0.045)


def test_draws_that_follow_the_prior_say_nothing():
    draws = stats.norm(0, 1).rvs(2000, random_state=np.random.default_rng(8))
    table = site_likelihood(draws, stats.norm(0, 1), logarithmic=False)
    assert np.ptp(table.interpolate(np.linspace(-2, 2, 9))) < 0.35


def test_two_basins_stay_two():
    rng = np.random.default_rng(2)
    draws = np.concatenate([rng.normal(60, 0.2, 300), rng.normal(63, 0.2, 100)])
    table = site_likelihood(draws, stats.uniform(40, 40), logarithmic=True)
    log = table.interpolate(np.log([60.0, 61.5, 63.0]))
    assert log[0] - log[2] == pytest.approx(np.log(3), abs=0.3)
    assert log[1] < log[2] - 5


def test_an_open_bond_bounds_the_compliance_from_below_only():
    table = site_likelihood(drawn(lambda c: -0.5 * (2 / c) ** 2, PRIOR), PRIOR, logarithmic=True)
    assert table.bounded == (True, False)
    assert table.right == pytest.approx(table.log.max(), abs=0.1)


def test_a_cut_normal_is_found_by_its_uncut_moments():
    rng = np.random.default_rng(3)
    y = rng.normal(0.5, 1.0, 40000)
    found = fit_mixture(y[y > 0], np.ones((y > 0).sum()), 0.0)
    best = found.weight.argmax()
    assert found.mean[best] == pytest.approx(0.5, abs=0.05)
    assert found.sd[best] == pytest.approx(1.0, abs=0.03)


def test_a_signed_quantity_is_tabulated_as_it_is():
    draws = np.random.default_rng(4).normal(-0.2, 0.1, 1000)
    assert site_likelihood(draws, stats.norm(0, 10), logarithmic=False).moments(-1, 1) == pytest.approx(
        (draws.mean(), draws.std()), abs=0.01
    )


@pytest.mark.parametrize(
    ("draws", "logarithmic", "message"),
    [
        (np.arange(1.0, 11.0), True, "got 10 draws, 10 of them distinct; at least 50"),
        (np.ones(400), True, "got 400 draws, 1 of them distinct"),
        (
            np.append(SIXTY, np.inf),
            True,
            "1 of 61 draws are not finite.*compliance in place of the stiffness",
        ),
        (np.append(SIXTY, -1.0), True, r"1 of 61 draws are zero or negative.*scale='linear'"),
        (np.append(SIXTY, -1.0), False, "outside the prior's support"),
    ],
)
def test_draws_that_will_not_do(draws, logarithmic, message):
    with pytest.raises(ValueError, match=message):
        site_likelihood(draws, PRIOR, logarithmic=logarithmic)
