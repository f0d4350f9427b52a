"""Start-up: what `import inverse` adds, and the bundled example from the prompt to its table."""

import pytest
import start_up

pytestmark = [pytest.mark.slow, pytest.mark.benchmark]


def test_import_adds_under_four_tenths_of_a_second_and_loads_nothing_heavy():
    seconds = start_up.import_seconds()
    print(f"\n{seconds}")
    assert seconds["inverse"] - seconds["below"] < 0.4
    assert seconds["names"] - seconds["below"] < 0.4
    assert start_up.loaded_heavies() == []


def test_the_bundled_example_is_done_in_under_half_a_minute():
    cpu, wall = start_up.example_seconds()
    print(f"\n{cpu:.1f} s of CPU time, {wall:.1f} s by the clock")
    assert cpu < 30
