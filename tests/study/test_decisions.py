"""Deciding several pairs at once."""

import numpy as np
import pytest
from experiments import decisions, normal_experiment
from scipy import stats

from inverse.study.splits.decisions import decided, levels, most_equal_pairs, tail_probability


def test_three_splits_are_judged_at_a_third_and_then_in_full():
    """Once one of three pairs differs, only one of the other two can still be equal."""
    assert levels(3, 0.06) == pytest.approx([0.02, 0.06, 0.06])


def test_five_splits_have_the_equal_pairs_that_partitions_allow():
    """Partitions of five: 10, 6, 4, 3, 2, 1 or 0 equal pairs."""
    assert [most_equal_pairs(5, done) for done in range(10)] == [10, 6, 6, 6, 6, 4, 4, 3, 2, 1]


def test_a_pair_that_fails_ends_the_row():
    assert decided([0.03, 0.04, 0.5], 3, 0.05) == [False, False, False]
    assert decided([0.001, 0.04, 0.5], 3, 0.05) == [True, True, False]


def test_tail_probability_counts_both_sides_and_ties():
    assert tail_probability(np.zeros(1000)) == pytest.approx(1.0)
    assert tail_probability(np.ones(998)) == pytest.approx(2 / 1000)


def share(count, centres, **options):
    rng = np.random.default_rng(7)
    return np.mean(
        [decisions(normal_experiment(rng, centres, **options), seed) for seed in range(count)], axis=0
    )


def any_share(count, splits_of):
    rng = np.random.default_rng(7)
    return np.mean([any(decisions(splits_of(rng), seed)) for seed in range(count)])


@pytest.mark.slow
def test_familywise_error_over_a_thousand_experiments_when_nothing_differs():
    found = any_share(1000, lambda rng: normal_experiment(rng, [0.0, 0.0, 0.0]))
    low, high = stats.binom(1000, 0.05).ppf([0.005, 0.995]) / 1000
    # Conservative is allowed, deaf is not: a rule at half the stated level would still pass, one at a fifth not.
    assert stats.binom(1000, 0.01).ppf(0.995) / 1000 < found < high
    assert low < high


@pytest.mark.slow
def test_familywise_error_when_one_split_differs():
    found = share(1000, [0.0, 0.0, 1.2])
    assert found[0] < stats.binom(1000, 0.05).ppf(0.995) / 1000
    assert found[1:] == pytest.approx([1.0, 1.0])


@pytest.mark.slow
def test_power_when_a_split_is_a_quarter_stiffer():
    """By hand about 0.75 at 4 wafers and 10 % scatter: a t-test with 6 degrees of freedom and
    log(1.25) / (0.1 sqrt(2 / 4)) = 3.16 standard errors between the centres."""
    by_hand = stats.nct(6, 3.156).sf(stats.t(6).ppf(0.975))
    assert by_hand == pytest.approx(0.75, abs=0.02)
    found = share(1000, [0.0, np.log(1.25), np.log(20 / 6)])[0]
    assert found == pytest.approx(by_hand, abs=0.06)


@pytest.mark.slow
def test_sites_taken_for_wafers_err_too_often():
    """Negative control: two sites of a wafer are not two wafers."""

    def apart(rng):
        made = normal_experiment(rng, [0.0, 0.0, 0.0])
        return [
            [type(w)(w.mean[k : k + 1], w.sd[k : k + 1]) for w in split for k in range(2)] for split in made
        ]

    assert any_share(300, apart) > stats.binom(300, 0.05).ppf(0.999) / 300
