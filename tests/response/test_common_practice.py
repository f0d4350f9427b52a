"""Common practice of the field, no source: what everybody expects of the defaults, to within a factor of about two."""

import numpy as np
import pytest

import inverse as inv
from inverse.response.strain_map import strain_map

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.1)


def skin(name, **cut):
    return 400.0 / (4 * np.pi * complex(inv.material(name, **cut).index_at(400)).imag)


def test_blue_light_is_absorbed_within_about_ten_nanometres():
    assert 5 < skin("Al") < 15
    assert 5 < skin("GaAs", orientation="100") < 20


def heated_depth(stack, time, setup=SETUP):
    """Mean depth of the heat."""
    z = np.linspace(0.25, 600, 1200)
    rise = strain_map(stack, setup, [time], z).temperature.values[:, 0]
    return np.sum(rise * z) / np.sum(rise)


def test_hot_electrons_carry_the_heat_tens_of_nanometres_into_a_metal():
    hot = heated_depth(inv.Stack(inv.Substrate("Al")), 2.0)
    slow = heated_depth(inv.Stack(inv.Substrate("Al", electron_phonon_coupling=np.inf)), 2.0)
    assert 20 < hot < 100
    assert hot > 1.5 * slow


def test_the_pulse_lasts_about_as_long_as_sound_crosses_the_heated_depth():
    # Down in a thick metal: the full width at half maximum of the compression, against depth over velocity
    time = np.arange(5.0, 60.0, 0.05)
    strain = -strain_map(inv.Stack(inv.Substrate("Al")), SETUP, time, [200.0]).elastic_strain.values[0]
    lasting = np.ptp(time[strain > strain.max() / 2])
    crossing = heated_depth(inv.Stack(inv.Substrate("Al")), 2.0) / inv.material("Al").velocity
    assert 0.5 < lasting / crossing < 3


def test_metals_launch_compression_that_turns_to_tension_at_the_free_surface():
    # An Al film is compressed by its own heat; that half of the pulse which came up is turned over and follows
    z = np.linspace(50, 400, 701)
    strain = strain_map(inv.Stack(inv.Substrate("Al")), SETUP, [30.0], z).elastic_strain.values[:, 0]
    assert z[np.argmin(strain)] > z[np.argmax(strain)]


@pytest.mark.parametrize(
    ("name", "cut", "low", "high"),
    [("water", None, 3, 10), ("SiO2", None, 15, 40), ("diamond", "100", 80, 300)],
)
def test_liquids_ring_near_ten_gigahertz_and_solids_faster(name, cut, low, high):
    medium = inv.material(name, cut) if cut else inv.material(name)
    assert low < 1e3 * 2 * complex(medium.index_at(532)).real * medium.velocity / 532 < high
