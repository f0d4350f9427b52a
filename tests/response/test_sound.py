"""Longitudinal sound against closed forms, published worked numbers and laws of mechanics.

Closed forms are elementary solutions, derived anew from the equation beside them, unless a source is named.
"""

from dataclasses import replace

import numpy as np
import pytest
from build import (
    AT_ONCE,
    OPEN,
    VACUUM,
    crystal,
    gauss_legendre,
    in_time,
    lattice,
    liquid,
    metal,
    quick_grid,
    solve,
    stacked,
    strain,
)
from hypothesis import given
from hypothesis import strategies as st
from records import one
from scipy import optimize

from inverse.description.material.properties import material
from inverse.response.basis import basis, columns
from inverse.response.inverse_laplace import time_grid
from inverse.response.sound import modulus

RMS = 0.3
COLD = 1e-14  # thermal conductivity of next to nothing: heat stays where light left it


def still(m):
    return replace(m, conductivity=one(COLD))


def surface(sample, delay, rms=RMS):
    """Displacement of the surface at unit incident fluence, nm."""
    grid = quick_grid(delay, rms)
    return in_time(grid, solve(sample, grid).sound[0].u_top)[0]


# --- what remains when the sound has gone ---------------------------------------------------------------


@pytest.mark.parametrize("compliance", [0.0, 0.02])
def test_displacement_settles_at_the_static_expansion(compliance):
    # Without stress u' = beta T / c; where light left the heat F_j, layer j grows by beta F_j / (C c), and
    # the depth stays where it was: an unloaded sample gets no momentum, so the waves that leave carry none.
    media = [
        still(metal(30.0, n_pump=2 + 0.8j)),
        still(metal(25.0, n_pump=3 + 0.8j, density=7.0, velocity=5.0, stress=9e-3)),
        still(crystal(n_pump=4 + 0.5j)),
    ]
    sample = stacked(*media, compliance=[compliance, 0.0])
    delay = np.array([600.0, 620.0, 650.0])
    grid = quick_grid(delay)
    solved = solve(sample, grid)
    growth = [
        f.fraction().item() * (m.stress / (m.heat_capacity * m.density * m.velocity**2)).item()
        for f, m in zip(solved.profiles, media, strict=True)
    ]
    assert min(growth) > 0.02 * sum(growth)
    np.testing.assert_allclose(in_time(grid, solved.sound[0].u_top)[0], -sum(growth), rtol=3e-6)
    np.testing.assert_allclose(in_time(grid, solved.sound[1].u_top)[0], -sum(growth[1:]), rtol=3e-6)


def test_film_lifted_off_its_substrate_oscillates_about_its_expansion():
    # Free film: period 2 d / v for ever, and over whole periods it is thicker by beta F / (C c) in the mean
    d = 32.1
    film = still(metal(d, n_pump=2 + 2j))
    period = 2 * d / 6.42
    delay = 40 + period * np.arange(64) / 64
    grid = quick_grid(np.concatenate([delay, delay + 7 * period]))
    solved = solve(stacked(film, crystal(), compliance=[OPEN], resistance=[OPEN]), grid)
    thicker = in_time(grid, solved.sound[0].u_bottom - solved.sound[0].u_top)[0]
    growth = solved.profiles[0].fraction().item() * (5e-3 / (2.4e-3 * 2.7 * 6.42**2))
    np.testing.assert_allclose(thicker[:64], thicker[64:], atol=1e-5 * growth)
    assert thicker.mean() == pytest.approx(growth, rel=1e-5)
    assert np.ptp(thicker) > 0.5 * growth


# --- laws -----------------------------------------------------------------------------------------------


def three_layers(ambient=VACUUM, conductivity=0.2, loss=0.0):
    return stacked(
        metal(30.0, conductivity=conductivity, loss_time=loss),
        crystal(70.0, n_pump=1.45 + 0j, conductivity=1.3e-3, stress=1e-3),
        metal(25.0, n_pump=3 + 2j, electron_heat_capacity=4e-5, inverse_coupling=1e4, density=7.1),
        crystal(),
        compliance=[0.05, 0.0, 0.3],
        resistance=[1 / 1e-4, 1 / 2e-4, 1 / 5e-5],
        ambient=ambient,
    )


