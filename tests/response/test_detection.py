"""Detection against `tmm`'s reflection of a perturbed stack, quadrature, and the opaque half-space's formula.

At real s temperature, strain and displacement are real profiles, so the transform of delta r / r is what an
optics package finds when the index and the boundaries are changed by them.
"""

from functools import partial

import numpy as np
import pytest
import tmm
from build import crystal, gauss_legendre, lattice, liquid, metal, quick_grid, solve, stacked, strain
from records import one

from inverse.response.basis import basis, columns, displaced, fields, take
from inverse.response.inverse_laplace import to_delays

GRID = quick_grid(np.linspace(-1, 60, 200))
PROBE = 800.0
THICKNESS = (30.0, 70.0, 25.0)


def layered(**ambient):
    return stacked(
        metal(30.0, electron_heat_capacity=2.7e-5, inverse_coupling=1 / 2.4e-4),
        crystal(70.0, n_pump=1.47 + 0j, n_probe=1.45 + 0j, conductivity=1.3e-3),
        metal(25.0, n_probe=3.6 + 2.9j, n_pump=3.4 + 2.4j, velocity=5.2, density=19.0),
        crystal(n_probe=3.7 + 1.2j),
        compliance=[0.1, 0.0, 0.4],
        resistance=[1 / 1e-4, 1 / 2e-4, 1 / 5e-5],
        **ambient,
    )


def detected(sample, probe=PROBE):
    return fields(sample, (400.0, probe), GRID, one(0.0))


def complex_pair(part):
    """(strain, heat) as complex transforms at all frequencies: real part + i imaginary part."""
    return part.strain_real + 1j * part.strain_imag, part.heat_real + 1j * part.heat_imag


# --- against tmm -----------------------------------------------------------------------------------------


def depth_of(sample, j):
    d = sample.media[j].thickness.item()
    return d if np.isfinite(d) else 700.0


def relative_change(sample, changed, profile, slices):
    """d ln r by tmm when medium `changed` gets the index n + epsilon profile, slice by slice."""
    epsilon, r = 1e-5 / np.abs(profile(np.array([0.0]))).max(), []
    for sign in (1, -1):
        n, d = [sample.ambient.n_probe.item()], [np.inf]
        for j, m in enumerate(sample.media):
            if j != changed:
                n.append(m.n_probe.item())
                d.append(m.thickness.item())
                continue
            edges = np.linspace(0, depth_of(sample, j), slices + 1)
            n += list(m.n_probe.item() + sign * epsilon * profile((edges[:-1] + edges[1:]) / 2))
            d += list(np.diff(edges))
            if np.isinf(m.thickness.item()):
                n.append(m.n_probe.item())
                d.append(np.inf)
        r.append(tmm.coh_tmm("s", n, d, 0, PROBE)["r"])
    return (r[0] - r[1]) / (2 * epsilon) / ((r[0] + r[1]) / 2)


def extrapolated(change):
    """The limit of fine slices, whose error falls as the square of their thickness."""
    coarse, fine = change(100), change(200)
    return fine + (fine - coarse) / 3


@pytest.mark.parametrize("medium", range(4))
@pytest.mark.parametrize("mechanism", [0, 1], ids=["strain", "temperature"])
def test_index_change_agrees_with_perturbed_tmm(medium, mechanism):
    sample = layered()
    solved = solve(sample, GRID, probe=PROBE)
    field = (strain, lattice)[mechanism]
    found = complex_pair(detected(sample).detected[medium])[mechanism][0, 0]
    expected = extrapolated(
        partial(relative_change, sample, medium, lambda z: field(solved, medium, z)[:, 0].real)
    )
    assert found == pytest.approx(expected, rel=2e-4)


def moved(sample, boundary, step):
    """tmm's r with one boundary moved down by `step`, referred to the surface at rest."""
    n = [sample.ambient.n_probe.item(), *(m.n_probe.item() for m in sample.media)]
    d = [np.inf, *(m.thickness.item() for m in sample.media)]
    if boundary > 0:
        d[boundary] += step
    d[boundary + 1] -= step
    phase = 2j * 2 * np.pi / PROBE * n[0] * (step if boundary == 0 else 0.0)
    return tmm.coh_tmm("s", n, d, 0, PROBE)["r"] * np.exp(phase)


