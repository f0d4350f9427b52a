"""Two worker processes sample as fast as two cores let them, and draw what one process draws."""

import both_cores
import pytest

from inverse.inference.mcmc.executor import available_cores

pytestmark = [pytest.mark.slow, pytest.mark.benchmark]


@pytest.fixture(scope="module")
def timing():
    found = both_cores.measure()
    print(
        f"\n{found}\n{found.speed_up:.2f} by the clock, counting {found.counted:.2f}, {found.bound:.2f} possible"
    )
    return found


def test_the_draws_are_the_same(timing):
    assert timing.same_draws


def test_the_main_process_leaves_almost_all_work_to_the_workers(timing):
    assert timing.bound > 1.8


@pytest.mark.skipif(available_cores() < 2, reason="one core")
def test_two_workers_are_one_point_seven_times_as_fast(timing):
    """By the clock: where others take part of the machine, of what it gives two processes that only count."""
    assert timing.speed_up > 1.7 * min(timing.counted / 2, 1)
