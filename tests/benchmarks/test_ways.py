"""The library against plain code of the same equations: the same numbers, and how much sooner."""

import jacobian
import numpy as np
import pytest
import ways
from plain import density

pytestmark = [pytest.mark.slow, pytest.mark.benchmark]


@pytest.fixture(scope="module")
def comparison():
    found = ways.compare(steps=700)
    print(f"\n{found.run}\n{found.rate}\n{found.steps}\n{found.seconds}\nplain over library {found.gain:.0f}")
    return found


@pytest.fixture(scope="module")
def points():
    inversion = jacobian.example()
    best = inversion.least_squares(starts=2, seed=1).best
    kicks = np.random.default_rng(1).standard_normal((8, 9))
    z = best.z + 0.5 * kicks @ np.linalg.cholesky(best.covariance_z).T
    return inversion, z, inversion.posterior.parameters.to_values(z)


def test_plain_code_gives_the_library_s_likelihood(points):
    inversion, _, values = points
    problem = ways.plain_problem(inversion)
    plain = [density.log_likelihood_eliminated(problem, x) for x in values[:, ways.order(inversion)]]
    # The windows differ in length, and with them what wraps around: 1e-6 of what is left at their ends.
    np.testing.assert_allclose(plain, inversion.posterior.log_likelihood(values), rtol=0, atol=1e-3)


def test_plain_priors_are_the_library_s_but_for_a_constant(points):
    inversion, _, values = points
    problem = ways.plain_problem(inversion)
    plain = [density.log_prior(problem, x) for x in values[:, ways.order(inversion)]]
    offset = inversion.posterior.parameters.log_prior(values) - plain
    np.testing.assert_allclose(offset, offset[0], rtol=0, atol=1e-9)


def test_sampled_amplitudes_have_the_likelihood_whose_integral_is_the_eliminated_one(points):
    inversion, z, values = points
    problem = ways.plain_problem(inversion)
    (member,) = inversion.posterior.members
    found = member.model.eliminated(member.local(inversion.posterior.parameters.named(values)))
    batched = ways.amplitudes_sampled(inversion)(np.concatenate([z, found.mean], axis=1))
    for i, x in enumerate(values[:, ways.order(inversion)]):
        # At the conditional mean: p(y, c) = p(y) p(c | y), a Gaussian at its peak. Both without (2 pi)^(-5).
        peak = np.log(np.diag(found.factor[i])).sum()
        joint = density.log_likelihood_of_all(problem, x, found.mean[i]) - 0.5 * found.mean[i] @ found.mean[i]
        assert joint - peak == pytest.approx(density.log_likelihood_eliminated(problem, x), abs=1e-3)
        assert joint - 0.5 * z[i] @ z[i] == pytest.approx(batched[i], abs=1e-3)


def test_the_library_is_thirty_times_sooner_at_a_thousand_effective_samples(comparison):
    assert comparison.run.sample_size >= 1000
    assert comparison.gain > 30


def test_elimination_batches_and_moves_each_bring_their_part(comparison):
    t = comparison.seconds
    assert t["plain"] > 1.3 * t["plain, eliminates"]
    assert t["library, one by one, stretch"] > 3 * t["library, batches, stretch"]
    assert t["library, batches, stretch"] > 4 * t["library, own moves"]
    assert t["plain, eliminates"] > 10 * t["library, own moves"]
