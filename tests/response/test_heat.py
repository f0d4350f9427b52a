"""Heat after the pulse against closed forms of conduction, conservation of energy and an independent solver.

Closed forms are elementary solutions, derived anew from the equation beside them, unless a source is named.
"""

from dataclasses import replace

import numpy as np
import pytest
from build import (
    AT_ONCE,
    OPEN,
    crystal,
    gauss_legendre,
    in_time,
    lattice,
    liquid,
    metal,
    quick_grid,
    solve,
    stacked,
    temperature,
)
from hypothesis import given
from hypothesis import strategies as st
from records import one
from scipy import special
from solvers import samples as independent
from solvers.heat import assemble_heat, middle_temperature
from solvers.transfer_matrices import Beam

from inverse.response.basis import basis, columns

RMS = 0.3
DELAY = np.concatenate([np.linspace(-4, 4, 81), np.linspace(4.3, 120, 250)])
AFTER = DELAY > 7 * RMS


def met_by_pulse(response, delay, rms=RMS):
    """A response that begins at once, at delays after the pulse: the mean over the pulse."""
    x, weight = np.polynomial.legendre.leggauss(120)
    x, weight = 7 * rms * x, 7 * rms * weight
    gaussian = np.exp(-((x / rms) ** 2) / 2) / (np.sqrt(2 * np.pi) * rms)
    return response(delay[:, None] - x) @ (gaussian * weight)


def half_space(z, t, m, absorbed, alpha):
    """Insulated half-space heated at t = 0 by absorbed alpha exp(-alpha z); images of the Gaussian kernel."""
    diffusivity = m.conductivity.item() / m.heat_capacity.item()
    root = np.sqrt(diffusivity * t)
    a, b = alpha * root, z / (2 * root)
    # exp(a^2 -+ 2 a b) erfc(a -+ b), written so that no factor overflows
    ahead = np.exp(np.minimum(a**2 - 2 * a * b, 0)) * special.erfc(a - b)
    near = np.where(a < b, ahead, np.exp(-(b**2)) * special.erfcx(np.maximum(a - b, 0)))
    far = np.exp(-(b**2)) * special.erfcx(a + b)
    return absorbed * alpha / m.heat_capacity.item() * (near + far) / 2


@pytest.mark.parametrize("z", [0.0, 3.0, 25.0, 120.0])
def test_half_space_cools_as_the_closed_form(z):
    m = metal(conductivity=0.03)
    grid = quick_grid(DELAY)
    solved = solve(stacked(m), grid)
    absorbed = 1 - solved.pump.reflectance.item()
    alpha = 4 * np.pi * m.n_pump.item().imag / 400
    found = in_time(grid, temperature(solved, 0, [z]))[0]
    expected = met_by_pulse(lambda t: half_space(z, t, m, absorbed, alpha), DELAY[AFTER])
    peak = absorbed * alpha / m.heat_capacity.item()
    np.testing.assert_allclose(found[AFTER], expected, rtol=0, atol=1e-5 * peak)
    assert np.abs(found[DELAY < -7 * RMS]).max() < 1e-5 * peak


def test_thin_heated_skin_cools_as_the_inverse_root_of_time():
    # T(0, t) = F / sqrt(pi kappa C t): heat F at the surface of a half-space (Carslaw and Jaeger, Conduction
    # of Heat in Solids, 1959; from memory). A skin of 1 nm is a surface after 50 ps at 64 nm2/ps.
    m = metal(n_pump=2 + 30j, conductivity=0.154)
    delay = np.linspace(50, 900, 60)
    grid = quick_grid(delay)
    solved = solve(stacked(m), grid)
    absorbed = 1 - solved.pump.reflectance.item()
    found = in_time(grid, temperature(solved, 0, [0.0]))[0]
    expected = absorbed / np.sqrt(np.pi * m.conductivity.item() * m.heat_capacity.item() * delay)
    np.testing.assert_allclose(found, expected, rtol=1e-3)


