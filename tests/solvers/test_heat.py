"""Heat flow and carriers of the independent solver against closed forms.

Closed forms are elementary solutions, derived anew from the equation beside them, unless a source is named.
"""

from dataclasses import replace

import numpy as np
import pytest

from .heat import assemble_carriers, assemble_heat, middle_carriers, middle_temperature
from .samples import Joint, Sample, build_mesh
from .transfer_matrices import Beam

PUMP = Beam(400.0)


def march_heat(heat, temperature, steps):
    none = np.zeros_like(temperature)
    for _ in range(steps):
        temperature = 2 * middle_temperature(heat, temperature, none) - temperature
    return temperature


def test_heat_from_a_plane_source_spreads_as_a_gaussian(si):
    # Energy q at the surface of an insulated half-space: T = q / sqrt(pi kappa C t) exp(-z^2 C / (4 kappa t))
    sample, step = Sample((si,)), 0.02
    mesh = build_mesh(sample, step, 1000, PUMP)
    heat = assemble_heat(sample, mesh, step)
    start, late, z = 4.0, 20.0, np.cumsum(mesh.width) - mesh.width / 2

    def green(t):
        return np.exp(-(z**2) * si.heat_capacity / (4 * si.conductivity * t)) / np.sqrt(
            np.pi * si.conductivity * si.heat_capacity * t
        )

    temperature = march_heat(heat, green(start), round((late - start) / step))
    np.testing.assert_allclose(temperature, green(late), atol=2e-5 * green(late)[0])
    # 800 solves of a matrix of condition 1e4: rounding stays under 1e-10
    assert heat.capacity @ temperature == pytest.approx(heat.capacity @ green(start), rel=1e-10)


def test_boundary_conductance_equalises_two_thin_films(al, si):
    # dT_difference/dt = -G (1 / C1 d1 + 1 / C2 d2) T_difference, when conduction inside is fast
    sample = Sample(
        (replace(al, thickness=4.0, conductivity=1e3), replace(si, thickness=7.0, conductivity=1e3)),
        (Joint(conductance=2e-4),),
    )
    mesh = build_mesh(sample, 0.01, 1, PUMP)
    heat = assemble_heat(sample, mesh, 0.01)
    end = march_heat(heat, np.where(mesh.medium == 0, 1.0, 0.0), 4000)
    rate = 2e-4 * (1 / (al.heat_capacity * 4) + 1 / (si.heat_capacity * 7))
    assert end[0] - end[-1] == pytest.approx(np.exp(-40 * rate), rel=1e-4)


def test_electrons_hand_their_heat_to_the_lattice(al):
    # Uniform film: T_e - T_l decays at g (1 / C_e + 1 / C_l)
    metal = replace(al, thickness=20.0, electron_heat_capacity=2.7e-5, electron_phonon_coupling=2.4e-4)
    sample = Sample((metal,))
    mesh = build_mesh(sample, 0.002, 1, PUMP)
    heat = assemble_heat(sample, mesh, 0.002)
    temperature = np.zeros(len(heat.capacity))
    temperature[heat.hot] = 1.0
    end = march_heat(heat, temperature, 150)
    rate = 2.4e-4 * (1 / 2.7e-5 + 1 / al.heat_capacity)
    np.testing.assert_allclose(end[heat.hot] - end[heat.lattice], np.exp(-0.3 * rate), rtol=2e-4)


def test_a_conducting_lattice_smooths_itself_without_electrons(al):
    # With g negligible, cos(pi z / d) in the lattice decays at kappa_l / C_l (pi / d)^2
    metal = replace(
        al,
        thickness=20.0,
        electron_heat_capacity=2.7e-5,
        electron_phonon_coupling=1e-12,
        lattice_conductivity=0.05,
    )
    sample = Sample((metal,))
    mesh = build_mesh(sample, 0.01, 1, PUMP)
    heat = assemble_heat(sample, mesh, 0.01)
    temperature = np.zeros(len(heat.capacity))
    temperature[heat.lattice] = mode = np.cos(np.pi * (np.cumsum(mesh.width) - mesh.width / 2) / 20)
    end = march_heat(heat, temperature, 300)
    rate = 0.05 / al.heat_capacity * (np.pi / 20) ** 2
    np.testing.assert_allclose(end[heat.lattice], mode * np.exp(-3 * rate), atol=1e-4)


def test_carriers_die_of_lifetime_and_surface_and_give_their_energy_back(si):
    # Slab, thin against diffusion: N decays at 1 / lifetime + surface velocity / thickness
    semiconductor = replace(
        si,
        thickness=5.0,
        carrier_energy=0.5,
        carrier_diffusivity=1e4,
        carrier_lifetime=8.0,
        surface_recombination=0.4,
        prompt_heat=0.2,
    )
    sample, step = Sample((semiconductor,)), 0.01
    mesh = build_mesh(sample, step, 1, PUMP)
    carriers = assemble_carriers(sample, mesh, step)
    density, heat = np.ones(len(mesh.width)), 0.0
    for _ in range(1000):
        middle = middle_carriers(carriers, density, np.zeros(len(mesh.width)))
        heat += step * carriers.returned @ middle
        density = 2 * middle - density
    np.testing.assert_allclose(density, np.exp(-10 * (1 / 8 + 0.4 / 5)), rtol=3e-4)
    # 1000 solves of a matrix of condition 1e7, as diffusion is made fast: rounding stays under 1e-8
    assert heat == pytest.approx(0.8 * 0.5 * mesh.width @ (1 - density), rel=1e-8)
