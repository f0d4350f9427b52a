"""Ranks, binomial tails and simultaneous bands, against closed forms and plain simulation."""

import numpy as np
import pytest
from scipy import stats

from inverse.study.coverage.ranks import (
    CELLS,
    DRAWS,
    checked_levels,
    counts,
    rank_of,
    simultaneous_bands,
    tail_probability,
)

LEVELS = (0.5, 0.68, 0.9, 0.95)


def test_rank_counts_the_draws_below_and_breaks_ties_evenly():
    rng = np.random.default_rng(1)
    assert rank_of(0.35, np.array([0.1, 0.2, 0.3, 0.4]), rng) == 3
    tied = [rank_of(1.0, np.array([0.0, 1.0, 1.0, 2.0]), rng) for _ in range(3000)]
    # 1, 2 or 3, a third each; 5 standard errors of a share are 4.3 %
    assert np.abs(np.bincount(tied, minlength=4)[1:] / 3000 - 1 / 3).max() < 5 * np.sqrt(2 / 9 / 3000)


@pytest.mark.parametrize("level", LEVELS)
def test_central_intervals_have_exactly_their_probability_under_uniform_ranks(level):
    every_rank_once = np.ones((1, CELLS), dtype=int)
    assert counts(every_rank_once, (level,))[0, -1] == pytest.approx(level * CELLS, abs=1e-9)


def test_central_intervals_are_central():
    # with 200 ranks the 90 % interval leaves out 0 ... 9 and 190 ... 199
    inside = [counts(np.eye(CELLS, dtype=int)[[r]], (0.9,))[0, -1] for r in range(CELLS)]
    assert np.flatnonzero(inside).tolist() == list(range(10, 190))


def test_ranks_below_are_counted_strictly():
    histogram = np.bincount([0, 3, 3, 199], minlength=CELLS)[None]
    below = counts(histogram, (0.5,))[0, :DRAWS]
    assert (below[0], below[2], below[3], below[-1]) == (1, 1, 3, 3)


def test_tail_probability_is_twice_the_smaller_binomial_tail():
    found, n, p = np.arange(31), 30, 0.68
    expected = np.minimum(1, 2 * np.minimum(stats.binom.cdf(found, n, p), stats.binom.sf(found - 1, n, p)))
    np.testing.assert_allclose(tail_probability(found, n, np.full(31, p)), expected, rtol=1e-12)


@pytest.mark.parametrize("replicates", [30, 200])
def test_uniform_ranks_leave_the_bands_as_rarely_as_declared(replicates):
    bands = simultaneous_bands(replicates, LEVELS, 0.1)
    rng = np.random.default_rng(5)
    trials = 3000
    left = sum(not bands.admits(rng.integers(0, CELLS, replicates)) for _ in range(trials))
    # binomial, five standard errors; discreteness may only make it rarer
    assert 0.04 < left / trials < 0.1 + 5 * np.sqrt(0.09 / trials)


def test_bands_widen_as_the_failure_budget_shrinks():
    loose, strict = (simultaneous_bands(200, LEVELS, failure) for failure in (0.1, 0.001))
    assert (strict.inside[:, 0] < loose.inside[:, 0]).all()
    assert (strict.inside[:3, 1] > loose.inside[:3, 1]).all()


@pytest.mark.parametrize("levels", [(), (0.0,), (1.0,), (0.683,), (50,)])
def test_levels_that_are_no_whole_per_cent_are_refused(levels):
    with pytest.raises(ValueError, match="give whole per cents between"):
        checked_levels(levels)


def test_levels_come_in_order():
    assert checked_levels([0.9, 0.5]) == (0.5, 0.9)


def test_bands_need_replicates_and_a_probability():
    with pytest.raises(ValueError, match="give 1 or more, and a probability"):
        simultaneous_bands(0, LEVELS, 0.01)
