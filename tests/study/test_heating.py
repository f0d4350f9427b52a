"""Steady and peak heating against closed forms of conduction and energy balance."""

import warnings

import numpy as np
import pytest

from inverse.description.material.properties import Material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.parts import Interface, Layer, Substrate
from inverse.description.sample.stack import Stack
from inverse.study.heating import Heating, HeatingWarning, heating

COMMON = {"density": 3.0, "velocity": 6.0, "thermal_stress_coefficient": 2e-3, "heat_capacity": 2.5}
BLACK = Material("black", n=1.0 + 6.0j, conductivity=40.0, **COMMON)
FILM = Material("film", n=2.0 + 6.0j, conductivity=200.0, **COMMON)
GLASS = Material("glass", n=1.5, conductivity=1.4, **COMMON)


def setup(spot=10.0, **changes):
    return PumpProbe(
        **{
            "pump": 400,
            "probe": 800,
            "pulse_rms": 0.1,
            "spot_radius": spot,
            "repetition_rate": 80.0,
            **changes,
        }
    )


def quiet(stack, bench, power=1.0) -> Heating:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", HeatingWarning)
        return heating(stack, bench, power=power)


def test_half_space_by_the_closed_form():
    # Gaussian spot on a half-space: T = P / (sqrt(2 pi) kappa w), an integral of I(r) / (2 pi kappa r)
    found = quiet(Stack(Substrate(BLACK)), setup())
    watts, metres = 1e-3, 10e-6
    absorbed = 1 - abs((1 - (1 + 6j)) / (1 + 1 + 6j)) ** 2
    assert found.absorbed == pytest.approx(absorbed, rel=1e-9)
    assert found.steady == pytest.approx(absorbed * watts / (np.sqrt(2 * np.pi) * 40.0 * metres), rel=1e-6)


def test_fluence_by_hand():
    # 1 mW at 80 MHz: 12.5 pJ in 10 um: 2 x 12.5e-12 J / (pi x 1e-10 m2)
    assert quiet(Stack(Substrate(BLACK)), setup()).fluence == pytest.approx(
        25e-12 / (np.pi * 1e-10), rel=1e-9
    )


def test_a_layer_of_the_substrates_own_material_changes_nothing():
    # The heat of a buried share is put in at its layer's top: the skin below 300 nm holds none of it
    whole = quiet(Stack(Substrate(BLACK)), setup())
    cut = quiet(Stack(Layer(BLACK, thickness=300.0), Substrate(BLACK)), setup())
    assert cut.steady == pytest.approx(whole.steady, rel=1e-9)
    assert cut.lattice == pytest.approx(whole.lattice, rel=1e-6)


def test_boundary_resistance_adds_its_own_drop():
    # Where the film conducts nothing sideways the drop on the axis is the absorbed intensity 2 P / (pi w^2) over G
    poor = Material("poor", n=2.0 + 6.0j, conductivity=0.05, **COMMON)
    welded, held = (
        quiet(
            Stack(Layer(poor, thickness=40.0), Interface(boundary_conductance=g), Substrate(GLASS)), setup()
        )
        for g in (np.inf, 10.0)
    )
    intensity = welded.absorbed * 1e-3 * 2 / (np.pi * 1e-10)
    assert held.steady - welded.steady == pytest.approx(intensity / 10e6, rel=1e-3)


def test_a_metal_film_carries_heat_out_of_the_spot():
    # Between the two closed forms: glass alone, and glass under a sheet of conductance kappa d that spreads the heat
    alone = 1e-3 / (np.sqrt(2 * np.pi) * 1.4 * 10e-6)
    thin, thick = (quiet(Stack(Layer(FILM, thickness=d), Substrate(GLASS)), setup()) for d in (50.0, 1000.0))
    assert thin.steady < alone * thin.absorbed
    # Sheet: T = (P / 2 pi) * integral of exp(-k^2 w^2 / 8) k dk / (kappa_s k + kappa_f d k^2)
    k = np.geomspace(1e-3, 1e6, 40001)
    sheet = np.trapezoid(np.exp(-((k * 10e-6) ** 2) / 8) / (1.4 + 200 * 1000e-9 * k), k) / (2 * np.pi) * 1e-3
    assert thick.steady == pytest.approx(sheet * thick.absorbed, rel=0.01)


def test_peak_is_the_absorbed_energy_over_the_heat_capacity():
    # At once, before anything flows: T = F (1 - R) alpha / C at the surface; next to no conduction, a sharp pulse
    still = Material("still", n=1.0 + 0.5j, conductivity=1e-5, **COMMON)
    found = quiet(Stack(Substrate(still)), setup(pulse_rms=0.05))
    alpha = 4 * np.pi * 0.5 / 400e-9
    assert found.lattice == pytest.approx(found.fluence * found.absorbed * alpha / 2.5e6, rel=1e-3)
    assert found.electrons == found.lattice


def test_hot_electrons_take_the_energy_first():
    # Weak coupling: the electrons hold it all, T_e = F (1 - R) alpha / C_e, and their lattice far less
    metal = Material(
        "metal",
        n=1.0 + 0.5j,
        conductivity=1e-5,
        electron_heat_capacity=0.03,
        electron_phonon_coupling=1e13,
        **COMMON,
    )
    found = quiet(Stack(Substrate(metal)), setup(pulse_rms=0.05))
    alpha = 4 * np.pi * 0.5 / 400e-9
    assert found.electrons == pytest.approx(found.fluence * found.absorbed * alpha / 0.03e6, rel=1e-3)
    assert found.lattice < 0.01 * found.electrons


def test_warmth_is_proportional_to_power_and_warned_of():
    stack = Stack(Layer("Al", thickness=60.0), Interface(boundary_conductance=100.0), Substrate(GLASS))
    weak, strong = (quiet(stack, setup(), power) for power in (1.0, 1000.0))
    for name in ("steady", "lattice", "electrons", "fluence"):
        assert getattr(strong, name) == pytest.approx(1000 * getattr(weak, name), rel=1e-12)
    with pytest.warns(HeatingWarning, match=r"the lattice warms by .* K steadily"):
        warnings.filterwarnings("ignore", "The model is linear, but the electrons")
        heating(stack, setup(), power=1000.0)
    assert weak.warnings == ()
    assert any("the electrons warm" in text for text in strong.warnings)


def test_what_is_missing_is_named():
    stack = Stack(Substrate(BLACK))
    with pytest.raises(ValueError, match=r"needs PumpProbe\(spot_radius=\.\.\., repetition_rate=\.\.\.\)"):
        heating(stack, PumpProbe(pump=400, probe=800, pulse_rms=0.3), power=1.0)
    with pytest.raises(ValueError, match=r"heating\.power = -1 is outside"):
        heating(stack, setup(), power=-1.0)
    membrane = Stack(Layer("Al", thickness=60.0), Substrate("vacuum"))
    with pytest.raises(ValueError, match="is free below: its steady temperature depends on what holds it"):
        heating(membrane, setup(), power=1.0)
