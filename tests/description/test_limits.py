"""Limits of the one-dimensional picture."""

import numpy as np
import pytest
from scipy import stats

from inverse.description.limits import DIFFRACTION, SPREADING, plane_wave
from inverse.description.material.properties import Material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.parts import Layer, Substrate
from inverse.description.sample.stack import Stack

FIELDS = {"heat_capacity": 2.0, "conductivity": 100.0, "thermal_stress_coefficient": 2e-3, "density": 3.0}
METAL = Material("metal", n=2.0 + 4.0j, velocity=6.0, **FIELDS)
BASE = Substrate(Material("base", n=1.5, velocity=8.0, **FIELDS))


def found(spot, last=1000.0, rms=0.3, **setup):
    stack = Stack(Layer(METAL, thickness=stats.uniform(40, 40)), BASE)
    return plane_wave(
        stack, PumpProbe(pump=400, probe=800, pulse_rms=rms, spot_radius=spot, **setup), last_delay=last
    )


def test_numbers_by_hand():
    limits = found(2.0)
    depth = 400 / (4 * np.pi * 4)  # 7.96 nm, longer than the 1.8 nm of the pulse
    assert limits.wavelength == pytest.approx(2 * np.pi * depth)
    assert limits.distance == pytest.approx(8000)
    assert limits.diffraction == pytest.approx(8000 * 50 / (np.pi * 2000**2))
    assert limits.divergence == pytest.approx(800 / (np.pi * 2000))
    assert limits.spreading == pytest.approx(np.sqrt(4 * 50 * 1000) / 2000)  # 50 nm2/ps
    assert found(2.0, rms=5.0).wavelength == pytest.approx(2 * np.pi * 30)
    assert found(20.0, probe_spot_radius=2.0).diffraction == limits.diffraction


def test_a_wide_spot_is_silent_and_no_spot_is_no_answer():
    assert found(20.0).warnings == ()
    assert found(None) is None


@pytest.mark.parametrize(
    ("spot", "last", "rms", "word"),
    [(0.9, 3000.0, 5.0, "diffracts"), (1.0, 100.0, 0.3, "optical limit"), (1.4, 3000.0, 0.3, "heat spreads")],
)
def test_each_limit_is_told_by_name(spot, last, rms, word):
    assert word in " ".join(found(spot, last, rms).warnings)
    assert word not in " ".join(found(30 * spot, last, rms).warnings)


def on_axis(diffraction):
    """A Gaussian beam on its axis by its angular spectrum: k w = 400, small against nothing but 1."""
    x = np.linspace(0, 12, 20001)  # transverse wavenumber times w
    spectrum = x * np.exp(-(x**2) / 4) / 2
    return np.trapezoid(spectrum * np.exp(-1j * diffraction * x**2 / 4), x)


def test_the_limit_costs_half_a_per_cent_of_an_echo():
    # paraxial propagation over z turns each component by k_t^2 z / 2k, which is D x^2 / 4
    field = on_axis(DIFFRACTION)
    assert abs(field) == pytest.approx(1 / np.sqrt(1 + DIFFRACTION**2), rel=1e-5)
    assert 1 - abs(field) == pytest.approx(0.005, rel=0.02)
    assert abs(np.angle(field)) == pytest.approx(np.arctan(DIFFRACTION), rel=1e-4)


def test_the_limit_costs_fifteen_per_cent_of_the_heat():
    # Sideways, a Gaussian exp(-2 r^2 / w^2) becomes on its axis 1 / (1 + 8 D t / w^2): 4 D t = (SPREADING w)^2
    x = np.linspace(-40, 40, 40001)
    shape, kernel = np.exp(-2 * x**2), np.exp(-(x**2) / SPREADING**2) / (SPREADING * np.sqrt(np.pi))
    one_way = np.trapezoid(shape * kernel, x)
    assert one_way**2 == pytest.approx(1 / (1 + 2 * SPREADING**2), rel=1e-6)
    assert 1 - one_way**2 == pytest.approx(0.15, abs=0.005)
