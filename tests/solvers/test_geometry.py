"""Membranes, back echoes, superlattices and graded layers against the time-domain solver."""

from dataclasses import replace

import numpy as np
import pytest

import inverse as inv

from . import face
from .samples import Experiment, Joint, Sample
from .time_domain import simulate
from .transfer_matrices import Beam

DELAY = np.arange(-1.5, 45, 0.1)
EXPERIMENT = Experiment(Beam(400.0), Beam(800.0), 0.3)


def agree(found, solved, at_pulse=2e-4, late=5e-5):
    """Fractions of the largest value; at a step of 0.01 ps the solver's own error is 3e-5."""
    for got, expected in (
        (found.reflectance_change.values, solved.reflectance_change),
        (found.optical_phase.values, solved.phase),
    ):
        error = np.abs(got - expected) / np.abs(expected).max()
        assert error.max() < at_pulse
        assert error[DELAY > 2].max() < late


def both(sample, stack=None, step=0.01):
    found = inv.simulate(stack or face.stack(sample), face.setup(EXPERIMENT), DELAY)
    return found, simulate(sample, EXPERIMENT, DELAY, step)


@pytest.fixture(scope="module")
def clear(al):
    """A transparent layer in which light rings and Brillouin scattering is seen."""
    optics = {"n_probe": 1.46 + 0j, "n_pump": 1.47 + 0j, "dn_dstrain": -0.3 + 0j, "dn_dT": 1e-5 + 0j}
    thermal = {"heat_capacity": 1.6e-3, "conductivity": 1.4e-3, "thermal_stress": 1e-4}
    return replace(al, density=2.2, velocity=5.97, **optics, **thermal)


def test_a_free_metal_membrane(al):
    agree(*both(Sample((replace(al, thickness=64.3),))))


def test_a_membrane_of_two_layers_with_a_bond(al, clear):
    # light goes through to the back, reflects there, and the back face moves: nothing of it is in a half-space
    sample = Sample(
        (replace(al, thickness=12.4), replace(clear, thickness=80.0)),
        (Joint(compliance=0.05, conductance=1e-4),),
    )
    found, solved = both(sample)
    agree(found, solved)
    rigid = inv.Stack(*face.stack(sample).parts[:-1], inv.Substrate("Si", orientation="100"))
    clamped = inv.simulate(rigid, face.setup(EXPERIMENT), DELAY).reflectance_change
    assert np.abs(clamped - solved.reflectance_change).max() > 0.1 * np.abs(solved.reflectance_change).max()


def test_a_finite_substrate_sends_its_echo_back(al, si):
    # 120 nm of silicon, there and back in 28.5 ps, under a metal too thick for light: only sound knows of the back
    dull = replace(si, dn_dstrain=0j, dn_dT=0j)
    film = replace(al, thickness=45.0, n_probe=2.8 + 20j, n_pump=0.5 + 12j)
    agree(*both(Sample((film, replace(dull, thickness=120.0)), (Joint(),))))
    thin, thick = (
        inv.simulate(face.stack(Sample((film, below), (Joint(),))), face.setup(EXPERIMENT), DELAY)
        for below in (replace(dull, thickness=120.0), dull)
    )
    change = thin.reflectance_change.values - thick.reflectance_change.values
    echo = 2 * 45.0 / al.velocity + 2 * 120.0 / si.velocity
    steepest = DELAY[np.argmax(np.abs(np.gradient(change)))]
    assert steepest == pytest.approx(echo, abs=1.0)


def test_a_superlattice_by_its_count(al, si, clear):
    a, b = replace(al, thickness=4.0), replace(clear, thickness=6.5)
    bond = Joint(compliance=0.01, conductance=3e-4)
    periods = 6
    joints = [j for _ in range(periods) for j in (bond, Joint())]
    sample = Sample((*(m for _ in range(periods) for m in (a, b)), si), tuple(joints))
    period = (
        inv.Layer(face.material(a, "a"), thickness=4.0),
        face.interface(bond),
        inv.Layer(face.material(b, "b"), thickness=6.5),
    )
    stack = inv.Stack(inv.Repeat(periods, *period), inv.Substrate(face.material(si, "si")))
    agree(*both(sample, stack))


def test_two_hundred_layers_of_one_metal_are_one(al, si):
    base = inv.Substrate(face.material(si, "si"))
    film = face.material(al, "al")
    whole = inv.Stack(inv.Layer(film, thickness=60.0), base)
    cut = inv.Stack(inv.Repeat(200, inv.Layer(film, thickness=0.3)), base)
    one, many = (inv.simulate(s, face.setup(EXPERIMENT), DELAY) for s in (whole, cut))
    for channel in ("reflectance_change", "optical_phase"):
        scale = np.abs(one[channel]).max()
        np.testing.assert_allclose(many[channel] / scale, one[channel] / scale, atol=1e-10)


def test_a_graded_layer_by_slices(al, si, clear):
    # The solver is given a slice for every half nanometre; twelve slices are near enough, two are not
    top, bottom = replace(al, n_pump=0.5 + 4.8j), replace(al, density=6.0, velocity=4.5, n_probe=3.5 + 5.0j)

    def slices(count):
        x = (np.arange(count) + 0.5) / count
        names = (
            "density",
            "velocity",
            "n_probe",
            "n_pump",
            "heat_capacity",
            "conductivity",
            "thermal_stress",
        )
        names = (*names, "dn_dstrain", "dn_dT")
        mixed = [{n: (1 - f) * getattr(top, n) + f * getattr(bottom, n) for n in names} for f in x]
        return tuple(replace(al, thickness=45.0 / count, **m) for m in mixed)

    sample = Sample((*slices(90), si), (Joint(),) * 90)
    solved = simulate(sample, EXPERIMENT, DELAY, 0.02)
    ends = face.material(top, "top"), face.material(bottom, "bottom")
    traces = {}
    for count in (2, 45):
        graded = inv.Graded(*ends, thickness=45.0, slices=count)
        stack = inv.Stack(graded, inv.Substrate(face.material(si, "si")))
        traces[count] = inv.simulate(stack, face.setup(EXPERIMENT), DELAY)
    agree(traces[45], solved, at_pulse=1e-3, late=1e-3)
    coarse = np.abs(traces[2].reflectance_change - solved.reflectance_change).max()
    assert coarse > 5e-3 * np.abs(solved.reflectance_change).max()


def test_a_thin_interlayer_is_nearly_a_bond(al, si, clear):
    # 1 nm of glass against its spring d / c33 = 1 / 78.4 nm/GPa: alike to its mass, and unlike no interlayer at all
    oxide = inv.Layer(face.material(clear, "oxide"), thickness=1.0)
    base, film = inv.Substrate(face.material(si, "si")), inv.Layer(face.material(al, "al"), thickness=40.0)
    conductance = 1.4 / 1e-9 * 1e-6
    spring = inv.Interface(compliance=1.0 / (2.2 * 5.97**2), boundary_conductance=conductance)
    layer, bond, bare = (
        inv.simulate(inv.Stack(*parts), face.setup(EXPERIMENT), DELAY).reflectance_change.values
        for parts in ((film, oxide, base), (film, spring, base), (film, base))
    )
    scale = np.abs(bare - layer).max()
    assert np.abs(bond - layer).max() < scale
    sample = Sample((replace(al, thickness=40.0), replace(clear, thickness=1.0), si), (Joint(), Joint()))
    agree(
        inv.simulate(inv.Stack(film, oxide, base), face.setup(EXPERIMENT), DELAY),
        simulate(sample, EXPERIMENT, DELAY, 0.015),
        late=2e-4,
    )