@pytest.mark.parametrize("boundary", range(4))
def test_moved_boundary_agrees_with_perturbed_tmm(boundary):
    # The displacement of an interface that opens is the mean of its two sides
    sample, step = layered(), 1e-4
    solved = solve(sample, GRID)
    expected = np.log(moved(sample, boundary, step) / moved(sample, boundary, -step)) / (2 * step)
    u = solved.sound[boundary].u_top[0, 0]
    if boundary > 0:
        above = solved.sound[boundary - 1].u_bottom[0, 0]
        assert boundary == 2 or abs(above - u) > 1e-3 * abs(u)
        u = (above + u) / 2
    real, imag = displaced(detected(sample))
    assert real[boundary][0, 0] + 1j * imag[boundary][0, 0] == pytest.approx(expected * u, rel=1e-6)


@pytest.mark.parametrize("mechanism", [0, 1], ids=["strain", "temperature"])
def test_liquid_agrees_with_perturbed_tmm(mechanism):
    # Strain (s / v) u exp(s z / v) and temperature exp(sqrt(s C / kappa) z), z < 0, from the surface's values
    water = liquid(conductivity=6e-3)
    sample = layered(ambient=water)
    solved = solve(sample, GRID)
    s, u, t = GRID.s[0, 0].real, solved.sound[0].u_top[0, 0].real, solved.surface[0, 0].real
    rate, size = [
        (s / 1.48, s / 1.48 * u),
        (np.sqrt(s * 4.2e-3 / 6e-3), t),
    ][mechanism]
    depth = 25 / rate
    media = [m.n_probe.item() for m in sample.media], [m.thickness.item() for m in sample.media]

    def change(slices):
        edges, epsilon, r = np.linspace(0, depth, slices + 1), 1e-5 / abs(size), []
        profile = size * np.exp(-rate * (depth - (edges[:-1] + edges[1:]) / 2))
        for sign in (1, -1):
            n = [1.33, *(1.33 + sign * epsilon * profile), *media[0]]
            r.append(tmm.coh_tmm("s", n, [np.inf, *np.diff(edges), *media[1]], 0, PROBE)["r"])
        return (r[0] - r[1]) / (2 * epsilon) / ((r[0] + r[1]) / 2)

    coarse, fine = change(600), change(1200)
    found = complex_pair(detected(sample).detected[0])[mechanism][0, 0]
    assert found == pytest.approx(fine + (fine - coarse) / 3, rel=2e-4)


# --- by quadrature, at complex s ---------------------------------------------------------------------------

SOME = [0, 3, 40, 120]  # frequencies of GRID, up to 0.9 THz


def weighted(solved, j, z):
    """i k n E^2 / (n_0 r) at depths z of medium j."""
    light, d = solved.probe, solved.sample.media[j].thickness.item()
    n, a, b = (v[j].item() for v in (light.n, light.a, light.b))
    wave = a * np.exp(1j * light.k * n * z)
    if np.isfinite(d):
        wave = wave + b * np.exp(1j * light.k * n * (d - z))
    return 1j * light.k * n * wave**2 / (light.n_ambient * light.r).item()


@pytest.mark.parametrize("probe", [800.0, 400.0], ids=["two colours", "one colour"])
@pytest.mark.parametrize("medium", range(4))
def test_every_integral_agrees_with_quadrature(medium, probe):
    # Re h <- (H + H*) / 2 and Im h <- (H - H*) / 2i, so part_real -+ i part_imag are H* and H themselves
    sample = layered()
    solved = solve(sample, GRID, probe=probe)
    z, weight = gauss_legendre(0.0, min(depth_of(sample, medium), 80.0), panels=80)
    if medium == 3:
        z, weight = (
            np.concatenate(parts)
            for parts in zip((z, weight), gauss_legendre(80.0, 2000.0, panels=400), strict=True)
        )
    optical = weighted(solved, medium, z) * weight
    part = detected(sample, probe).detected[medium]
    for field, real, imag in (
        (strain, part.strain_real, part.strain_imag),
        (lattice, part.heat_real, part.heat_imag),
    ):
        profile = field(solved, medium, z)[:, SOME]
        for sign, factor in ((1, optical), (-1, optical.conj())):
            found = (real + sign * 1j * imag)[0, SOME]
            scale = np.abs(optical) @ np.abs(profile)
            np.testing.assert_array_less(np.abs(found - factor @ profile), 1e-8 * scale)