def momentum(solved, j):
    """Integral of rho s u over a medium, u integrated from the strain."""
    m, sound = solved.sample.media[j], solved.sound[j]
    s, d = solved.grid.s[0], m.thickness.item()
    if np.isinf(d):
        depth = 40 / min(sound.q.real.min(), solved.heat[j].q.real.min())
        z, weight = gauss_legendre(0.0, depth, panels=600)
        # u vanishes below: integral of u = -integral of z u'
        return m.density.item() * s * -((weight * z) @ strain(solved, j, z))
    z, weight = gauss_legendre(0.0, d, panels=60)
    return m.density.item() * s * (d * sound.u_top[0] + (weight * (d - z)) @ strain(solved, j, z))


@pytest.mark.parametrize("loss", [0.0, 0.08])
def test_momentum_of_an_unloaded_sample_stays_zero(loss):
    # Nothing pushes from outside: the integral of rho du/dt over all depths is zero at all times
    solved = solve(three_layers(loss=loss), AT_ONCE)
    parts = np.array([momentum(solved, j) for j in range(4)])
    np.testing.assert_array_less(np.abs(parts.sum(axis=0)), 1e-8 * np.abs(parts).max(axis=0))


def test_liquid_takes_the_momentum_that_the_sample_loses():
    # A plane wave into the liquid: pressure rho_0 v_0 du/dt on the surface
    water = liquid()
    solved = solve(three_layers(water), AT_ONCE)
    parts = np.array([momentum(solved, j) for j in range(4)])
    push = -(water.density * water.velocity).item() * AT_ONCE.s[0] * solved.sound[0].u_top[0]
    rate = AT_ONCE.s[0] * parts.sum(axis=0)
    np.testing.assert_allclose(rate, push, rtol=1e-7)


@pytest.mark.parametrize("loss", [0.0, 0.08])
def test_stress_passes_interfaces_and_springs_open_by_it(loss):
    solved = solve(three_layers(loss=loss), AT_ONCE)
    s = AT_ONCE.s

    def stress(j, z):
        m = solved.sample.media[j]
        return modulus(m, s) * strain(solved, j, z) - m.stress * lattice(solved, j, z)

    scale = np.abs(stress(0, [15.0]))
    assert (np.abs(stress(0, [0.0])) < 1e-9 * scale).all()
    for j, d in enumerate((30.0, 70.0, 25.0)):
        np.testing.assert_allclose(stress(j, [d]), stress(j + 1, [0.0]), rtol=1e-8)
        opening = solved.sound[j + 1].u_top - solved.sound[j].u_bottom
        expected = solved.sample.compliance[j] * stress(j, [d])
        np.testing.assert_allclose(opening, expected, rtol=1e-8, atol=1e-12 * np.abs(scale).max())


@pytest.mark.parametrize("loss", [0.0, 0.08])
def test_equation_of_motion_holds_inside(loss):
    # rho s^2 u = (c u' - beta T)', the derivative by central differences of fifth order
    solved = solve(three_layers(loss=loss), AT_ONCE)
    for j, z in ((0, 11.0), (1, 40.0), (2, 9.0), (3, 30.0)):
        m, h = solved.sample.media[j], 0.02
        at = z + h * np.arange(-3, 4)
        stress = modulus(m, AT_ONCE.s) * strain(solved, j, at) - m.stress * lattice(solved, j, at)
        slope = np.array([-1, 9, -45, 0, 45, -9, 1]) / (60 * h) @ stress
        nodes, weight = gauss_legendre(0.0, z, panels=40)
        u = solved.sound[j].u_top[0] + weight @ strain(solved, j, nodes)
        np.testing.assert_allclose(slope, m.density.item() * AT_ONCE.s[0] ** 2 * u, rtol=2e-7)


def test_displacement_at_the_bottom_is_the_integral_of_the_strain():
    solved = solve(three_layers(), AT_ONCE)
    for j, d in enumerate((30.0, 70.0, 25.0)):
        z, weight = gauss_legendre(0.0, d, panels=60)
        grown = solved.sound[j].u_top[0] + weight @ strain(solved, j, z)
        np.testing.assert_allclose(solved.sound[j].u_bottom[0], grown, rtol=1e-9)


