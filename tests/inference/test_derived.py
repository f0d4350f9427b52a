"""Derived quantities against numbers computed outside the library from handbook constants."""

import numpy as np
import pytest
from scipy import stats

from inverse.description.material.properties import Material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.places import bind
from inverse.description.sample.stack import Interface, Layer, Stack, Substrate
from inverse.inference.derived import SILICA, derived

COMMON = {"n": 2.0 + 1.0j, "heat_capacity": 2.4, "conductivity": 100.0, "thermal_stress_coefficient": 1e-3}
AL = Material("Al-film", density=2.70, velocity=6.420, **COMMON)
SI = Material("Si-100", density=2.3296, velocity=8.4358, **COMMON)
SETUP = PumpProbe(pump=400, probe=800, pulse_rms=0.3)


def stack(**layer):
    return Stack(
        Layer(AL, **{"thickness": stats.uniform(50, 100), "velocity": stats.norm(6.42, 0.1), **layer}),
        Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0),
        Substrate(SI),
    )


def quantities(values, frequency, interlayer=SILICA, **layer):
    arrays = {name: np.array(v, float) for name, v in values.items()}
    return derived(bind(stack(**layer), SETUP), arrays, frequency=frequency, interlayer=interlayer)


def values(thickness=100.0, velocity=6.42, compliance=0.1):
    return {
        "Al-film.thickness": [thickness],
        "Al-film.velocity": [velocity],
        "Al-film|Si-100.compliance": [compliance],
    }


def test_layer_quantities():
    found = quantities(values(), 0.05)
    assert found["Al-film.round_trip"][0] == pytest.approx(31.153, abs=5e-4)  # ps, 2 d / v of 100 nm of Al
    assert found["Al-film.c33"][0] == pytest.approx(111.284, abs=5e-4)  # GPa, 2.70 x 6.420^2
    assert found["Al-film.impedance_ratio"][0] == pytest.approx(17.334 / 19.652, rel=5e-5)  # MRayl


@pytest.mark.parametrize(
    ("compliance", "expected"),
    [
        # |r| at 50, 100, 200 GHz, computed outside the library for Al/Si[100], K = 1e17 to 1e20 N/m3
        (10.0, (0.9994, 0.9999, 1.0000)),
        (1.0, (0.9454, 0.9855, 0.9963)),
        (0.1, (0.2844, 0.5038, 0.7578)),
        (0.01, (0.0690, 0.0852, 0.1307)),
    ],
)
def test_reflection_of_the_spring(compliance, expected):
    for frequency, value in zip((0.05, 0.1, 0.2), expected, strict=True):
        found = quantities(values(compliance=compliance), frequency)["Al-film|Si-100.reflection"][0]
        assert found == pytest.approx(value, abs=6e-5)


def test_reflection_is_reported_at_50_ghz():
    arrays = {name: np.array(v, float) for name, v in values(compliance=0.1).items()}
    found = derived(bind(stack(), SETUP), arrays)["Al-film|Si-100.reflection"][0]
    assert found == pytest.approx(0.2844, abs=6e-5)


def test_interface_quantities():
    found = quantities(values(compliance=0.02), 0.05)
    assert found["Al-film|Si-100.stiffness"][0] == pytest.approx(50.0)  # GPa/nm
    perfect = quantities(values(compliance=0.0), 0.05)
    assert perfect["Al-film|Si-100.stiffness"][0] == np.inf


@pytest.mark.parametrize("layer", [("SiO2", 2.20, 5.968), ("soft", 1.0, 1.0)])
def test_equivalent_interlayer_reflects_as_the_spring_does(layer):
    """Against the exact reflection of a layer between half-spaces, (r12 + r23 e) / (1 + r12 r23 e)."""
    frequency, compliance = 0.01, 0.02
    found = quantities(values(compliance=compliance), frequency, interlayer=layer)
    thickness = found["Al-film|Si-100.equivalent_thickness"][0]
    z1, z, z2 = 2.70 * 6.42, layer[1] * layer[2], 2.3296 * 8.4358
    r12, r23 = (z1 - z) / (z1 + z), (z - z2) / (z + z2)
    delay = np.exp(-4j * np.pi * frequency * thickness / layer[2])
    exact = abs((r12 + r23 * delay) / (1 + r12 * r23 * delay))
    bare = abs((z1 - z2) / (z1 + z2))
    spring = found["Al-film|Si-100.reflection"][0]
    # Both change |R|^2 by a term in frequency squared; the next order is 1e-3 of it here.
    assert exact**2 - bare**2 == pytest.approx(spring**2 - bare**2, rel=5e-3)


def test_no_interlayer_heavier_than_its_neighbours_acts_as_a_spring():
    found = quantities(values(), 0.05, interlayer=("W", 19.3, 5.2))
    assert "Al-film|Si-100.equivalent_thickness" not in found


def test_density_ratio_is_to_the_substrate():
    found = quantities(
        {**values(), "Al-film.density_ratio": [1.159]}, 0.05, density_ratio=stats.norm(1.159, 0.03)
    )
    assert found["Al-film.impedance_ratio"][0] == pytest.approx(1.159 * 6.42 / 8.4358, rel=1e-12)
    assert found["Al-film.c33"][0] == pytest.approx(1.159 * 2.3296 * 6.42**2, rel=1e-12)


def test_only_what_depends_on_an_unknown_is_returned():
    known = {k: v for k, v in values().items() if k != "Al-film.velocity"}
    found = quantities(known, 0.05, velocity=6.42)
    assert "Al-film.round_trip" in found
    assert "Al-film.c33" not in found
