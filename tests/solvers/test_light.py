"""Oblique and polarised light and the transmitted channel against the time-domain solver."""

from dataclasses import replace

import numpy as np
import pytest

import inverse as inv

from . import face
from .samples import Experiment, Joint, Sample
from .time_domain import simulate
from .transfer_matrices import Beam

DELAY = np.arange(-1.5, 30, 0.1)
CHANNELS = ("reflectance_change", "optical_phase", "transmission_change")


def agree(sample, experiment, channels, at_pulse=2e-4, late=6e-5):
    """Fractions of the largest value; at a step of 0.01 ps the solver's own error is 3e-5."""
    found = inv.simulate(face.stack(sample), face.setup(experiment), DELAY, channels=channels)
    solved = simulate(sample, experiment, DELAY, 0.01)
    columns = (solved.reflectance_change, solved.phase, solved.transmittance_change)
    for name, expected in zip(CHANNELS, columns, strict=True):
        if name in channels:
            error = np.abs(found[name].values - expected) / np.abs(expected).max()
            assert error.max() < at_pulse, name
            assert error[DELAY > 2].max() < late, name
    return found


@pytest.fixture(scope="module")
def clear(al):
    optics = {"n_probe": 1.46 + 0j, "n_pump": 1.47 + 0j, "dn_dstrain": -0.3 + 0j, "dn_dT": 1e-5 + 0j}
    thermal = {"heat_capacity": 1.6e-3, "conductivity": 1.4e-3, "thermal_stress": 1e-4}
    return replace(al, density=2.2, velocity=5.97, thickness=np.inf, **optics, **thermal)


@pytest.fixture(scope="module")
def layered(al, si, clear):
    """Glass, a thin metal and glass on silicon: light stands in all of them."""
    media = (replace(clear, thickness=70.0), replace(al, thickness=9.0), replace(clear, thickness=33.0), si)
    return Sample(media, (Joint(), Joint(compliance=0.05, conductance=1e-4), Joint()))


@pytest.mark.parametrize("probe", ["s", "p"])
@pytest.mark.parametrize("pump", ["s", "p"])
def test_oblique_reflection(layered, pump, probe):
    # different angles, so that neither can pass for the other
    oblique = Experiment(Beam(400.0, 0.6, pump), Beam(800.0, 1.05, probe), 0.3)
    found = agree(layered, oblique, CHANNELS[:2])
    straight = inv.simulate(face.stack(layered), face.setup(Experiment(Beam(400.0), Beam(800.0), 0.3)), DELAY)
    change = np.abs(found.reflectance_change - straight.reflectance_change).max()
    assert change > 0.01 * np.abs(straight.reflectance_change).max()


@pytest.mark.parametrize("polarisation", ["s", "p"])
def test_oblique_probe_under_a_liquid(layered, clear, polarisation):
    water = replace(
        clear, density=1.0, velocity=1.48, n_probe=1.33, n_pump=1.34, thickness=np.inf, dn_dT=-1e-4 + 0j
    )
    wet = Sample((replace(water, thermal_stress=0.0), *layered.media), (Joint(), *layered.joints))
    agree(wet, Experiment(Beam(400.0, 0.3, polarisation), Beam(800.0, 0.9, polarisation), 0.3), CHANNELS[:2])


@pytest.mark.parametrize("angle", [0.0, 0.8])
@pytest.mark.parametrize("polarisation", ["s", "p"])
def test_transmission_through_a_membrane(al, clear, angle, polarisation):
    media = (replace(clear, thickness=70.0), replace(al, thickness=9.0), replace(clear, thickness=33.0))
    sample = Sample(media, (Joint(), Joint(compliance=0.05, conductance=1e-4)))
    beam = Beam(800.0, angle, polarisation)
    agree(sample, Experiment(Beam(400.0), beam, 0.3), CHANNELS)


def test_transmission_into_a_clear_substrate(al, clear):
    sample = Sample((replace(al, thickness=15.0), clear), (Joint(conductance=1e-4),))
    agree(sample, Experiment(Beam(400.0), Beam(800.0, 0.5, "p"), 0.3), CHANNELS)