def trace_parts(sample, delay, pump=400.0, probe=800.0, groups=None, rms=RMS):
    layout = columns(groups or [str(j) for j in range(len(sample.media))])
    return basis(sample, (pump, probe), time_grid(delay, rms, 0.0), one(0.0), layout, sets=1)[0]


@pytest.mark.parametrize("parts", [2, 50])
@pytest.mark.parametrize("loss", [0.0, 0.02])
def test_splitting_a_layer_changes_nothing(parts, loss):
    delay = np.linspace(-2, 80, 400)
    film = metal(60.0, electron_heat_capacity=5e-4, inverse_coupling=2e3, loss_time=loss, loss_exponent=0.8)
    slice_ = replace(film, thickness=one(60.0 / parts))
    ends = {"compliance": 0.03, "resistance": 1 / 2e-4}
    whole = stacked(film, crystal(), **{k: [v] for k, v in ends.items()})
    split = stacked(*[slice_] * parts, crystal(), **{k: [0.0] * (parts - 1) + [v] for k, v in ends.items()})
    expected = trace_parts(whole, delay, groups=["film", "base"])
    found = trace_parts(split, delay, groups=["film"] * parts + ["base"])
    peak = np.abs(expected).max(axis=1, keepdims=True)
    np.testing.assert_array_less(np.abs(found - expected) / peak, 1e-10)


@given(factor=st.floats(0.05, 20.0), compliance=st.floats(0.0, 2.0))
def test_only_density_ratios_matter(factor, compliance):
    # Every density, stiffness and thermal stress times the same factor: the same displacement
    delay = np.linspace(-1, 30, 60)
    media = metal(40.0), crystal()

    def scaled(m):
        return replace(m, density=m.density * factor, stress=m.stress * factor)

    plain = trace_parts(stacked(*media, compliance=[compliance]), delay)
    heavy = trace_parts(stacked(*map(scaled, media), compliance=[compliance / factor]), delay)
    peak = np.abs(plain).max(axis=1, keepdims=True)
    np.testing.assert_array_less(np.abs(heavy - plain) / peak, 1e-9)


# --- travel time and reflection -------------------------------------------------------------------------


def opaque(d, density, velocity):
    """A film that takes all light at its surface and keeps the heat there: its back adds echoes only."""
    return still(metal(d, density=density, velocity=velocity, n_pump=2 + 12j))


def echoes(film, base, delay, ambient=VACUUM, compliance=0.0, rms=RMS):
    """Displacement of the surface less that of a film without a back."""
    endless = replace(film, thickness=one(np.inf))
    with_back = surface(stacked(film, base, compliance=[compliance], ambient=ambient), delay, rms)
    return with_back - surface(stacked(endless, ambient=ambient), delay, rms)


SAPPHIRE = still(crystal(density=3.99, velocity=11.1844))  # c axis, CRC constants: 44.626 MRayl


@pytest.mark.parametrize(
    ("density", "velocity", "d", "expected"),
    [
        # Round-trip time 2 d / v, computed outside the library from handbook velocities
        (2.70, 6.420, 100.0, 31.153),  # Al
        (19.257, 5.220, 50.0, 19.157),  # W
        (19.283, 3.240, 30.0, 18.519),  # Au
        (4.506, 6.070, 200.0, 65.898),  # Ti
        (2.20, 5.968, 1000.0, 335.121),  # fused silica
        (2.3296, 8.4358, 100.0, 23.708),  # Si [100]
    ],
)
def test_echo_arrives_after_a_round_trip(density, velocity, d, expected):
    # The pulse of a heated skin is symmetric in displacement about the depth v t: the echo peaks at 2 d / v
    delay = expected + np.arange(-1.5, 1.5, 0.005)
    delay = np.concatenate([[-1.0], delay])
    echo = echoes(opaque(d, density, velocity), SAPPHIRE, delay)[1:]
    assert delay[1:][np.argmax(np.abs(echo))] == pytest.approx(expected, abs=0.006)


def test_echo_before_its_time_is_not_there():
    # The wave of the heated skin, exp(-0.38 z / nm), and six widths of the pulse run ahead of 2 d / v
    delay = np.linspace(-10, 400 / 6.42 - 6 * RMS - 50 / 6.42, 700)
    echo = echoes(opaque(200.0, 2.7, 6.42), SAPPHIRE, delay)
    whole = surface(stacked(opaque(np.inf, 2.7, 6.42)), delay)
    assert np.abs(echo).max() < 1e-6 * np.abs(whole).max()


