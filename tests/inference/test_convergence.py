import arviz as az
import numpy as np
import pytest

from inverse.inference.mcmc.convergence import (
    assess,
    bulk_ess,
    burn_in_steps,
    drift,
    effective_sample_size,
    find_burn_in,
    integrated_time,
    rank_normalise,
    rough_ess,
    rough_rhat,
    settling_step,
    split_rhat,
    tail_ess,
    walker_major,
)


def autoregressive(rng, shape, strength):
    """AR(1) along axis 1 with unit variance: its autocorrelation time is (1 + a) / (1 - a), a closed form."""
    x = rng.standard_normal(shape)
    for step in range(1, shape[1]):
        x[:, step] = strength * x[:, step - 1] + np.sqrt(1.0 - strength**2) * x[:, step]
    return x


def with_repeats(rng, x, share):
    """Repeat values as rejected proposals do."""
    x = x.copy()
    for step in range(1, x.shape[1]):
        stay = rng.random(x[:, step].shape) < share
        x[:, step] = np.where(stay, x[:, step - 1], x[:, step])
    return x


CHAINS = {
    "slow": lambda rng: autoregressive(rng, (4, 3000), 0.95),
    "white": lambda rng: rng.standard_normal((4, 1001)),
    "antithetic": lambda rng: autoregressive(rng, (2, 2000), -0.5),
    "repeats": lambda rng: with_repeats(rng, autoregressive(rng, (4, 2000), 0.8), 0.7),
    "shifted": lambda rng: autoregressive(rng, (4, 500), 0.5) + np.arange(4)[:, None],
    "scaled": lambda rng: autoregressive(rng, (4, 500), 0.5) * np.arange(1, 5)[:, None],
    "heavy tails": lambda rng: rng.standard_cauchy((4, 1000)),
    "short": lambda rng: rng.standard_normal((3, 8)),
}


@pytest.mark.parametrize("kind", CHAINS)
def test_ess_and_rhat_equal_arviz(kind):
    chains = CHAINS[kind](np.random.default_rng(3))
    assert bulk_ess(chains) == pytest.approx(float(az.ess(chains, method="bulk")), rel=1e-3)
    assert tail_ess(chains) == pytest.approx(
        float(az.ess(chains, method="tail", prob=(0.05, 0.95))), rel=1e-3
    )
    assert split_rhat(chains) == pytest.approx(float(az.rhat(chains, method="rank")), rel=1e-3)


def test_ranks_of_ties_are_averaged():
    from scipy.stats import norm, rankdata

    values = np.array([[3.0, 1.0, 1.0, 2.0], [1.0, 5.0, 2.0, 0.0]])
    expected = norm.ppf((rankdata(values, method="average") - 0.375) / 8.25).reshape(values.shape)
    np.testing.assert_allclose(rank_normalise(values), expected, rtol=1e-12)


@pytest.mark.parametrize("strength", [0.0, 0.6, 0.9, 0.97])
def test_ess_is_calibrated_on_autoregressive_walkers(strength):
    """N / tau in closed form; 10 runs of 4 ensembles, each with 32 walkers of 1500 steps."""
    rng = np.random.default_rng(11)
    time = (1.0 + strength) / (1.0 - strength)
    runs = [autoregressive(rng, (4, 1500, 32), strength) for _ in range(10)]
    ratio = np.array([bulk_ess(walker_major(run)) for run in runs]) / (4 * 1500 * 32 / time)
    # Two known biases: walkers cut the correlation off at their ends, a share of about tau / (2 * 1500) of it
    # (2 % at most), and Geyer's sequence keeps positive noise and drops negative (1 % at these lengths).
    assert abs(ratio.mean() - 1.0) < 3.0 * ratio.std(ddof=1) / np.sqrt(10) + time / 3000.0 + 0.01
    assert np.all(np.abs(ratio - 1.0) < 0.15)


@pytest.mark.parametrize("strength", [0.6, 0.9, 0.97])
def test_autocorrelation_time_of_autoregressive_walkers(strength):
    rng = np.random.default_rng(12)
    truth = (1.0 + strength) / (1.0 - strength)
    times = np.array([integrated_time(autoregressive(rng, (4, 1500, 32), strength)) for _ in range(10)])
    # Taking off a mean known from 48000 / tau independent draws lowers a window of 5 tau by 10 tau^2 / 48000.
    bias = 10.0 * truth**2 / 48000.0
    assert abs(times.mean() - truth) < 3.0 * times.std(ddof=1) / np.sqrt(10) + bias
    assert np.all(np.abs(times / truth - 1.0) < 0.25)


def test_step_major_layout_would_overstate_ess():
    """Negative control for the layout: successive draws of different walkers look independent."""
    run = autoregressive(np.random.default_rng(4), (4, 500, 32), 0.95)
    assert bulk_ess(run.reshape(4, -1)) > 10.0 * bulk_ess(walker_major(run))


