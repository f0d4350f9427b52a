"""The door of the forward model: customary units become nm, ps, g/cm3, GPa, K.

Expected values go by way of SI: 1 GPa = 1e9 J/m3, 1 nm = 1e-9 m, 1 ps = 1e-12 s.
"""

import numpy as np
import pytest
from scipy import stats

from inverse.description.material.properties import Material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.places import bind
from inverse.description.sample.stack import Interface, Layer, Stack, Substrate
from inverse.response.media import sample
from inverse.response.recursion import OPEN

GPA, NM, PS = 1e9, 1e-9, 1e-12
SETUP = PumpProbe(pump=400, probe=800, pulse_rms=0.3)


def film(**changes):
    fields = {
        "density": 2.7,
        "velocity": 6.42,
        "n": {400: 0.49 + 4.84j, 800: 2.77 + 8.35j},
        "heat_capacity": 2.4,
        "conductivity": 200.0,
        "thermal_stress_coefficient": 5e-3,
        "electron_heat_capacity": 0.03,
        "electron_phonon_coupling": 2.4e17,
        "attenuation_time": 0.02,
        "attenuation_exponent": 0.8,
        "quality_factor": 50.0,
        "quality_frequency": 0.015,
    }
    return Material("film", **{**fields, **changes})


def batch(material=None, compliance=0.02, conductance=80.0, values=None, **layer):
    stack = Stack(
        Layer(material or film(), **{"thickness": 60.0, **layer}),
        Interface(compliance=compliance, boundary_conductance=conductance),
        Substrate(Material("base", density=2.33, velocity=8.43, n=3.7 + 0j, heat_capacity=1.66, conductivity=148.0,
                           thermal_stress_coefficient=1e-3)),
    )  # fmt: skip
    return sample(bind(stack, SETUP), {name: np.asarray(v, float) for name, v in (values or {}).items()})


@pytest.mark.parametrize(
    ("field", "si", "unit"),
    [
        ("thickness", 60e-9, NM),
        ("density", 2700.0, 1e3),
        ("velocity", 6420.0, NM / PS),
        ("heat_capacity", 2.4e6, GPA),
        ("electron_heat_capacity", 0.03e6, GPA),
        ("conductivity", 200.0, GPA * NM**2 / PS),
        ("inverse_coupling", 1 / 2.4e17, PS / GPA),
        ("stress", 5e6, GPA),
        ("loss_time", 0.02e-12, PS),
        ("loss_exponent", 0.8, 1.0),
        ("inverse_quality", 1 / 50, 1.0),
        ("quality_frequency", 2 * np.pi * 15e9, 1 / PS),
        ("n_pump", 0.49 + 4.84j, 1.0),
        ("n_probe", 2.77 + 8.35j, 1.0),
    ],
)
def test_layer_in_coherent_units(field, si, unit):
    value = getattr(batch().media[0], field)
    assert value.shape == (1, 1)
    assert value.item() == pytest.approx(si / unit, rel=1e-12)


def test_interface_in_coherent_units():
    found = batch()
    assert found.compliance[0].item() == pytest.approx(1 / 50e18 / (NM / GPA), rel=1e-12)  # 50e18 N/m3
    assert found.resistance[0].item() == pytest.approx(1 / 80e6 / (PS / (GPA * NM)), rel=1e-12)  # 80 MW/m2/K


def test_limits_are_finite():
    inert = film(electron_phonon_coupling=np.inf, quality_factor=np.inf)
    found = batch(inert, compliance=np.inf, conductance=0.0)
    assert found.media[0].inverse_coupling.item() == 0
    assert found.media[0].inverse_quality.item() == 0
    assert found.compliance[0].item() == OPEN
    assert found.resistance[0].item() == OPEN
    assert batch(conductance=np.inf).resistance[0].item() == 0
    assert np.isinf(found.media[1].thickness).all()


def test_unknowns_make_a_batch():
    values = {
        "film.thickness": [55.0, 61.0],
        "film.density_ratio": [1.1, 1.2],
        "film.conductivity": [150.0, 200.0],
    }
    priors = {
        "thickness": stats.uniform(50, 20),
        "density_ratio": stats.norm(1.16, 0.05),
        "conductivity": stats.loguniform(50, 250),
    }
    found = batch(values=values, **priors).media[0]
    np.testing.assert_allclose(found.thickness[:, 0], [55.0, 61.0])
    np.testing.assert_allclose(found.density[:, 0], [1.1 * 2.33, 1.2 * 2.33])
    np.testing.assert_allclose(found.conductivity[:, 0], [0.15, 0.2])  # 1 GPa nm2/ps/K = 1000 W/m/K
    assert found.velocity.shape == (1, 1)


def test_air_carries_neither_sound_nor_heat_and_a_liquid_does():
    assert not batch().ambient.is_liquid
    assert batch().ambient.n_probe.item() == 1
    water = Material("water", density=0.998, velocity=1.482, n=1.33, heat_capacity=4.18, conductivity=0.6,
                     thermal_stress_coefficient=0.0)  # fmt: skip
    stack = Stack(Substrate(film()), ambient=water)
    ambient = sample(bind(stack, SETUP), {}).ambient
    assert ambient.is_liquid
    found = (ambient.density, ambient.velocity, ambient.heat_capacity, ambient.conductivity, ambient.n_probe)
    np.testing.assert_allclose([v.item() for v in found], [0.998, 1.482, 4.18e-3, 0.6e-3, 1.33], rtol=1e-12)