AL_IMPEDANCE = 2.70 * 6.420
WATER = {"density": 0.9982, "velocity": 1.48235, "conductivity": 1e-22}


@pytest.mark.parametrize(
    ("ambient", "surface_reflection"),
    [
        (VACUUM, 1.0),
        # Al to water: -0.8427 for stress, computed from handbook impedances (17.334 and 1.480 MRayl); the
        # sign is opposite for displacement
        (liquid(**WATER), 0.8427),
    ],
    ids=["vacuum", "water"],
)
def test_successive_echoes_fall_by_both_reflections(ambient, surface_reflection):
    # Al to sapphire c: +0.4405 for stress, computed from handbook impedances. The surface moves the second
    # time as the first, one round trip later, times both reflections.
    d, per_trip = 150.0, 1000
    delay = 2 * d / 6.42 * np.arange(per_trip // 2, 5 * per_trip // 2) / per_trip
    motion = np.diff(echoes(opaque(d, 2.70, 6.420), SAPPHIRE, delay, ambient))
    first, second = motion[: per_trip - 1], motion[per_trip:]
    ratio = (first @ second) / (first @ first)
    assert ratio == pytest.approx(-0.4405 * surface_reflection, abs=1.5e-4)
    np.testing.assert_allclose(second, ratio * first, rtol=0, atol=2e-5 * np.abs(first).max())


def test_liquid_changes_launching_and_seeing_as_its_impedance_says():
    # Skin exp(-a z), growth G: downwards goes G / 2 [a / (a - q) - R a / (a + q)], the back returns
    # B exp(-2 q d) of it, the surface shows 1 + R of that and sends R down again; in vacuum R = 1
    d, film, s = 60.0, opaque(60.0, 2.70, 6.420), AT_ONCE.s
    a, q = 4 * np.pi * 12 / 400, s / 6.42

    def echo(ambient):
        seen = []
        for media in ((film, SAPPHIRE), (replace(film, thickness=one(np.inf)),)):
            solved = solve(stacked(*media, ambient=ambient), AT_ONCE)
            seen.append(solved.sound[0].u_top / (1 - solved.pump.reflectance))
        return seen[0] - seen[1]

    def formula(z0):
        r = (AL_IMPEDANCE - z0) / (AL_IMPEDANCE + z0)
        back = (AL_IMPEDANCE - 3.99 * 11.1844) / (AL_IMPEDANCE + 3.99 * 11.1844) * np.exp(-2 * q * d)
        return (1 + r) * (a / (a - q) - r * a / (a + q)) * back / (1 - r * back)

    wet, dry = echo(liquid(**WATER)), echo(VACUUM)
    np.testing.assert_allclose(wet / dry, formula(0.9982 * 1.48235) / formula(0.0), rtol=1e-6)


def test_spring_delays_and_shapes_the_echo_as_its_closed_form():
    # Spectrum of the echo under a spring over that of a free back is R(s) of Schoenberg 1980 (R = 1 there)
    d, stiffness = 150.0, 8.0
    film, rms = opaque(d, 2.70, 6.420), 0.6
    delay = np.arange(-2, 88, 0.05)  # holds the first echo at 46.7 ps alone
    springy = echoes(film, SAPPHIRE, delay, compliance=1 / stiffness, rms=rms)
    free = echoes(film, SAPPHIRE, delay, compliance=OPEN, rms=rms)
    z1, z2 = AL_IMPEDANCE, 3.99 * 11.1844
    for frequency in (0.05, 0.1, 0.2):
        s = 2j * np.pi * frequency
        ratio = (np.exp(-s * delay) @ springy) / (np.exp(-s * delay) @ free)
        slip = s * z1 * z2 / stiffness
        assert ratio == pytest.approx((z1 - z2 + slip) / (z1 + z2 + slip), abs=2e-3)


# --- attenuation ----------------------------------------------------------------------------------------

V = 5.0


def wavenumber(w, **loss):
    """q at real frequency: u goes as exp(-q z)."""
    m = metal(velocity=V, **loss)
    s = 1j * np.atleast_1d(np.asarray(w, float))[None]
    return (s * np.sqrt(m.density / modulus(m, s)))[0]


FREQUENCIES = 2 * np.pi * np.array([0.02, 0.1, 0.3])


def test_kelvin_voigt_attenuation():
    # Amplitude per length w^2 tau / 2 v at small loss
    found = wavenumber(FREQUENCIES, loss_time=1e-4).real
    np.testing.assert_allclose(found, FREQUENCIES**2 * 1e-4 / (2 * V), rtol=1e-5)


@pytest.mark.parametrize("y", [0.2, 0.5, 0.9])
def test_power_law_attenuation(y):
    # (w / 2 v) (w tau)^y sin(pi y / 2) at small loss: the power of frequency is 1 + y
    tau = 1e-7 ** (1 / y)
    found = wavenumber(FREQUENCIES, loss_time=tau, loss_exponent=y).real
    expected = FREQUENCIES / (2 * V) * (FREQUENCIES * tau) ** y * np.sin(np.pi * y / 2)
    np.testing.assert_allclose(found, expected, rtol=1e-5)


@pytest.mark.parametrize("y", [0.2, 0.5, 0.9])
def test_power_law_disperses_as_causality_demands(y):
    # Attenuation a |w|^n goes with 1/c(w) - 1/c(w0) = a tan(n pi / 2) (|w|^(n-1) - |w0|^(n-1)), the
    # time-causal form of Kramers and Kronig (Szabo 1995, Waters et al. 2000; from memory)
    tau, n = 1e-6 ** (1 / y), 1 + y
    q = wavenumber(FREQUENCIES, loss_time=tau, loss_exponent=y)
    slowness = q.imag / FREQUENCIES
    a = (q.real / FREQUENCIES**n)[0]
    expected = a * np.tan(n * np.pi / 2) * (FREQUENCIES ** (n - 1) - FREQUENCIES[0] ** (n - 1))
    np.testing.assert_allclose(slowness - slowness[0], expected, rtol=1e-4, atol=1e-15)


def test_constant_quality_attenuation_and_dispersion():
    # Far above w0: w / (2 Q v) at small loss, and ln(c / c0) = ln(w / w0) / (pi Q) (Kjartansson 1979; from
    # memory)
    quality, w0 = 2000.0, 2 * np.pi * 1e-4
    q = wavenumber(FREQUENCIES, inverse_quality=1 / quality, quality_frequency=w0)
    np.testing.assert_allclose(q.real, FREQUENCIES / (2 * quality * V), rtol=3e-3)
    speed = np.log(FREQUENCIES / q.imag / V)
    np.testing.assert_allclose(speed, np.log(FREQUENCIES / w0) / (np.pi * quality), rtol=1e-4)


def test_constant_quality_begins_at_its_lowest_frequency():
    # Above w0 the loss angle of the modulus is arctan(1 / Q), below there is no loss; the velocity is the static
    m = metal(velocity=V, inverse_quality=0.02, quality_frequency=0.1)
    below, above = (modulus(m, 1j * np.array([w]))[0] for w in ([1e-6, 0.03, 0.09], [0.11, 0.5, 20.0]))
    np.testing.assert_allclose(below.imag, 0.0, atol=1e-12)
    np.testing.assert_allclose(below[0].real, 2.7 * V**2, rtol=1e-9)
    np.testing.assert_allclose(above.imag / above.real, 0.02, rtol=1e-6)


LOSSES = {
    "Kelvin-Voigt": {"loss_time": 0.05},
    "power law": {"loss_time": 1e-3, "loss_exponent": 0.5},
    "constant Q": {"inverse_quality": 0.05, "quality_frequency": 2 * np.pi * 0.03},
}


@pytest.mark.parametrize("law", LOSSES)
def test_loss_sends_nothing_ahead_of_the_pulse(law):
    # A modulus that is no causal transform would show before time zero, and would make the trace depend on the
    # window in which it is computed
    film = opaque(60.0, 2.7, 6.42)
    lossy = replace(film, **{k: one(v) for k, v in LOSSES[law].items()})
    delay = np.linspace(-15, 60, 600)
    u, longer = (
        in_time(grid, solve(stacked(lossy, SAPPHIRE), grid).sound[0].u_top)[0]
        for grid in (time_grid(delay, RMS, earliest=0.0, stretch=x) for x in (1.3, 3.0))
    )
    assert np.abs(u[delay < -7 * RMS]).max() < 2e-6 * np.abs(u).max()
    np.testing.assert_allclose(u, longer, rtol=0, atol=4e-6 * np.abs(u).max())
    plain = surface(stacked(film, SAPPHIRE), delay)
    assert np.abs(u - plain).max() > 1e-3 * np.abs(plain).max()


@pytest.mark.parametrize("law", LOSSES)
def test_loss_acts_on_launching_and_on_the_way(law):
    # Heat frozen in a skin exp(-a z) of a film with a free back. The surface gives way by G a / (a + q) and
    # the wave G a q / (a^2 - q^2) goes down, to come back every round trip; G = beta F / (C c),
    # q = s sqrt(rho / c)
    film = opaque(60.0, 2.7, 6.42)
    lossy = replace(film, **{k: one(v) for k, v in LOSSES[law].items()})
    s, a = AT_ONCE.s, 4 * np.pi * 12 / 400
    solved = solve(stacked(lossy, SAPPHIRE, compliance=[OPEN]), AT_ONCE)
    c = modulus(lossy, s)
    q, trip = s * np.sqrt(2.7 / c), np.exp(-2 * 60.0 * s * np.sqrt(2.7 / c))
    growth = lossy.stress / lossy.heat_capacity / c * solved.profiles[0].fraction() / s
    wave = growth * a * q / (a**2 - q**2)
    expected = -growth * a / (a + q) + 2 * wave * trip / (1 - trip)
    np.testing.assert_allclose(solved.sound[0].u_top, expected, rtol=1e-6)


# --- Brillouin oscillations -----------------------------------------------------------------------------


def oscillation(delay, signal, guess):
    """Frequency (THz) of a damped oscillation on a slow background, by least squares."""
    signal = signal / np.abs(signal).max()

    def design(x):
        envelope = np.exp(-x[1] * delay)
        waves = [f(2 * np.pi * x[0] * delay) * envelope for f in (np.cos, np.sin)]
        return np.stack([*waves, *(np.polynomial.chebyshev.chebvander(_unit(delay), 5).T)], axis=1)

    def residual(x):
        a = design(x)
        return signal - a @ np.linalg.lstsq(a, signal, rcond=None)[0]

    return optimize.least_squares(residual, [guess, 0.0], x_scale=[guess / 100, 1e-3]).x[0]


def _unit(t):
    return 2 * (t - t[0]) / (t[-1] - t[0]) - 1


@pytest.mark.parametrize(
    ("wavelength", "expected"), [(400.0, 9.958e-3), (532.0, 7.442e-3), (800.0, 4.924e-3)]
)
def test_brillouin_frequency_of_water(wavelength, expected):
    # 2 n v / lambda, computed outside the library: n of water at 20 C from Daimon and Masumura 2007, v from
    # IAPWS-95, 1482.346 m/s
    water = material("water")
    n, v = complex(water.index_at(wavelength)), water.velocity
    sample = stacked(still(metal(50.0)), SAPPHIRE, ambient=liquid(n_probe=n, density=0.9982, velocity=v))
    delay = np.linspace(150, 900, 1500)
    parts = trace_parts(sample, delay, probe=wavelength, groups=["water", "Al", "base"], rms=1.0)
    found = oscillation(delay, parts[0], expected * 1.01)
    assert found == pytest.approx(2 * n.real * v / wavelength, rel=1e-4)
    assert found == pytest.approx(expected, rel=3e-4)


def test_brillouin_frequency_of_silicon_at_400_nm():
    # 2 n v / lambda = 236.75 GHz from Green 2008 and the CRC's constants, computed outside the library
    si = material("Si", "100")
    n = complex(si.index_at(400.0))
    base = still(crystal(n_pump=n, n_probe=n, density=si.density, velocity=si.velocity))
    delay = np.linspace(2, 40, 600)
    parts = trace_parts(stacked(base), delay, probe=400.0)
    found = oscillation(delay, parts[0], 0.236)
    assert found == pytest.approx(2 * n.real * si.velocity / 400, rel=1e-4)
    assert found == pytest.approx(0.236751, rel=1e-3)
