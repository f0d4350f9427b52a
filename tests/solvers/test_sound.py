"""Sound of the independent solver against closed forms and conservation laws.

Closed forms are elementary solutions, derived anew from the equation beside them, unless a source is named.
"""

from dataclasses import replace

import numpy as np
import pytest

from .samples import Joint, Mesh, Sample, build_mesh
from .sound import Motion, advance, assemble_sound, at_rest, energy, with_power_law
from .transfer_matrices import Beam

PUMP = Beam(400.0)


def bell(z, centre, width):
    return np.exp(-((z - centre) ** 2) / (2 * width**2))


def uniform(sample, cells, step):
    """A mesh of `cells` cells of exactly one step's travel in each medium, and its sound."""
    widths = np.concatenate([np.full(n, m.velocity * step) for n, m in zip(cells, sample.media, strict=True)])
    mesh = Mesh(widths, np.repeat(np.arange(len(cells)), cells), np.cumsum(cells)[:-1])
    return mesh, assemble_sound(sample, mesh, step)


def downwards(sound, z, velocity, centre, width):
    """A displacement pulse going down: u = f(z - v t)."""
    u = bell(z, centre, width)
    return Motion(u, velocity * (z - centre) / width**2 * u, at_rest(sound).memory)


def march(sound, motion, steps, stress=None):
    stress = np.zeros(len(sound.stiffness)) if stress is None else stress
    for _ in range(steps):
        motion = advance(sound, motion, stress)
    return motion


def test_a_free_film_repeats_after_one_round_trip(al):
    # d'Alembert between free faces: period 2 d / v, to rounding
    sound = uniform(Sample((replace(al, thickness=60.0),)), (300,), 0.02)[1]
    u = np.random.default_rng(1).standard_normal(301)
    start = replace(at_rest(sound), displacement=u, velocity=np.zeros(301))
    half, full = march(sound, start, 300), march(sound, start, 600)
    np.testing.assert_allclose(full.displacement, u, atol=1e-11)
    np.testing.assert_allclose(half.displacement, u[::-1], atol=1e-11)


def test_energy_of_sound_is_kept(al, si):
    # Springs, welded joints, an interface mass and layers that are no whole number of steps; 5000 steps of
    # 0.02 ps
    sample = Sample(
        (replace(al, thickness=31.234), replace(si, thickness=20.05), replace(al, thickness=7.0)),
        (Joint(compliance=0.1), Joint(areal_mass=1.3)),
    )
    sound = assemble_sound(sample, build_mesh(sample, 0.02, 1, PUMP), 0.02)
    random = np.random.default_rng(2)
    nodes = len(sound.stiffness) + 1
    start = replace(
        at_rest(sound), displacement=random.standard_normal(nodes), velocity=random.standard_normal(nodes)
    )
    assert energy(sound, march(sound, start, 5000)) == pytest.approx(energy(sound, start), rel=1e-10)


FREQUENCIES = np.linspace(0.0, 0.25, 60)


def spectrum(signal, step):
    return np.exp(-2j * np.pi * FREQUENCIES[:, None] * step * np.arange(len(signal))) @ signal


def measured_at(joint, upper, lower):
    """Displacement reflected and transmitted by a joint, over the incident, at FREQUENCIES.

    There are 2500 cells on each side. A pulse starts at cell 1250; its receivers are 500 cells above
    and below the joint, all whole numbers of steps.
    """
    step = 0.01
    sample = Sample((replace(upper, thickness=np.inf), replace(lower, thickness=np.inf)), (joint,))
    mesh, sound = uniform(sample, (2500, 2500), step)
    z = np.append(0, np.cumsum(mesh.width))
    if joint.compliance:
        z = np.insert(z, 2500, z[2500])
    motion = downwards(sound, z, upper.velocity, z[1250], 60 * mesh.width[0])
    above, below, stress = [], [], np.zeros(len(sound.stiffness))
    for _ in range(3000):
        above.append(motion.displacement[2000])
        below.append(motion.displacement[-501 - 1500])
        motion = advance(sound, motion, stress)
    incident = spectrum(above[:1250], step)
    shift = np.exp(2j * np.pi * FREQUENCIES * 1000 * step)
    # What the receiver above sees from step 1250 on is the echo: 1000 steps later, but counted from 1250
    echo = spectrum(above[1250:], step) * np.exp(-2j * np.pi * FREQUENCIES * 1250 * step)
    return echo / incident * shift, spectrum(below, step) / incident * shift


