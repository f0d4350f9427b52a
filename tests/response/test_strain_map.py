"""Strain and temperature in the sample, against the time-domain solver, statics and the trace itself."""

import numpy as np
import pytest
from scipy import stats
from solvers.samples import Experiment, Joint, Medium, Sample
from solvers.time_domain import states
from solvers.transfer_matrices import Beam

import inverse as inv
from inverse.response.strain_map import strain_map

# Two temperatures, a resistive compliant bond, two absorbing layers: nothing is left out that a map shows.
FILM = {"density": 2.7, "velocity": 6.4, "heat_capacity": 2.4, "conductivity": 200.0}
HOT = {"electron_heat_capacity": 0.03, "electron_phonon_coupling": 2.5e17}
LOWER = {"density": 5.0, "velocity": 5.0, "heat_capacity": 2.0, "conductivity": 30.0}
BASE = {"density": 2.33, "velocity": 8.43, "heat_capacity": 1.66, "conductivity": 148.0}
STRESS = (5e-3, 4e-3, 8e-4)
INDEX = ((0.5 + 4.8j, 2.8 + 8.4j), (3.0 + 2.0j, 3.5 + 3.0j), (5.6 + 0.4j, 3.7 + 0.006j))
SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.2, fluence=2.0)


def stack():
    film, lower, base = (
        inv.Material(name, n={400: n[0], 800: n[1]}, thermal_stress_coefficient=s, **fields)
        for name, n, s, fields in zip(
            ("film", "lower", "base"), INDEX, STRESS, ({**FILM, **HOT}, LOWER, BASE), strict=True
        )
    )
    return inv.Stack(
        inv.Layer(film, thickness=32.0),
        inv.Interface(compliance=0.03, boundary_conductance=150.0),
        inv.Layer(lower, thickness=25.0),
        inv.Substrate(base),
    )


@pytest.fixture(scope="module")
def solved():
    """States of the independent solver at 1.5 and 9 ps, for 1 J/m2."""

    def medium(thickness, index, stress, fields, **more):
        small = {"heat_capacity": 1e-3, "conductivity": 1e-3, "electron_heat_capacity": 1e-3}
        values = {k: v * small.get(k, 1.0) for k, v in fields.items()}
        values["electron_phonon_coupling"] = values.get("electron_phonon_coupling", np.inf) * 1e-21
        return Medium(thickness=thickness, n_pump=index[0], n_probe=index[1], thermal_stress=stress, **values)

    parts = zip((32.0, 25.0, np.inf), INDEX, STRESS, ({**FILM, **HOT}, LOWER, BASE), strict=True)
    sample = Sample(tuple(medium(*p) for p in parts), (Joint(compliance=0.03, conductance=1.5e-4), Joint()))
    experiment = Experiment(Beam(400.0), Beam(800.0), 0.2)
    every = list(states(sample, experiment, 9.0, 0.01))
    times = np.array([s.time for s in every])
    return [every[int(np.argmin(abs(times - t)))] for t in (1.5, 9.0)]


@pytest.mark.parametrize("late", [0, 1])
def test_map_agrees_with_the_time_domain_solver(solved, late):
    state = solved[late]
    cells = np.flatnonzero(state.depth < 150.0)[::7]
    found = strain_map(stack(), SETUP, [state.time], state.depth[cells])
    for name, expected in (
        ("strain", state.strain),
        ("temperature", state.temperature[state.heat.lattice]),
        ("electron_temperature", state.temperature[state.heat.hot]),
    ):
        error = np.abs(found[name].values[:, 0] - SETUP.fluence * expected[cells])
        # the solver's own error at this step; a cell is read at its middle
        assert error.max() < 2e-3 * SETUP.fluence * np.abs(expected).max(), name


def test_media_are_told_and_depths_run_from_the_surface():
    found = strain_map(stack(), SETUP, [1.0], [0.0, 31.9, 32.1, 56.9, 57.1, 400.0])
    assert list(found.medium.values) == ["film", "film", "lower", "lower", "base", "base"]
    assert found.strain.attrs["units"] == "1" and found.temperature.attrs["units"] == "K"


def test_late_strain_is_thermal():
    # Statics: long after the pulse nothing moves and strain is thermal, c eta = S, in every medium.
    found = strain_map(stack(), SETUP, [300.0], np.array([5.0, 25.0, 45.0, 100.0]))
    thermal = np.array([5e-3 / (2.7 * 6.4**2)] * 2 + [4e-3 / (5.0 * 25.0)] + [8e-4 / (2.33 * 8.43**2)])
    np.testing.assert_allclose(found.strain[:, 0], thermal * found.temperature[:, 0], rtol=2e-3)
    np.testing.assert_allclose(
        found.elastic_strain[:, 0], found.strain[:, 0] - thermal * found.temperature[:, 0], atol=1e-9
    )


def test_elastic_strain_is_stress_over_modulus():
    # Stress goes through a weld and through a spring unchanged, so the strains on both sides are as the moduli
    found = strain_map(
        stack(), SETUP, np.arange(0.5, 30, 0.5), [31.999, 32.001, 56.999, 57.001]
    ).elastic_strain
    stress = found.values * np.array([2.7 * 6.4**2] * 1 + [5.0 * 25.0] * 2 + [2.33 * 8.43**2])[:, None]
    assert np.abs(stress).max() > 1e-3
    np.testing.assert_allclose(stress[0], stress[1], atol=2e-3 * np.abs(stress).max())
    np.testing.assert_allclose(stress[2], stress[3], atol=2e-3 * np.abs(stress).max())


def test_unknowns_take_their_median_or_what_is_given():
    film = inv.Layer("Al", thickness=stats.uniform(40, 20))
    known = inv.Stack(film, inv.Substrate("Si", orientation="100"))
    fixed = inv.Stack(inv.Layer("Al", thickness=44.0), inv.Substrate("Si", orientation="100"))
    one = strain_map(known, SETUP, [3.0, 9.0], [10.0, 46.0], values={"Al.thickness": 44.0})
    np.testing.assert_array_equal(one.strain, strain_map(fixed, SETUP, [3.0, 9.0], [10.0, 46.0]).strain)
    assert list(one.medium.values) == ["Al", "Si"]
    assert list(strain_map(known, SETUP, [3.0], [49.0, 51.0]).medium.values) == ["Al", "Si"]


@pytest.mark.parametrize("depth", [-1.0, np.inf])
def test_depths_above_the_surface_are_refused(depth):
    with pytest.raises(ValueError, match="A depth is negative or not finite"):
        strain_map(stack(), SETUP, [1.0], [depth])


def test_strange_values_are_named():
    with pytest.raises(ValueError, match=r"values names W\.thickness; the stack's unknowns are none"):
        strain_map(stack(), SETUP, [1.0], [1.0], values={"W.thickness": 3.0})


def test_a_membrane_has_no_strain_below_it():
    membrane = inv.Stack(inv.Layer("Al", thickness=40.0), inv.Substrate("vacuum"))
    faces = strain_map(membrane, SETUP, np.arange(0.0, 20.0, 0.5), [1e-3, 20.0, 39.999]).elastic_strain
    # free faces bear no stress; a layer between them is stretched and pressed in turn
    assert np.abs(faces[[0, 2]]).max() < 1e-3 * np.abs(faces[1]).max()
    with pytest.raises(ValueError, match="A depth is in the vacuum below 40 nm"):
        strain_map(membrane, SETUP, [1.0], [41.0])