def heat_content(solved, j):
    """Heat in a medium per area: both temperatures, by quadrature over its depth."""
    m, slow = solved.sample.media[j], np.abs(solved.heat[j].q.real).min()
    depth = m.thickness.item()
    if np.isinf(depth):
        depth = 40 / min(slow, solved.profiles[j].p.item() or np.inf)
    z, weight = gauss_legendre(0.0, depth, panels=200)
    hot = temperature(solved, j, z) * m.electron_heat_capacity + lattice(solved, j, z) * m.heat_capacity
    return weight @ hot


def three_layers(coupling=5e-5, ambient=None):
    return stacked(
        metal(30.0, electron_heat_capacity=2.7e-5, inverse_coupling=1 / coupling),
        crystal(70.0, n_pump=1.45 + 0j, conductivity=1.3e-3),
        metal(25.0, conductivity=0.17, electron_heat_capacity=4e-5, inverse_coupling=1e4),
        crystal(),
        resistance=[1 / 1e-4, 1 / 2e-4, 1 / 5e-5],
        **({"ambient": ambient} if ambient else {}),
    )


@pytest.mark.parametrize("coupling", [np.inf, 5e-4, 5e-6])
def test_heat_in_the_sample_is_what_was_absorbed(coupling):
    # Adiabatic surface: total heat = (1 - R) F from t = 0 on, transform (1 - R) / s
    solved = solve(three_layers(coupling), AT_ONCE)
    total = sum(heat_content(solved, j) for j in range(4))
    absorbed = 1 - solved.pump.reflectance.item()
    np.testing.assert_allclose(total * AT_ONCE.s[0], absorbed, rtol=1e-9)


def test_heat_that_a_liquid_takes_is_what_the_sample_loses():
    water = liquid(conductivity=0.05)  # conducts well, so that it takes a share worth measuring
    solved = solve(three_layers(ambient=water), AT_ONCE)
    s = AT_ONCE.s[0]
    total = sum(heat_content(solved, j) for j in range(4))
    # T exp(q z) in the liquid: content C T / q, q = sqrt(s C / kappa)
    taken = solved.surface[0] * np.sqrt(water.heat_capacity * water.conductivity / s)[0]
    assert np.abs(taken / total).max() > 0.02
    absorbed = 1 - solved.pump.reflectance.item()
    np.testing.assert_allclose((total + taken) * s, absorbed, rtol=1e-9)
    np.testing.assert_allclose(solved.surface, temperature(solved, 0, [0.0]), rtol=1e-10)


def test_heat_is_kept_at_all_times():
    grid = quick_grid(DELAY)
    solved = solve(three_layers(), grid)
    total = in_time(grid, sum(heat_content(solved, j) for j in range(4))[None])[0]
    absorbed = 1 - solved.pump.reflectance.item()
    np.testing.assert_allclose(total, absorbed * special.ndtr(DELAY / RMS), rtol=0, atol=1e-5 * absorbed)


def cold_substrate():
    """Transparent and so rich in heat that it stays cold."""
    return crystal(n_pump=1.5 + 0j, heat_capacity=1e3, conductivity=1e4)


def test_film_cools_through_its_boundary_as_an_exponential():
    # Film that conducts well on a cold substrate: C d dT/dt = -G T
    d, conductance = 20.0, 2e-3
    m = metal(d, conductivity=1e4)
    grid = quick_grid(DELAY)
    solved = solve(stacked(m, cold_substrate(), resistance=[1 / conductance]), grid)
    start = solved.profiles[0].fraction().item() / (m.heat_capacity.item() * d)
    rate = conductance / (m.heat_capacity.item() * d)
    found = in_time(grid, temperature(solved, 0, [d / 2]))[0]
    expected = met_by_pulse(lambda t: start * np.exp(-rate * t), DELAY[AFTER])
    np.testing.assert_allclose(found[AFTER], expected, rtol=0, atol=1e-5 * start)


