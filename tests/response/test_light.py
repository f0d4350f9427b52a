"""Light in layers against `tmm` 0.2, an independent package, Fresnel's formula and published indices."""

import numpy as np
import pytest
import tmm
from records import one

from inverse.description.material.properties import material
from inverse.description.pumpprobe import Beam
from inverse.response.light import absorption, light_field


def random_stacks(seed, layers, sets, metallic_share=0.5):
    """Indices (media x sets) and thicknesses (layers x sets); the half-space last."""
    rng = np.random.default_rng(seed)
    real = rng.uniform(0.05, 5.0, (layers + 1, sets))
    metallic = rng.random((layers + 1, sets)) < metallic_share
    n = np.where(metallic, real + 1j * rng.uniform(0.01, 8.0, real.shape), np.maximum(real, 1.0) + 0j)
    return n, rng.uniform(1.0, 250.0, (layers, sets))


def solved(n, d, wavelength, n0):
    column = [row[:, None] for row in n]
    return light_field(column, [row[:, None] for row in d], wavelength, one(n0 + 0j))


def by_tmm(n, d, wavelength, n0, number):
    indices = [n0, *n[:, number]]
    return tmm.coh_tmm("s", indices, [np.inf, *d[:, number], np.inf], 0, wavelength)


@pytest.mark.parametrize("n0", [1.0, 1.33])
@pytest.mark.parametrize("layers", [1, 2, 3, 4, 5, 6])
def test_random_stacks_agree_with_tmm(layers, n0):
    n, d = random_stacks(layers, layers, sets=25)
    field = solved(n, d, 633.0, n0)
    shares = np.stack([absorption(field, j).fraction()[:, 0] for j in range(layers)])
    for number in range(n.shape[1]):
        theirs = by_tmm(n, d, 633.0, n0, number)
        assert abs(field.r[number, 0] - theirs["r"]) < 1e-9
        assert abs(field.reflectance[number, 0] - theirs["R"]) < 1e-9
        assert abs(field.transmittance[number, 0] - theirs["T"]) < 1e-9
        np.testing.assert_allclose(shares[:, number], tmm.absorp_in_each_layer(theirs)[1:-1], atol=1e-9)


@pytest.mark.parametrize("polarisation", ["s", "p"])
@pytest.mark.parametrize("n0", [1.0, 1.33])
def test_random_stacks_at_an_angle_agree_with_tmm(polarisation, n0):
    n, d = random_stacks(20, 3, sets=25)
    field = solved(n, d, Beam(633.0, 52.0, polarisation), n0)
    shares = np.stack([absorption(field, j).fraction()[:, 0] for j in range(3)])
    for number in range(n.shape[1]):
        indices, thicknesses = [n0, *n[:, number]], [np.inf, *d[:, number], np.inf]
        theirs = tmm.coh_tmm(polarisation, indices, thicknesses, np.deg2rad(52.0), 633.0)
        assert abs(field.reflectance[number, 0] - theirs["R"]) < 1e-9
        assert abs(field.transmittance[number, 0] - theirs["T"]) < 1e-9
        np.testing.assert_allclose(shares[:, number], tmm.absorp_in_each_layer(theirs)[1:-1], atol=1e-9)


@pytest.mark.parametrize("layers", [1, 3, 6, 40])
def test_reflected_transmitted_and_absorbed_make_one(layers):
    n, d = random_stacks(50 + layers, layers, sets=60)
    field = solved(n, d, 800.0, 1.0)
    absorbed = sum(absorption(field, j).fraction() for j in range(layers))
    np.testing.assert_allclose(field.reflectance + field.transmittance + absorbed, 1.0, rtol=0, atol=1e-12)


def test_half_space_absorbs_what_enters_it():
    n, d = random_stacks(5, 2, sets=30, metallic_share=1.0)
    field = solved(n, d, 800.0, 1.0)
    np.testing.assert_allclose(absorption(field, 2).fraction(), field.transmittance, rtol=1e-12)


def test_absorbed_profile_agrees_with_tmm_at_every_depth():
    n, d = random_stacks(9, 3, sets=8, metallic_share=0.8)
    field = solved(n, d, 532.0, 1.0)
    for number in range(n.shape[1]):
        theirs = by_tmm(n, d, 532.0, 1.0, number)
        for layer in range(3):
            f = absorption(field, layer)
            p, x, top, bottom, beat = (v[number, 0] for v in (f.p, f.x, f.top, f.bottom, f.beat))
            thickness = d[layer, number]
            for z in np.linspace(0, thickness, 7):
                ours = top * np.exp(-p * z) + bottom * np.exp(-p * (thickness - z))
                ours += 2 * (beat * np.exp(1j * x * z)).real
                expected = tmm.position_resolved(layer + 1, z, theirs)["absor"]
                assert ours == pytest.approx(expected, rel=1e-8, abs=1e-13)