@pytest.mark.parametrize("polarisation", ["s", "p"])
def test_a_vanishing_angle_is_normal_incidence(layered, polarisation):
    def trace(angle):
        beams = [Beam(w, angle, polarisation) for w in (400.0, 800.0)]
        return inv.simulate(
            face.stack(layered), face.setup(Experiment(*beams, 0.3)), DELAY, channels=CHANNELS
        )

    found, plain = (
        trace(1e-7),
        inv.simulate(
            face.stack(layered),
            face.setup(Experiment(Beam(400.0), Beam(800.0), 0.3)),
            DELAY,
            channels=CHANNELS,
        ),
    )
    for name in CHANNELS:
        scale = np.abs(plain[name]).max()
        np.testing.assert_allclose(found[name] / scale, plain[name] / scale, atol=1e-10)


def test_a_brillouin_oscillation_slows_down_with_the_angle(clear, al):
    # f = 2 n v cos(theta') / lambda: 2 x 1.46 x 5.97 / 800 nm = 21.8 GHz; at 60 degrees sqrt(1.46^2 - 0.75) / 1.46 of
    # it, in the glass's own share of the trace
    delay = np.arange(25.0, 900.0, 0.5)
    stack = face.stack(Sample((replace(al, thickness=10.0), clear), (Joint(),)))
    frequencies = []
    for angle in (0.0, 60.0):
        setup = inv.PumpProbe(pump=400, probe=800, pulse_rms=5.0, probe_angle=angle)
        share = inv.simulate(stack, setup, delay, shares=True).reflectance_change_share.sel(part="m1 strain")
        ringing = np.diff(share.values) * np.hanning(delay.size - 1)
        spectrum = np.abs(np.fft.rfft(ringing, 1 << 16))
        frequencies.append(np.fft.rfftfreq(1 << 16, 0.5)[np.argmax(spectrum)])
    assert frequencies[0] == pytest.approx(2 * 1.46 * 5.97 / 800, rel=2e-3)
    assert frequencies[1] / frequencies[0] == pytest.approx(np.sqrt(1.46**2 - 0.75) / 1.46, rel=2e-3)


def test_a_pulse_changes_its_note_where_it_crosses_an_interface(al):
    # Through 1.5 um of glass the oscillation has 2 n v / lambda of the glass, 21.9 GHz; after 1500 / 5.97 = 251 ps
    # below it that of the crystal, 2 x 2.4 x 8.1 / 800 nm = 48.6 GHz
    clear = {"heat_capacity": 1.8, "conductivity": 1.5, "thermal_stress_coefficient": 1e-5, "dn_dT": 0j}
    glass = inv.Material("glass", density=2.2, velocity=5.97, n=1.466, dn_dstrain=-0.3 + 0j, **clear)
    crystal = inv.Material("crystal", density=4.0, velocity=8.1, n=2.4, dn_dstrain=-0.5 + 0j, **clear)
    metal = face.material(al, "metal")
    film = inv.Layer(glass, thickness=1500.0)
    stack = inv.Stack(inv.Layer(metal, thickness=10.0), film, inv.Substrate(crystal))
    delay = np.arange(20.0, 520.0, 0.25)
    setup = inv.PumpProbe(pump=400, probe=800, pulse_rms=1.0)
    shares = inv.simulate(stack, setup, delay, shares=True).reflectance_change_share
    crossing = 1500.0 / 5.97 + 10.0 / al.velocity
    for name, inside, note in (
        ("glass", delay < crossing - 8, 2 * 1.466 * 5.97 / 800),
        ("crystal", delay > crossing + 8, 2 * 2.4 * 8.1 / 800),
    ):
        ringing = np.diff(shares.sel(part=f"{name} strain").values[inside]) * np.hanning(inside.sum() - 1)
        spectrum = np.abs(np.fft.rfft(ringing, 1 << 16))
        assert np.fft.rfftfreq(1 << 16, 0.25)[np.argmax(spectrum)] == pytest.approx(note, rel=5e-3)
    # the crystal is silent until the pulse is there
    silent = np.abs(shares.sel(part="crystal strain").values)
    assert silent[delay < crossing - 8].max() < 1e-2 * silent.max()


def test_nonsense_is_refused():
    with pytest.raises(ValueError, match=r"probe_angle\.angle = 95 is outside"):
        inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3, probe_angle=95)
    with pytest.raises(ValueError, match=r"PumpProbe\.pump_polarisation = 'x'; give 's' or 'p'"):
        inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3, pump_polarisation="x")
    stack = inv.Stack(inv.Layer("Al", thickness=50.0), inv.Substrate("Si", orientation="100"))
    with pytest.raises(ValueError, match=r"simulate got channels=\('dT',\); give some of"):
        inv.simulate(stack, inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3), [1.0, 2.0], channels=("dT",))
