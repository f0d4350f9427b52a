"""The recursion against a dense linear solve, the spring interface's closed form, limits and laws."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from records import one

from inverse.response.recursion import OPEN, Ends, ascend, descend, fall, surface_amplitude

AL, SI = (
    2.700 * 6.420,
    19.652,
)  # acoustic impedances, MRayl: handbook density and velocity; CRC constants, [100]


def spring(z1, z2, s, stiffness):
    """Displacement reflected and transmitted by a spring (linear slip; Schoenberg 1980, Tas et al. 1998)."""
    below = ascend([one(z1 * s), one(z2 * s)], [one(1 + 0j)], [one(1 / stiffness)])
    down, _ = descend(one(1 + 0j), [one(1 + 0j)], below)
    return below.reflection[0][0, 0], down[1][0, 0]


@pytest.mark.parametrize(
    ("stiffness", "expected"),
    [
        # |r| at 50, 100, 200 GHz, computed outside the library from the closed form for Al/Si[100]
        # (K in GPa/nm; 1 GPa/nm = 1e18 N/m3)
        (0.1, (0.9994, 0.9999, 1.0000)),
        (1.0, (0.9454, 0.9855, 0.9963)),
        (10.0, (0.2844, 0.5038, 0.7578)),
        (100.0, (0.0690, 0.0852, 0.1307)),
    ],
)
def test_spring_reflects_its_closed_form(stiffness, expected):
    for frequency, value in zip((0.05, 0.1, 0.2), expected, strict=True):
        s = 2j * np.pi * frequency
        r, _ = spring(AL, SI, s, stiffness)
        assert abs(r) == pytest.approx(value, abs=6e-5)
        slip = s * AL * SI / stiffness
        assert r == pytest.approx((AL - SI + slip) / (AL + SI + slip), rel=1e-13)


def test_stiff_spring_is_welded_and_soft_spring_is_free():
    s = 2j * np.pi * 0.1
    welded, _ = spring(AL, SI, s, np.inf)
    assert welded == pytest.approx(-0.0627, abs=5e-5)  # displacement: the sign is opposite to stress
    assert spring(AL, SI, s, 1e9)[0] == pytest.approx(welded, rel=1e-6)
    free, through = spring(AL, SI, s, 1 / OPEN)
    assert free == pytest.approx(1.0, rel=1e-12)
    assert abs(through) < 1e-25


@given(real=st.floats(0.0, 800.0), angle=st.floats(-1.57, 1.57), thickness=st.floats(0.1, 1e5))
def test_the_fall_across_a_layer_is_the_exponential(real, angle, thickness):
    q = one((real + 1j * real * np.tan(angle)) / thickness)
    found = fall(q, one(thickness)).item()
    # The phase is known to its own rounding.
    assert found == pytest.approx(np.exp(-q * thickness).item(), rel=1e-15 * (4 + abs(q * thickness).item()))


@given(
    z1=st.floats(0.5, 120.0),
    z2=st.floats(0.5, 120.0),
    frequency=st.floats(1e-3, 1.0),
    log_stiffness=st.floats(-3.0, 4.0),
)
def test_spring_keeps_energy(z1, z2, frequency, log_stiffness):
    # Intensity is Z |u'|^2 / 2: |r|^2 + (Z2 / Z1) |t|^2 = 1 for displacement
    r, t = spring(z1, z2, 2j * np.pi * frequency, 10**log_stiffness)
    assert abs(r) ** 2 + z2 / z1 * abs(t) ** 2 == pytest.approx(1.0, rel=1e-12)


def test_matched_impedance_does_not_reflect():
    reflected, transmitted = spring(AL, AL, 0.3 + 1j, np.inf)
    assert reflected == 0
    assert transmitted == pytest.approx(1.0, rel=4e-16)  # a reciprocal and a product, each rounded once


def random_problem(seed, layers):
    """Admittances, decays, compliances and sources of any kind; the recursion must not care."""
    rng = np.random.default_rng(seed)

    def many(count, shape=(4, 5)):
        return [rng.normal(size=shape) + 1j * rng.normal(size=shape) for _ in range(count)]

    y = [3 + v for v in many(layers + 1)]
    decay = [0.9 * v / np.abs(v) * rng.uniform(0, 1, v.shape) for v in many(layers)]
    compliance = [rng.uniform(0, 2, (4, 1)) * (j % 2) for j in range(layers)]
    ends = [Ends(*many(4)) for _ in range(layers + 1)]
    load = many(1)[0] + 2
    return y, decay, compliance, ends, load


def dense(y, decay, compliance, ends, load, i):
    """Amplitudes A_1, B_1, A_2, ... from the boundary conditions, one equation each."""
    pick = lambda v: np.broadcast_to(v, (4, 5)).ravel()[i]  # noqa: E731
    layers = len(decay)
    size = 2 * layers + 1
    matrix, right = np.zeros((size, size), complex), np.zeros(size, complex)
    source = [Ends(*(pick(v) for v in (e.u_top, e.f_top, e.u_bottom, e.f_bottom))) for e in ends]
    y, decay, compliance = [pick(v) for v in y], [pick(v) for v in decay], [pick(v) for v in compliance]
    load = pick(load)

    def at(j, bottom):
        """Coefficients of (u, flux) on the amplitudes at one end of medium j, and its sources."""
        e = decay[j] if j < layers else 0.0
        a, b = (e, 1.0) if bottom else (1.0, e)
        u, f = np.zeros(size, complex), np.zeros(size, complex)
        u[2 * j], f[2 * j] = a, y[j] * a
        if j < layers:
            u[2 * j + 1], f[2 * j + 1] = b, -y[j] * b
        s = source[j]
        return u, f, (s.u_bottom, s.f_bottom) if bottom else (s.u_top, s.f_top)

    u, f, (su, sf) = at(0, bottom=False)
    matrix[0], right[0] = f + load * u, -(sf + load * su)
    for j in range(layers):
        u, f, (su, sf) = at(j, bottom=True)
        v, g, (sv, sg) = at(j + 1, bottom=False)
        matrix[1 + 2 * j], right[1 + 2 * j] = f - g, sg - sf
        matrix[2 + 2 * j] = u - v - compliance[j] * f
        right[2 + 2 * j] = sv - su + compliance[j] * sf
    return np.linalg.solve(matrix, right)


@pytest.mark.parametrize("free", [True, False], ids=["free surface", "loaded surface"])
@pytest.mark.parametrize("layers", [1, 2, 5])
def test_sources_and_loads_agree_with_a_dense_solve(layers, free):
    y, decay, compliance, ends, load = random_problem(layers, layers)
    load = 0.0 if free else load
    below = ascend(y, decay, compliance, ends)
    down, up = descend(surface_amplitude(y[0], below, ends[0], load), decay, below)
    for i in range(20):
        expected = dense(y, decay, compliance, ends, load, i)
        found = [v.ravel()[i] for pair in zip(down, up[:-1], strict=False) for v in pair]
        np.testing.assert_allclose([*found, down[-1].ravel()[i]], expected, rtol=1e-8, atol=1e-9)
    assert not up[-1].any()


@given(seed=st.integers(0, 10_000), layers=st.integers(1, 6))
def test_transmission_is_reciprocal(seed, layers):
    # Between half-spaces a and b: t_ab / y_a = t_ba / y_b for displacement, loss and springs included. The
    # half-space of arrival is written as a layer of no thickness.
    y, decay, compliance, _, _ = random_problem(seed, layers)
    y_a = one(1.7 + 0.4j)

    def through(admittance, decays, joints):
        below = ascend(admittance, decays, joints)
        return descend(one(1 + 0j), decays, below)[0][-1]

    order, inner = [y_a, *y[:-1]], decay[:-1]
    down = through(order, [one(1 + 0j), *inner], compliance)
    climb = through(order[::-1], [one(1 + 0j), *inner[::-1]], compliance[::-1])
    np.testing.assert_allclose(down / order[0], climb / order[-1], rtol=1e-9)


def test_splitting_a_medium_leaves_what_is_seen_from_above():
    y, decay, compliance, _, _ = random_problem(7, 3)
    whole = ascend(y, decay, compliance)
    root = [np.sqrt(decay[1])] * 2
    joints = [compliance[0], one(0.0), *compliance[1:]]
    split = ascend([y[0], y[1], y[1], y[2], y[3]], [decay[0], *root, decay[2]], joints)
    np.testing.assert_allclose(split.reflection[0], whole.reflection[0], rtol=1e-12)


def test_layer_of_no_thickness_is_not_seen():
    y, decay, _, _, _ = random_problem(8, 2)
    welded = [one(0.0)] * 2
    with_layer = ascend(y, [decay[0], one(1 + 0j)], welded)
    without = ascend([y[0], y[2]], [decay[0]], welded[:1])
    np.testing.assert_allclose(with_layer.reflection[0], without.reflection[0], rtol=1e-12)


def test_open_gap_shields_everything_below():
    y, decay, _, ends, _ = random_problem(9, 2)
    gap = [one(OPEN), one(0.0)]
    below = ascend(y, decay, gap, ends)
    np.testing.assert_allclose(below.reflection[0], 1.0, rtol=1e-12)
    # A free end: the particular flux alone is sent back
    np.testing.assert_allclose(below.source[0], ends[0].f_bottom / y[0], rtol=1e-12)
