import numpy as np
import pytest

from inverse.inference.mcmc.history import History

STEP_BYTES = 8 * 2 * 3 * (1 + 1)


def numbered(first, last):
    """Steps first..last, each holding its own number."""
    steps = np.arange(first, last + 1, dtype=float)
    log_prob = np.broadcast_to(steps[None, :, None], (2, steps.size, 3))
    return log_prob[..., None], log_prob


def filled(pieces, budget):
    history, first = History.empty(2, 3, 1, budget), 1
    for piece in pieces:
        history = history.extended(*numbered(first, first + piece - 1))
        first += piece
    return history


@pytest.mark.parametrize("pieces", [[100], [1] * 100, [7] * 14 + [2], [33, 1, 66], [16, 16, 1, 67]])
@pytest.mark.parametrize("most", [3, 10, 16, 50, 99, 100, 1000])
def test_stored_steps_depend_on_their_number_and_the_budget_alone(pieces, most):
    history = filled(pieces, most * STEP_BYTES)
    thin = 1
    while 100 // thin > most:
        thin *= 2
    assert history.thin == thin
    assert history.stored <= most
    np.testing.assert_array_equal(history.kept_log_prob[1, :, 2], np.arange(thin, 101, thin))
    np.testing.assert_array_equal(history.kept_chain[0, :, 1, 0], np.arange(thin, 101, thin))
    assert history.chain.shape[1] <= max(most, max(pieces))


def test_older_history_is_left_whole():
    """An interrupt between two histories must find the older one unchanged."""
    older = filled([30, 5], 40 * STEP_BYTES)
    before = older.kept_chain.copy()
    for piece in (3, 20, 200):
        older.extended(*numbered(36, 35 + piece))
        np.testing.assert_array_equal(older.kept_chain, before)
    again = older.extended(*numbered(36, 38))
    np.testing.assert_array_equal(again.kept_log_prob[0, :, 0], np.arange(1, 39))
