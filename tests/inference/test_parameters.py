"""Maps between standard normal variables and values, against each prior's own distribution function."""

import numpy as np
import pytest
from scipy import stats

from inverse.inference.problem.parameters import parameters

PRIORS = {
    "norm": stats.norm(6.42, 0.1),
    "uniform": stats.uniform(40, 40),
    "lognorm": stats.lognorm(0.7, loc=0.5, scale=3.0),
    "loguniform": stats.loguniform(20, 500),
    "halfcauchy": stats.halfcauchy(loc=0.1, scale=0.05),
    "halfnorm": stats.halfnorm(loc=0.2, scale=0.3),
    "gamma": stats.gamma(2.5, scale=4.0),
    "truncnorm": stats.truncnorm(-1.0, 2.0, loc=3.0, scale=0.5),
}
Z = np.array([-4.0, -1.7, -0.3, 0.0, 0.2, 1.1, 2.9, 5.0])


@pytest.mark.parametrize("family", PRIORS)
def test_values_are_the_quantiles_of_the_prior(family):
    prior = PRIORS[family]
    found = parameters({"x": prior}).to_values(Z[:, None])[:, 0]
    np.testing.assert_allclose(found, prior.ppf(stats.norm.cdf(Z)), rtol=1e-7)
    np.testing.assert_allclose(found[Z > 0], prior.isf(stats.norm.sf(Z[Z > 0])), rtol=1e-10)


@pytest.mark.parametrize("family", PRIORS)
def test_map_and_its_inverse(family):
    p = parameters({"x": PRIORS[family]})
    np.testing.assert_allclose(p.to_z(p.to_values(Z[:, None]))[:, 0], Z, rtol=1e-7, atol=1e-9)


def test_half_cauchy_keeps_its_heavy_tail():
    # P(x > X) = 2 / pi arctan(scale / X), from the density 2 / (pi scale (1 + (x / scale)^2))
    prior = stats.halfcauchy(scale=0.05)
    z = np.array([3.0, 6.0, 8.0])
    found = parameters({"x": prior}).to_values(z[:, None])[:, 0]
    np.testing.assert_allclose(2 / np.pi * np.arctan(0.05 / found), stats.norm.sf(z), rtol=1e-9)


def test_order_names_and_densities():
    p = parameters(PRIORS)
    values = p.to_values(np.tile(Z[:, None], len(PRIORS)))
    assert p.names == tuple(PRIORS)
    expected = sum(prior.logpdf(values[:, i]) for i, prior in enumerate(PRIORS.values()))
    np.testing.assert_allclose(p.log_prior(values), expected, rtol=1e-12)
    np.testing.assert_array_equal(p.named(values)["gamma"], values[:, 6])


def test_outside_the_support_is_infinite():
    p = parameters({"x": stats.uniform(40, 40)})
    np.testing.assert_array_equal(p.to_z(np.array([[39.0], [81.0]]))[:, 0], [-np.inf, np.inf])