def test_walker_major_keeps_each_walker_together():
    values = np.arange(2 * 3 * 4).reshape(2, 3, 4)
    np.testing.assert_array_equal(walker_major(values)[0, :6], [0, 4, 8, 1, 5, 9])


def test_stuck_walker_lowers_ess():
    run = autoregressive(np.random.default_rng(5), (4, 500, 32), 0.5)
    stuck = run.copy()
    stuck[0, :, 0] = 6.0
    assert bulk_ess(walker_major(stuck)) < 0.7 * bulk_ess(walker_major(run))


def test_rhat_flags_ensembles_in_different_places_and_of_different_width():
    rng = np.random.default_rng(6)
    same, elsewhere, wider = rng.standard_normal((3, 4, 1000))
    elsewhere[0] += 1.0
    wider[0] *= 3.0
    assert split_rhat(same) < 1.01
    assert split_rhat(elsewhere) > 1.05
    assert split_rhat(wider) > 1.05


def test_constant_and_too_short_chains():
    assert effective_sample_size(np.ones((2, 100))) == 200.0
    assert np.isnan(effective_sample_size(np.ones((2, 3))))
    assert np.isnan(effective_sample_size(np.full((2, 100), np.nan)))
    assert np.isnan(split_rhat(np.ones((2, 100))))
    assert np.isnan(split_rhat(np.ones((2, 3))))
    assert np.isnan(integrated_time(np.ones((2, 50, 4))))


def test_drift_is_in_monte_carlo_deviations():
    """Without a trend the drift is a standard normal variable: mean 0, variance 1 over 200 runs."""
    rng = np.random.default_rng(7)
    runs = [autoregressive(rng, (2, 600, 16), 0.8) for _ in range(200)]
    values = np.array([drift(run, 2 * 600 * 16 / 9.0) for run in runs])
    assert abs(values.mean()) < 3.0 / np.sqrt(200)
    assert abs(values.var() - 1.0) < 3.0 * np.sqrt(2.0 / 200)


def test_drift_sees_a_trend_that_rhat_does_not():
    """Walkers drifting together leave halves of the walkers alike."""
    rng = np.random.default_rng(8)
    run = rng.standard_normal((4, 600, 32)) + np.linspace(0.0, 1.0, 600)[:, None]
    chains = walker_major(run)
    assert split_rhat(chains) < 1.01
    assert drift(run, bulk_ess(chains)) > 5.0


def test_settling_step_finds_the_slowest_ensemble():
    rng = np.random.default_rng(9)
    log_prob = rng.standard_normal((3, 400, 16))
    log_prob[1, :60] -= 50.0
    assert settling_step(log_prob) == pytest.approx(60, abs=1)
    assert burn_in_steps(log_prob, 10.0) == pytest.approx(120, abs=2)
    assert burn_in_steps(log_prob, 40.2) == 201


def test_settling_is_within_two_deviations_of_the_ensembles_median():
    # The median of 16 normal walkers scatters by 0.31: two below is six deviations
    rng = np.random.default_rng(10)
    log_prob = rng.standard_normal((3, 400, 16))
    log_prob[1, :60] -= 2.0
    assert settling_step(log_prob) == pytest.approx(60, abs=2)


def assessed(chain):
    log_prob = -0.5 * np.sum(chain**2, axis=3)
    return assess(chain, log_prob, find_burn_in(chain, log_prob))


def test_rough_numbers_are_close_to_the_full_ones():
    chain = autoregressive(np.random.default_rng(14), (4, 1000, 16, 3), 0.8)
    burn_in = find_burn_in(chain, -0.5 * np.sum(chain**2, axis=3))
    found = assessed(chain)
    assert rough_ess(chain, burn_in) == pytest.approx(found.ess.min(), rel=0.15)
    assert rough_rhat(chain, burn_in) == pytest.approx(found.rhat.max(), abs=0.003)


def test_assess_does_not_settle_when_burn_in_exceeds_half():
    rng = np.random.default_rng(10)
    chain = autoregressive(rng, (2, 100, 8, 2), 0.95)
    found = assessed(chain)
    assert not found.settled
    assert found.burn_in == 50
    assert not found.meets(ess=1.0, rhat=2.0)


def test_assess_judges_the_kept_part_only():
    rng = np.random.default_rng(13)
    chain = rng.standard_normal((4, 400, 16, 2))
    chain[:, :30] += 100.0
    found = assessed(chain)
    assert 60 <= found.burn_in <= 62
    assert found.meets(ess=1000, rhat=1.01)
    assert not found.meets(ess=1e6, rhat=1.01)
    assert not found.meets(ess=1000, rhat=1.000001)
    np.testing.assert_allclose(found.ess, bulk_ess(walker_major(chain[:, found.burn_in :, :, 0])), rtol=0.2)