def test_boundary_without_conductance_keeps_the_heat():
    d = 20.0
    m = metal(d, conductivity=1e4)
    grid = quick_grid(DELAY)
    solved = solve(stacked(m, cold_substrate(), resistance=[OPEN]), grid)
    start = solved.profiles[0].fraction().item() / (m.heat_capacity.item() * d)
    found = in_time(grid, temperature(solved, 0, [0.0, d]))
    np.testing.assert_allclose(found[:, AFTER], start, rtol=1e-5)
    assert np.abs(in_time(grid, temperature(solved, 1, [0.0]))).max() < 1e-9 * start


def test_ideal_boundary_leaves_no_step_in_temperature():
    solved = solve(stacked(metal(20.0), crystal()), AT_ONCE)
    np.testing.assert_allclose(temperature(solved, 0, [20.0]), temperature(solved, 1, [0.0]), rtol=1e-10)


def test_electrons_and_lattice_meet_at_the_shared_temperature():
    # Isolated uniform film: T_e - T_l decays at g (1/C_e + 1/C_l), both end at F / (d (C_e + C_l))
    d, c_e, g = 10.0, 3e-4, 2e-4
    m = metal(d, conductivity=1e5, electron_heat_capacity=c_e, inverse_coupling=1 / g)
    c_l = m.heat_capacity.item()
    delay = np.linspace(-3, 40, 300)
    after = delay > 7 * RMS
    grid = quick_grid(delay)
    solved = solve(stacked(m, cold_substrate(), resistance=[OPEN]), grid)
    heat = solved.profiles[0].fraction().item() / d
    rate, end = g * (1 / c_e + 1 / c_l), heat / (c_e + c_l)
    electrons = met_by_pulse(lambda t: end + heat * c_l / c_e / (c_e + c_l) * np.exp(-rate * t), delay[after])
    ions = met_by_pulse(lambda t: end * (1 - np.exp(-rate * t)), delay[after])
    tolerance = 1e-5 * heat / c_e
    found = in_time(grid, temperature(solved, 0, [d / 2]))[0]
    np.testing.assert_allclose(found[after], electrons, rtol=0, atol=tolerance)
    found = in_time(grid, lattice(solved, 0, [d / 2]))[0]
    np.testing.assert_allclose(found[after], ions, rtol=0, atol=tolerance)
    assert found[-1] == pytest.approx(end, rel=2e-5)


def trace_parts(sample, delay=DELAY):
    layout = columns([str(j) for j in range(len(sample.media))])
    return basis(sample, (400.0, 800.0), quick_grid(delay), one(0.0), layout, sets=1)[0]


def test_infinite_coupling_is_one_temperature_with_both_capacities():
    bond = {"resistance": [1 / 2e-4], "compliance": [0.02]}
    hot = metal(40.0, electron_heat_capacity=5e-4, inverse_coupling=0.0)
    plain = metal(40.0, heat_capacity=2.4e-3 + 5e-4)
    expected = trace_parts(stacked(plain, crystal(), **bond))
    peak = np.abs(expected).max(axis=1, keepdims=True)
    for coupling in (0.0, 1e-12):  # ps K/GPa: g = inf, and 1e9 times aluminium's
        film = replace(hot, inverse_coupling=one(coupling))
        found = trace_parts(stacked(film, crystal(), **bond))
        np.testing.assert_array_less(np.abs(found - expected) / peak, 1e-10)
    slow = trace_parts(stacked(replace(hot, inverse_coupling=one(1 / 2.4e-4)), crystal(), **bond))
    assert np.abs(slow - expected).max() > 1e-2 * peak.min()


def test_uncoupled_lattice_stays_cold():
    m = metal(40.0, electron_heat_capacity=5e-4, inverse_coupling=1e15)
    grid = quick_grid(DELAY)
    solved = solve(stacked(m, crystal()), grid)
    electrons, ions = (in_time(grid, f(solved, 0, [0.0]))[0] for f in (temperature, lattice))
    assert np.abs(ions).max() < 1e-9 * np.abs(electrons).max()


def independent_medium(m, thickness):
    coupling = m.inverse_coupling.item()
    return independent.Medium(
        thickness=thickness,
        density=m.density.item(),
        velocity=m.velocity.item(),
        n_probe=m.n_probe.item(),
        n_pump=m.n_pump.item(),
        heat_capacity=m.heat_capacity.item(),
        conductivity=m.conductivity.item(),
        thermal_stress=m.stress.item(),
        electron_heat_capacity=m.electron_heat_capacity.item(),
        electron_phonon_coupling=1 / coupling if coupling else np.inf,
    )