def test_opaque_half_space_is_thomsens():
    # delta r / r = 4 i k n / (1 - n^2) dn/d(eta) integral of eta exp(2 i k n z) dz (Thomsen, Grahn, Maris, Tauc,
    # Phys. Rev. B 34, 4129 (1986))
    sample = stacked(metal())
    solved = solve(sample, GRID)
    n, k = sample.media[0].n_probe.item(), 2 * np.pi / PROBE
    z, weight = gauss_legendre(0.0, 150.0, panels=80)
    factor = 4j * k * n / (1 - n**2) * weight * np.exp(2j * k * n * z)
    part = detected(sample).detected[0]
    np.testing.assert_allclose(
        (part.strain_real + 1j * part.strain_imag)[0, SOME], factor @ strain(solved, 0, z)[:, SOME], rtol=1e-9
    )


# --- columns -----------------------------------------------------------------------------------------------


def test_columns_follow_from_the_definition_of_each_channel():
    # dR/R = 2 Re(delta r / r), phase = Im(delta r / r), delta r / r = P h_P + Q h_Q + h_u with complex P, Q
    rng = np.random.default_rng(4)
    h = rng.normal(size=(2, 2, 5, 30)) @ np.eye(30)  # sets, (real, imag), P Q P Q u, delays
    parts = h.transpose(0, 2, 1, 3).reshape(2, 10, 30)
    coefficients = rng.normal(size=4) + 1j * rng.normal(size=4)
    layout = columns(["a", "b"])
    assert layout.names[:5] == ("a.P.real", "a.P.imag", "a.Q.real", "a.Q.imag", "b.P.real")
    values = np.append(np.stack([coefficients.real, coefficients.imag], axis=1).ravel(), 1.0)
    signal = np.einsum("p,spt->st", np.append(coefficients, 1.0), h[:, 0] + 1j * h[:, 1])
    for channel, expected in (("reflectance_change", 2 * signal.real), ("optical_phase", signal.imag)):
        found = np.einsum("p,spt->st", values, take(parts, channel))
        np.testing.assert_allclose(found, expected, rtol=1e-12, atol=1e-12)


def test_material_in_two_places_has_one_pair_of_coefficients():
    sample = layered()
    apart = basis(sample, (400.0, PROBE), GRID, one(0.0), columns(["a", "b", "c", "d"]), sets=1)[0]
    shared = basis(sample, (400.0, PROBE), GRID, one(0.0), columns(["a", "b", "a", "d"]), sets=1)[0]
    # Rounding, magnified by up to 10^6 at the end of the window
    np.testing.assert_allclose(shared[:4], apart[:4] + apart[8:12], rtol=0, atol=1e-11 * np.abs(apart).max())
    np.testing.assert_allclose(shared[4:], np.concatenate([apart[4:8], apart[12:]]), rtol=1e-12)


def test_basis_is_the_transform_of_what_was_detected():
    sample = layered()
    found, layout = detected(sample), columns(["a", "b", "c", "d"])
    parts = basis(sample, (400.0, PROBE), GRID, one(0.0), layout, sets=1)[0]
    for j, part in enumerate(found.detected):
        rows = np.stack([part.strain_real, part.strain_imag, part.heat_real, part.heat_imag], axis=1)
        expected = to_delays(GRID, np.array(rows))[0]
        np.testing.assert_allclose(parts[4 * j : 4 * j + 4], expected, rtol=1e-9, atol=1e-13)


def test_batch_of_sets_is_each_set_alone():
    thickness = np.array([[25.0], [40.0], [61.0]])
    bond = {"compliance": [0.05], "resistance": [1 / 1e-4]}
    layout = columns(["film", "base"])
    film = metal(thickness, electron_heat_capacity=5e-4, inverse_coupling=2e3)
    together = basis(stacked(film, crystal(), **bond), (400.0, PROBE), GRID, one(0.0), layout, sets=3)
    for i, d in enumerate(thickness[:, 0]):
        film = metal(d, electron_heat_capacity=5e-4, inverse_coupling=2e3)
        alone = basis(stacked(film, crystal(), **bond), (400.0, PROBE), GRID, one(0.0), layout, sets=1)
        peak = np.abs(alone[0]).max(axis=1, keepdims=True)
        np.testing.assert_array_less(np.abs(together[i] - alone[0]) / peak, 1e-10)


def test_time_zero_shifts_the_trace():
    sample, layout = layered(), columns(["a", "b", "c", "d"])
    delay = np.linspace(-2, 50, 521)
    here = basis(sample, (400.0, PROBE), quick_grid(delay), one(0.0), layout, sets=1)[0]
    later = basis(sample, (400.0, PROBE), quick_grid(delay + 1.3), one(1.3), layout, sets=1)[0]
    peak = np.abs(here).max(axis=1, keepdims=True)
    # The two grids differ, and with them what wraps around: 1e-6 of the peak
    np.testing.assert_array_less(np.abs(later - here) / peak, 4e-6)