def test_interference_phase_is_the_layers():
    # decay and turn close the three exponentials at the layer's bottom: exp(-p d) and exp(i x d)
    n, d = random_stacks(11, 2, sets=10, metallic_share=1.0)
    field = solved(n, d, 532.0, 1.0)
    for layer in range(2):
        f = absorption(field, layer)
        np.testing.assert_allclose(f.decay, np.exp(-f.p * d[layer][:, None]), rtol=1e-9, atol=1e-300)
        np.testing.assert_allclose(f.turn, np.exp(1j * f.x * d[layer][:, None]), rtol=1e-9)


def test_bare_surface_is_fresnels():
    # r = (n0 - n) / (n0 + n), time factor exp(-i w t)
    n, n0 = 2.77 + 8.35j, 1.33
    field = light_field([one(n)], [], 800.0, one(n0 + 0j))
    assert field.r[0, 0] == pytest.approx((n0 - n) / (n0 + n), rel=1e-14)


def test_quarter_wave_film_of_the_geometric_mean_does_not_reflect():
    # n1 = sqrt(n0 n2), thickness lambda / 4 n1: common practice of antireflection coating
    n = np.sqrt(3.5)
    field = light_field([one(n + 0j), one(3.5 + 0j)], [one(800 / (4 * n))], 800.0, one(1 + 0j))
    assert field.reflectance[0, 0] < 1e-30


@pytest.mark.parametrize(
    ("film", "wavelength", "expected"),
    [
        # Computed with tmm 0.2.0 from Malitson 1965 and Green 2008
        ([("SiO2", 100.0)], 633.0, {"R": 0.090727}),
        # From Rakic 1995 and Green 2008
        ([("Al", 20.0)], 800.0, {"R": 0.828412, "T": 0.034170}),
        # From Weaver 1975, Malitson 1965 and Green 2008
        ([("W", 10.0), ("SiO2", 300.0)], 800.0, {"R": 0.380149}),
    ],
)
def test_coated_silicon_reflects_as_computed_from_published_indices(film, wavelength, expected):
    media = [material(name) for name, _ in film] + [material("Si", "100")]
    n = [one(complex(m.index_at(wavelength))) for m in media]
    field = light_field(n, [one(d) for _, d in film], wavelength, one(1 + 0j))
    assert field.reflectance[0, 0] == pytest.approx(expected["R"], abs=2e-5)
    if "T" in expected:
        assert field.transmittance[0, 0] == pytest.approx(expected["T"], abs=2e-5)


@pytest.mark.parametrize(
    ("name", "wavelength", "expected"),
    [
        ("Al", 400.0, 0.9238),  # Rakic 1995
        ("Au", 532.0, 0.7044),  # Johnson & Christy 1972
        ("W", 800.0, 0.4993),  # Weaver 1975
        ("Cr", 532.0, 0.5565),  # Johnson & Christy 1974
        ("SiO2", 800.0, 0.0341),  # Malitson 1965
    ],
)
def test_bare_material_reflects_as_computed_from_published_indices(name, wavelength, expected):
    # Computed outside the library from the n, k of the paper named, to four digits
    field = light_field([one(complex(material(name).index_at(wavelength)))], [], wavelength, one(1 + 0j))
    assert field.reflectance[0, 0] == pytest.approx(expected, abs=6e-5)


@pytest.mark.parametrize("parts", [2, 50])
def test_splitting_a_layer_changes_nothing(parts):
    n, d = random_stacks(21, 3, sets=12)
    whole = solved(n, d, 800.0, 1.0)
    order = [0, *[1] * parts, 2, 3]
    pieces = np.stack([d[0], *[d[1] / parts] * parts, d[2]])
    split = solved(n[order], pieces, 800.0, 1.0)
    np.testing.assert_allclose(split.r, whole.r, rtol=0, atol=1e-12)
    shared = sum(absorption(split, 1 + j).fraction() for j in range(parts))
    np.testing.assert_allclose(shared, absorption(whole, 1).fraction(), rtol=0, atol=1e-12)


def test_reversed_stack_transmits_the_same():
    # Reciprocity: the transmittance between two transparent half-spaces does not depend on the side
    n, d = random_stacks(31, 4, sets=20)
    n[-1] = 1.5
    forward = solved(n, d, 633.0, 1.0)
    backward = solved(np.concatenate([n[:-1][::-1], np.ones_like(n[:1])]), d[::-1], 633.0, 1.5)
    np.testing.assert_allclose(forward.transmittance, backward.transmittance, rtol=1e-9, atol=1e-300)
