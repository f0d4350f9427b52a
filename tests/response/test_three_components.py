"""Three-component sound: limits, conservation, conversion, and echoes where Christoffel's equation puts them."""

from dataclasses import replace

import numpy as np
import pytest
from build import (
    AT_ONCE,
    OPEN,
    VACUUM,
    Solved,
    crystal,
    gauss_legendre,
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

from inverse.elastic import StiffnessTensor, plane_waves, rotation_about_axis
from inverse.response.blocks import BlockEnds, ascend_blocks
from inverse.response.detection import medium_response
from inverse.response.heat import heat_field
from inverse.response.inverse_laplace import to_delays
from inverse.response.light import absorption, light_field
from inverse.response.port import reflection
from inverse.response.solids import DepthElastic, depth_elastic, interface_compliance
from inverse.response.sound import sound_field
from inverse.response.three_detection import three_response
from inverse.response.three_sound import three_sound_field

# GaN, Brillouin scattering 1996, GPa; density 6.10 g/cm3.
NITRIDE = StiffnessTensor.hexagonal(c11=390.0, c12=145.0, c13=106.0, c33=398.0, c44=105.0)
# CRC constants, GPa.
SAPPHIRE = StiffnessTensor.trigonal(c11=497.35, c12=163.97, c13=112.2, c14=-23.58, c33=499.11, c44=147.39)


def isotropic(medium, ratio: float = 0.3) -> DepthElastic:
    c33 = float(medium.density.item() * medium.velocity.item() ** 2)
    tensor = StiffnessTensor.isotropic(c11=c33, c44=ratio * c33)
    return depth_elastic(tensor.voigt[None], np.array([[0.0, 0.0, medium.stress.item()]]))


def three(solved, solids, compliance=None):
    """Three-component sound of a problem that `solve` has solved as far as heat."""
    sample, grid = solved.sample, solved.grid
    compliance = compliance or [interface_compliance(c) for c in sample.compliance]
    return three_sound_field(
        sample.media, solids, compliance, sample.ambient, solved.profiles, solved.heat, grid.s,
        lambda t: np.exp(-grid.s * t),
    )  # fmt: skip


SAMPLES = {
    "welded": stacked(metal(60.0), crystal()),
    "sprung": stacked(
        metal(60.0), metal(20.0, density=19.0, velocity=5.2), crystal(), compliance=[0.1, 0.02]
    ),
    "open": stacked(metal(60.0), crystal(), compliance=[OPEN]),
    "thin": stacked(metal(0.5), crystal()),
    "lossy": stacked(metal(60.0, loss_time=0.01), crystal(inverse_quality=0.01), compliance=[0.05]),
    "under a liquid": stacked(metal(60.0), crystal(), ambient=liquid()),
    "hot": stacked(metal(60.0, electron_heat_capacity=2.7e-5, inverse_coupling=1 / 3e-4), crystal()),
}


@pytest.mark.parametrize("name", sorted(SAMPLES))
def test_isotropic_layers_give_the_scalar_answer(name: str) -> None:
    solved = solve(SAMPLES[name], AT_ONCE)
    fields = three(solved, [isotropic(m) for m in solved.sample.media])
    for j, (found, scalar) in enumerate(zip(fields, solved.sound, strict=True)):
        scale = np.abs(scalar.u_top)
        assert np.all(np.abs(found.u_top - scalar.u_top) < 1e-10 * scale)
        assert np.all(np.abs(found.u_bottom - scalar.u_bottom) < 1e-10 * scale)
        for axis in (0, 1):
            assert np.all(np.abs(found.at_top(axis)) < 1e-10 * scale)
        profile, heat, depth = solved.profiles[j], solved.heat[j], solved.sample.media[j].thickness
        seen = three_response(reflection(solved.probe), j, depth, profile, heat, found)
        expected = medium_response(reflection(solved.probe), j, depth, profile, heat, scalar)
        np.testing.assert_allclose(seen.strain, expected.strain, rtol=1e-9)
        np.testing.assert_array_equal(seen.heat, expected.heat)


def membrane(*media, compliance=None) -> Solved:
    """What `solve` gives, with vacuum below the last medium."""
    sample = replace(stacked(*media, compliance=compliance), backing=VACUUM)
    pump, probe = (
        light_field(*sample.light(beam), w, VACUUM.n_pump) for beam, w in (("pump", 400.0), ("probe", 800.0))
    )
    profiles = [absorption(pump, j) for j in range(len(media))]
    heat, surface = heat_field(
        media, sample.resistance, VACUUM, profiles, AT_ONCE.s, np.ones((1, 1), dtype=complex)
    )
    sound = sound_field(
        media, sample.compliance, VACUUM, profiles, heat, AT_ONCE.s, lambda t: np.exp(-AT_ONCE.s * t)
    )
    return Solved(sample, AT_ONCE, pump, probe, profiles, heat, surface, sound)


def test_a_membrane_of_isotropic_layers_is_the_scalar_one() -> None:
    solved = membrane(metal(60.0), crystal(40.0), compliance=[0.05])
    fields = three(solved, [isotropic(m) for m in solved.sample.media])
    for found, scalar in zip(fields, solved.sound, strict=True):
        np.testing.assert_allclose(found.u_top, scalar.u_top, rtol=1e-10)
        np.testing.assert_allclose(found.u_bottom, scalar.u_bottom, rtol=1e-10)


def test_a_tilted_membrane_keeps_its_momentum() -> None:
    # Nothing pulls at a free membrane: the integral of density x displacement stays zero in every component.
    sample, solids = cut_film(35.0, 40.0, stress=(2e-3, 0.0, 5e-3))
    film = sample.media[0]
    solved = membrane(film, crystal(25.0, density=2.33))
    fields = three(solved, solids)
    s2 = AT_ONCE.s**2
    for axis in (0, 2):
        momentum = sum(
            m.density * s2 * mean_displacement(solved, j, m.thickness.item(), found, axis)
            for j, (m, found) in enumerate(zip(solved.sample.media, fields, strict=True))
        )
        scale = np.abs(fields[0].at_top(axis)) * np.abs(s2) * 6.10 * 40.0
        assert np.all(np.abs(momentum) < 1e-10 * scale)


def mean_displacement(solved, j: int, thickness: float, found, axis: int) -> np.ndarray:
    """Integral of a displacement component over medium j, from its strain by parts."""
    z, weight = gauss_legendre(0.0, thickness)
    shear = strain_of(solved, j, z, found, axis)
    # The integral of u is u(bottom) d less the integral of z u'.
    return found.at_bottom(axis)[0] * thickness - (weight[:, None] * z[:, None] * shear).sum(axis=0)


def strain_of(solved, j: int, z: np.ndarray, found, axis: int) -> np.ndarray:
    """u_i' at depths z of medium j, the sum over the waves of what `strain` writes out for one."""
    parts = [strain(replace(solved, sound=[mode] * (j + 1)), j, z) for mode in found.modes]
    return sum(weight.item() * part for weight, part in zip(found.component(axis), parts, strict=True))


@pytest.mark.parametrize("ratios", [(0.0, 0.0), (0.7, -1.3)])
def test_detected_strain_is_the_integral_over_the_depth(ratios: tuple) -> None:
    # i k n / (n0 r) x integral of (u_z' + ratios . u_xy') E^2 dz by quadrature, real and imaginary part in time.
    sample, solids = cut_film(35.0, 60.0, stress=(2e-3, 1e-3, 5e-3))
    film = metal(60.0, density=6.10, n_probe=2.5 + 0.3j)
    solved = solve(stacked(film, sample.media[1]), AT_ONCE)
    solid = DepthElastic(rotated_about_z(solids[0].stiffness), solids[0].stress, np.array([[*ratios, 1.0]]))
    found = three(solved, [solid, solids[1]])[0]
    seen = three_response(
        reflection(solved.probe), 0, film.thickness, solved.profiles[0], solved.heat[0], found
    ).strain
    z, weight = gauss_legendre(0.0, 60.0, panels=80)
    light = solved.probe
    n, k = light.n[0].item(), light.k
    field = light.a[0].item() * np.exp(1j * k * n * z) + light.b[0].item() * np.exp(1j * k * n * (60.0 - z))
    optical = 1j * k * n / (light.n_ambient.item() * light.r.item()) * field**2
    moved = sum(r * strain_of(solved, 0, z, found, axis) for axis, r in enumerate((*ratios, 1.0)))
    h = (weight[:, None] * optical[:, None] * moved).sum(axis=0)
    conjugate = (weight[:, None] * np.conj(optical)[:, None] * moved).sum(axis=0)
    np.testing.assert_allclose(seen[0, 0], (h + conjugate) / 2, rtol=1e-8)
    np.testing.assert_allclose(seen[0, 1], (h - conjugate) / 2j, rtol=1e-8)


def rotated_about_z(stiffness: np.ndarray) -> np.ndarray:
    turn = rotation_about_axis([0, 0, 1], 20.0)
    return turn @ stiffness @ turn.T


def test_a_whole_trace_of_isotropic_layers_is_the_scalar_one() -> None:
    grid = quick_grid(np.arange(-2.0, 60.0, 0.5))
    solved = solve(SAMPLES["sprung"], grid)
    fields = three(solved, [isotropic(m) for m in solved.sample.media])
    scalar, found = (to_delays(grid, u[None].copy())[0, 0] for u in (solved.sound[0].u_top, fields[0].u_top))
    assert np.abs(found - scalar).max() < 1e-10 * np.abs(scalar).max()


def turned(tensor: StiffnessTensor, polar: float, azimuth: float) -> StiffnessTensor:
    return tensor.rotated(rotation_about_axis([0, 0, 1], azimuth)).rotated(
        rotation_about_axis([0, 1, 0], polar)
    )


def depth_of(tensor: StiffnessTensor, stress: float = 5e-3) -> DepthElastic:
    return depth_elastic(tensor.voigt[None], np.array([[0.0, 0.0, stress]]))


def test_depth_stiffness_is_the_christoffel_matrix_along_z() -> None:
    tensor = turned(SAPPHIRE, 33.0, 17.0)
    components = tensor.components
    np.testing.assert_allclose(depth_of(tensor).stiffness[0], components[:, 2, :, 2], atol=1e-10)


def test_thermal_stress_of_an_expansion_follows_hookes_law() -> None:
    # Uniaxial expansion about a tilted axis: S_i3 = c_i3kl alpha_kl, summed out; sapphire's alpha_a, alpha_c.
    turn = rotation_about_axis([0, 1, 0], 33.0)
    tensor = SAPPHIRE.rotated(turn)
    alpha = turn @ np.diag([5.0e-6, 5.0e-6, 5.9e-6]) @ turn.T
    voigt = np.array(
        [[alpha[0, 0], alpha[1, 1], alpha[2, 2], 2 * alpha[1, 2], 2 * alpha[0, 2], 2 * alpha[0, 1]]]
    )
    found = depth_elastic(tensor.voigt[None], voigt).stress[0]
    np.testing.assert_allclose(found, np.einsum("ikl,kl->i", tensor.components[:, 2], alpha), atol=1e-14)
    assert abs(found[0]) > 1e-5  # GPa/K: the tilt makes a shear stress


def reflected(upper: StiffnessTensor, lower: StiffnessTensor, densities, compliance, w: float = 1.0):
    """Polarisations, impedances and the reflection matrix (modes) of an interface between half-spaces, s = i w."""
    s = np.array([[1j * w + 1e-14]])
    sides = []
    for tensor, rho in zip((upper, lower), densities, strict=True):
        moduli, vectors = np.linalg.eigh(tensor.components[:, 2, :, 2])
        sides.append((vectors[None, None], np.sqrt(rho * moduli)[None, None]))
    nothing = BlockEnds(*[np.zeros((1, 1, 3), dtype=complex)] * 4)
    y = [s[..., None] * z for _, z in sides]
    below = ascend_blocks(
        y, [np.ones((1, 1, 3), dtype=complex)], [v for v, _ in sides], [compliance], [nothing] * 2
    )
    return sides, y, below.reflection[0][0, 0]


angles = st.floats(0.0, 180.0)
soft = st.floats(0.0, 5.0)


@given(angles, angles, angles, angles, soft, soft, st.floats(0.05, 5.0))
def test_reflection_and_conversion_conserve_the_energy_flux(a, b, c, d, normal, tangential, w) -> None:
    # For each incident wave: Z |u|^2 of the reflected and transmitted waves add up to the incident one's.
    upper, lower = turned(NITRIDE, a, b), turned(SAPPHIRE, c, d)
    compliance = interface_compliance(one(normal), one(tangential))
    sides, y, r = reflected(upper, lower, (6.10, 3.99), compliance, w)
    (up_modes, z), (low_modes, z_below) = ((v[0, 0], z[0, 0]) for v, z in sides)
    flux = up_modes @ (y[0][0, 0][:, None] * (np.eye(3) - r))  # of each incident wave of unit amplitude
    transmitted = (low_modes.T @ flux) / y[1][0, 0][:, None]
    energy = (z[:, None] * np.abs(r) ** 2).sum(axis=0) + (z_below[:, None] * np.abs(transmitted) ** 2).sum(
        axis=0
    )
    np.testing.assert_allclose(energy, z, rtol=1e-9)
    # The jump obeys the spring: u(above) - u(below) = compliance x flux.
    jump = up_modes @ (np.eye(3) + r) - low_modes @ transmitted
    np.testing.assert_allclose(
        jump, compliance[0, 0][:, None] * flux, atol=1e-9 * (1 + np.abs(flux).max() * 5.0)
    )


@given(angles, angles, angles, angles)
def test_conversion_is_reciprocal(a, b, c, d) -> None:
    # Normalised to energy, the reflection matrix between the modes of one side is symmetric.
    sides, _, r = reflected(
        turned(NITRIDE, a, b), turned(SAPPHIRE, c, d), (6.10, 3.99), interface_compliance(one(0.3))
    )
    root = np.sqrt(sides[0][1][0, 0])
    scaled = root[:, None] * r / root[None, :]
    np.testing.assert_allclose(scaled, scaled.T, atol=1e-10)


def test_an_isotropic_interface_reflects_by_the_spring_formula() -> None:
    # Schoenberg 1980; Tas et al. 1998: [Z1 - Z2 + s Z1 Z2 / K] / [Z1 + Z2 + s Z1 Z2 / K], L and T apart.
    upper = StiffnessTensor.isotropic(c11=2.7 * 6.42**2, c44=2.7 * 3.04**2)
    lower = StiffnessTensor.isotropic(c11=2.33 * 8.43**2, c44=2.33 * 5.84**2)
    compliance = interface_compliance(one(0.05), one(0.2))
    _, _, r = reflected(upper, lower, (2.7, 2.33), compliance, 0.7)
    for row, (v1, v2, k) in enumerate(((3.04, 5.84, 0.2), (3.04, 5.84, 0.2), (6.42, 8.43, 0.05))):
        z1, z2 = 2.7 * v1, 2.33 * v2
        spring = 0.7j * z1 * z2 * k
        assert r[row, row] == pytest.approx((z1 - z2 + spring) / (z1 + z2 + spring), rel=1e-12)
    assert np.abs(r - np.diag(np.diagonal(r))).max() < 1e-12


def test_a_frictionless_joint_lets_no_shear_through() -> None:
    # Tangentially open, normally welded: an isotropic pair reflects shear in full, L as if welded.
    upper = StiffnessTensor.isotropic(c11=110.0, c44=25.0)
    lower = StiffnessTensor.isotropic(c11=165.0, c44=60.0)
    _, _, r = reflected(upper, lower, (2.7, 2.33), interface_compliance(one(0.0), one(OPEN)))
    z1, z2 = np.sqrt(2.7 * 110.0), np.sqrt(2.33 * 165.0)
    np.testing.assert_allclose(np.diagonal(r), [1.0, 1.0, (z1 - z2) / (z1 + z2)], atol=1e-12)


def cut_film(polar: float, thickness: float, stress=(0.0, 0.0, 5e-3)):
    """An opaque, tilted film of GaN's constants on a soft substrate; the film conducts no heat to speak of."""
    film = metal(thickness, density=6.10, conductivity=1e-5, n_pump=0.5 + 6j, n_probe=0.5 + 6j)
    base = crystal(density=2.33)
    solids = [
        depth_elastic(turned(NITRIDE, polar, 0.0).voigt[None], np.array([stress])),
        depth_elastic(StiffnessTensor.isotropic(c11=30.0, c44=8.0).voigt[None], np.array([[0.0, 0.0, 1e-4]])),
    ]
    return stacked(film, base), solids


def extremum(delay: np.ndarray, signal: np.ndarray, near: float, width: float) -> float:
    """Time of the largest deflection within a window, by a parabola through three points."""
    window = np.flatnonzero(np.abs(delay - near) < width)
    i = window[np.argmax(np.abs(signal[window]))]
    a, b, c = signal[i - 1 : i + 2]
    return float(delay[i] + 0.5 * (a - c) / (a - 2 * b + c) * (delay[1] - delay[0]))


@pytest.mark.parametrize("polar", [30.0, 52.0])
def test_a_tilted_hexagonal_film_echoes_at_the_christoffel_times(polar: float) -> None:
    # Quasi-longitudinal and quasi-shear echoes, both launched by heat and both moving the surface in z.
    thickness, rms = 400.0, 0.2
    sample, solids = cut_film(polar, thickness, stress=(2e-3, 0.0, 5e-3))
    direction = [np.sin(np.deg2rad(polar)), 0.0, np.cos(np.deg2rad(polar))]
    waves = plane_waves(NITRIDE, 6.10, direction)
    parts = waves.longitudinal_part
    fast = float(waves.phase_velocity[np.argmax(parts)])
    slow = float(waves.phase_velocity[np.argsort(parts)[1]])
    assert parts[np.argsort(parts)[1]] > 1e-4  # the quasi-shear wave moves along z too
    delay = np.arange(-3.0, 230.0, 0.02)
    grid = quick_grid(delay, rms)
    fields = three(solve(sample, grid), solids)
    # The displacement of an echo is symmetric about its arrival; its second derivative is so too, and sharp.
    acceleration = to_delays(grid, (grid.s**2 * fields[0].u_top)[None].copy())[0, 0]
    for velocity in (fast, slow):
        time = 2 * thickness / velocity
        assert extremum(delay, acceleration, time, 1.5) == pytest.approx(time, rel=1e-3)


def test_without_a_tilt_heat_launches_and_shows_no_shear() -> None:
    sample, solids = cut_film(0.0, 100.0)
    fields = three(solve(sample, AT_ONCE), solids)
    for found in fields:
        assert np.abs(found.at_top(0)).max() == 0.0
        assert np.abs(found.at_top(1)).max() == 0.0


def test_a_batch_is_set_by_set() -> None:
    tilts = [10.0, 25.0, 60.0]
    samples = [cut_film(polar, 80.0) for polar in tilts]
    alone = [three(solve(sample, AT_ONCE), solids)[0].u_top[0] for sample, solids in samples]
    film = DepthElastic(
        *(np.concatenate([getattr(s[0], n) for _, s in samples]) for n in ("stiffness", "stress"))
    )
    together = three(solve(samples[0][0], AT_ONCE), [film, samples[0][1][1]])[0].u_top
    np.testing.assert_allclose(together, alone, rtol=1e-12)


def test_splitting_a_tilted_layer_changes_nothing() -> None:
    sample, solids = cut_film(35.0, 90.0)
    base = sample.media[-1]
    halves = [
        metal(d, density=6.10, conductivity=1e-5, n_pump=0.5 + 6j, n_probe=0.5 + 6j) for d in (30.0, 60.0)
    ]
    whole = three(solve(sample, AT_ONCE), solids)[0]
    split = three(solve(stacked(*halves, base), AT_ONCE), [solids[0], *solids])[0]
    for axis in (0, 2):
        np.testing.assert_allclose(split.at_top(axis), whole.at_top(axis), rtol=1e-8)