def test_two_temperatures_agree_with_finite_volumes():
    # Slow coupling, a weak thermal bond, the half-space's own skin: electrons and lattice at the top and
    # bottom of the film, and below it. Cells of 0.13 nm and steps of 0.02 ps are good to 1e-3 here.
    film = metal(25.0, electron_heat_capacity=2.7e-5, inverse_coupling=1 / 4e-5, conductivity=0.05)
    base = crystal()
    times = 0.02 * np.arange(1500) - 7 * RMS
    last, step = times[-1], 0.02
    sample = independent.Sample(
        (independent_medium(film, 25.0), independent_medium(base, np.inf)),
        (independent.Joint(conductance=1e-4),),
    )
    mesh = independent.build_mesh(sample, step, len(times), Beam(400.0))
    heat = assemble_heat(sample, mesh, step)
    grid = quick_grid(np.array([0.5, 2.0, 8.0, last]))
    solved = solve(stacked(film, base, resistance=[1 / 1e-4]), grid)

    edges = np.concatenate([[0], np.cumsum(mesh.width)])
    absorbed = np.concatenate([_absorbed(solved, j, edges, mesh) for j in (0, 1)])
    state, history = np.zeros(len(heat.capacity)), []
    for t in times:
        power = np.zeros(len(heat.capacity))
        strength = np.exp(-(((t + step / 2) / RMS) ** 2) / 2) / (np.sqrt(2 * np.pi) * RMS)
        power[heat.hot] = strength * absorbed
        state = 2 * middle_temperature(heat, state, power) - state
        history.append(state)
    at = [np.argmin(np.abs(times + step - t)) for t in (0.5, 2.0, 8.0, last)]
    history = np.array(history)[at]

    cells = [0, mesh.joints[0] - 1, mesh.joints[0], mesh.joints[0] + 10]
    centre = (edges[:-1] + edges[1:]) / 2
    peak = np.abs(history).max()
    for cell in cells:
        j = int(mesh.medium[cell])
        z = centre[cell] - (25.0 if j else 0.0)
        found = in_time(grid, temperature(solved, j, [z]))[0]
        np.testing.assert_allclose(found, history[:, heat.hot[cell]], rtol=0, atol=1e-3 * peak)
        found = in_time(grid, lattice(solved, j, [z]))[0]
        np.testing.assert_allclose(found, history[:, heat.lattice[cell]], rtol=2e-3, atol=1e-5 * peak)


def _absorbed(solved, j, edges, mesh):
    """Share of the light that each cell of medium j takes: exponential and interference integrated."""
    f, d = solved.profiles[j], solved.sample.media[j].thickness.item()
    own = edges[np.flatnonzero(mesh.medium == j)[0] : np.flatnonzero(mesh.medium == j)[-1] + 2]
    z = own - own[0]
    p, x = f.p.item(), f.x.item()
    down = -f.top.item() * np.exp(-p * z) / p
    up = 0.0 if np.isinf(d) else f.bottom.item() * np.exp(-p * (d - z)) / p
    beat = 2 * (f.beat.item() * np.exp(1j * x * z) / (1j * x)).real
    return np.diff(down + up + beat)


@given(share=st.floats(0.05, 0.95))
def test_splitting_a_layer_leaves_the_temperature(share):
    whole = solve(stacked(metal(40.0), crystal(), resistance=[1 / 1e-4]), AT_ONCE)
    pieces = metal(40.0 * share), metal(40.0 * (1 - share)), crystal()
    split = solve(stacked(*pieces, resistance=[0.0, 1 / 1e-4]), AT_ONCE)
    np.testing.assert_allclose(temperature(split, 0, [0.0]), temperature(whole, 0, [0.0]), rtol=1e-9)
    np.testing.assert_allclose(temperature(split, 2, [5.0]), temperature(whole, 1, [5.0]), rtol=1e-9)
