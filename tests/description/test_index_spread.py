"""The spread of a refractive index between sources reaches the places of a bound stack."""

import pytest

import inverse as inv
from inverse.description.sample.places import bind


def slots(layer):
    stack = inv.Stack(layer, inv.Substrate("Si", orientation="100"))
    setup = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
    return {slot.name: slot for slot in bind(stack, setup).slots}


def test_slots_of_a_reference_index_carry_the_tables_spread():
    found = slots(inv.Layer("Al", thickness=60.0))
    spread = inv.material("Al").index_spread_at(800.0)
    assert found["Al.n_real_800"].spread == pytest.approx(spread.real)
    assert found["Al.n_imag_800"].spread == pytest.approx(spread.imag)
    assert spread.imag > 0.02 * abs(inv.material("Al").index_at(800.0).imag)  # the least spread is 3 %


def test_slots_of_the_users_own_index_carry_no_spread():
    found = slots(inv.Layer("Al", thickness=60.0, n={400: 0.49 + 4.84j, 800: 2.77 + 8.35j}))
    assert found["Al.n_imag_800"].value == 8.35
    assert found["Al.n_imag_800"].spread == 0.0