def test_spring_reflects_as_linear_slip_predicts(al, si):
    # R = (Z1 - Z2 + s Z1 Z2 / K) / (Z1 + Z2 + s Z1 Z2 / K) for displacement, s = i w (Schoenberg 1980); T by
    # continuity of stress, 2 Z1 / (same)
    stiffness = 8.0
    reflected, transmitted = measured_at(Joint(compliance=1 / stiffness), al, si)
    z1, z2 = al.density * al.velocity, si.density * si.velocity
    slip = 2j * np.pi * FREQUENCIES * z1 * z2 / stiffness
    np.testing.assert_allclose(reflected, (z1 - z2 + slip) / (z1 + z2 + slip), atol=2e-4)
    np.testing.assert_allclose(transmitted, 2 * z1 / (z1 + z2 + slip), atol=2e-4)


def test_areal_mass_reflects_as_newton_predicts(al, si):
    # Welded joint of mass m: w is continuous, stress jumps by m s w, so R = (Z1 - Z2 - s m) / (Z1 + Z2 + s m)
    mass = 6.0
    reflected, transmitted = measured_at(Joint(areal_mass=mass), al, si)
    z1, z2 = al.density * al.velocity, si.density * si.velocity
    inertia = 2j * np.pi * FREQUENCIES * mass
    np.testing.assert_allclose(reflected, (z1 - z2 - inertia) / (z1 + z2 + inertia), atol=2e-4)
    np.testing.assert_allclose(transmitted, 2 * z1 / (z1 + z2 + inertia), atol=2e-4)


@pytest.mark.parametrize("law", ["Kelvin-Voigt", "power 1.5"])
def test_attenuation_agrees_with_the_complex_modulus(si, law):
    # u goes as exp(-s z / v sqrt(rho v^2 / c(s))): c / rho v^2 = 1 + s tau, and 1 + (s tau)^0.5
    step, tau = 0.01, 0.02
    if law == "Kelvin-Voigt":
        lossy, modulus = replace(si, viscous_time=tau), lambda s: 1 + s * tau
    else:
        lossy = with_power_law(si, np.sqrt(0.003), 0.5, 0.05, 20.0)
        modulus = lambda s: 1 + np.sqrt(0.003 * s)  # noqa: E731
    sample = Sample((replace(lossy, thickness=np.inf),))
    mesh, sound = uniform(sample, (6000,), step)
    z = np.append(0, np.cumsum(mesh.width))
    motion = replace(at_rest(sound), displacement=bell(z, z[2000], 60 * mesh.width[0]))
    near, far, stress = [], [], np.zeros(len(sound.stiffness))
    for _ in range(4000):
        motion = advance(sound, motion, stress)
        near.append(motion.displacement[2600])
        far.append(motion.displacement[3600])
    # Nothing has returned from the top by then: each receiver sees exp(-q z) of one wave
    window = slice(0, 3900)
    f = np.fft.rfftfreq(16384, step)
    use = (f > 0.02) & (f < 0.25)
    gamma = 0.05  # damped transform: the window's end then weighs nothing
    damping = np.exp(-gamma * step * np.arange(1, 4001))[window]
    ratio = np.fft.rfft(np.array(far)[window] * damping, 16384) / np.fft.rfft(
        np.array(near)[window] * damping, 16384
    )
    s = gamma + 2j * np.pi * f
    expected = np.exp(-s * (z[3600] - z[2600]) / si.velocity / np.sqrt(modulus(s)))
    np.testing.assert_allclose(ratio[use], expected[use], atol=1e-3)
    assert np.abs(expected[use]).min() < 0.5


def test_half_spaces_swallow_sound(al, si):
    sample = Sample((replace(al, thickness=np.inf), replace(si, thickness=np.inf)), (Joint(),))
    mesh, sound = uniform(sample, (300, 300), 0.02)
    z = np.append(0, np.cumsum(mesh.width))
    start = replace(at_rest(sound), displacement=bell(z, z[280], 2.0))
    assert energy(sound, march(sound, start, 700)) < 1e-20 * energy(sound, start)


def test_heated_film_settles_at_its_thermal_expansion(al):
    # Free film, uniform T: in the end c strain = beta T, so it is thicker by d beta T / c
    film = replace(al, thickness=20.0, viscous_time=0.3)
    sample = Sample((film,))
    mesh = build_mesh(sample, 0.02, 1, PUMP)
    sound = assemble_sound(sample, mesh, 0.02)
    # The slowest mode decays at (pi v / d)^2 tau / 2 = 0.15 / ps: 160 ps leave exp(-24)
    end = march(sound, at_rest(sound), 8000, stress=np.full(len(sound.stiffness), film.thermal_stress * 7.0))
    expansion = 20.0 * film.thermal_stress * 7.0 / film.modulus
    assert end.displacement[-1] - end.displacement[0] == pytest.approx(expansion, rel=1e-9)
