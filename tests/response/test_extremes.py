"""The response stays finite, smooth and true to its limits at the edges of what it takes."""

import itertools
from dataclasses import replace

import numpy as np
import pytest
from build import OPEN, VACUUM, crystal, liquid, metal, quick_grid, stacked
from hypothesis import given, settings
from hypothesis import strategies as st
from records import STACKS, one, sample

from inverse.response.basis import basis, columns
from inverse.response.inverse_laplace import time_grid

DELAY = np.linspace(-3, 60, 127)


def parts(stack, delay=DELAY, pump=400.0, probe=800.0, sets=1, groups=None, grid=None):
    layout = columns(groups or ["film"] * (len(stack.media) - 1) + ["base"])
    grid = quick_grid(delay) if grid is None else grid
    return basis(stack, (pump, probe), grid, one(0.0), layout, sets=sets)


def check_finite(found):
    assert np.isfinite(found).all()
    assert np.abs(found).max() > 0


def bonded(film, compliance=0.05, resistance=1e4, **kwargs):
    return stacked(film, crystal(), compliance=[compliance], resistance=[resistance], **kwargs)


def close(found, expected, tolerance):
    peak = np.maximum(np.abs(expected).max(axis=-1, keepdims=True), 1e-300)
    np.testing.assert_array_less(np.abs(found - expected) / peak, tolerance)


@pytest.mark.parametrize("conductivity", [1e-8, 1e-3, 1.0], ids="{:g} GPa nm2/ps/K".format)
@pytest.mark.parametrize("compliance", [0.0, 1e-3, 10.0, OPEN])
@pytest.mark.parametrize("thickness", [0.5, 30.0, 1e5])
def test_corners_of_thickness_bond_and_conduction_are_finite(thickness, compliance, conductivity):
    # 1e-5 to 1e3 W/m/K, 0.5 nm to 100 um, welded to open
    film = metal(thickness, conductivity=conductivity)
    hot = replace(film, electron_heat_capacity=one(2.7e-5), inverse_coupling=one(1 / 2.4e-4))
    for m, resistance in itertools.product((film, hot), (0.0, 1e4, OPEN)):
        check_finite(parts(bonded(m, compliance, resistance)))


@settings(max_examples=40)
@given(
    thickness=st.floats(-0.3, 5.0),
    compliance=st.floats(-6.0, 6.0),
    conductivity=st.floats(-8.0, 0.0),
    resistance=st.floats(0.0, 12.0),
    coupling=st.floats(0.0, 8.0),
    n_imag=st.sampled_from([0.0, 1e-12, 1e-6, 0.1, 10.0]),
    loss=st.sampled_from([0.0, 1e-4, 1.0]),
    exponent=st.floats(0.05, 1.0),
)
def test_anything_in_range_is_finite(
    thickness, compliance, conductivity, resistance, coupling, n_imag, loss, exponent
):
    # Powers of ten of every parameter
    film = metal(
        10**thickness,
        conductivity=10**conductivity,
        electron_heat_capacity=2.7e-5,
        inverse_coupling=10**coupling,
        n_pump=2 + 1j * n_imag,
        n_probe=2 + 1j * n_imag,
        loss_time=loss,
        loss_exponent=exponent,
    )
    check_finite(parts(bonded(film, 10**compliance, 10**resistance)))


def test_vanishing_film_is_no_film():
    # A film of the substrate's own kind adds nothing, whatever its thickness
    bare = parts(stacked(crystal()), groups=["base"])
    for d in (0.5, 20.0, 3000.0):
        covered = parts(stacked(crystal(d), crystal()), groups=["base", "base"])
        close(covered[0], bare[0], 1e-9)


def test_film_of_100_um_is_a_half_space():
    endless = parts(stacked(metal()), groups=["film"])
    thick = parts(bonded(metal(1e5)), groups=["film", "base"])
    close(thick[0, :4], endless[0, :4], 1e-9)
    close(thick[0, -2:], endless[0, -2:], 1e-9)


def test_stiff_and_soft_bonds_reach_their_limits_smoothly():
    welded, gap = parts(bonded(metal(40.0), 0.0)), parts(bonded(metal(40.0), OPEN))
    errors = [np.abs(parts(bonded(metal(40.0), c)) - welded).max() for c in (1e-4, 1e-5, 1e-6)]
    assert errors[0] / errors[1] == pytest.approx(10, rel=0.05)
    assert errors[1] / errors[2] == pytest.approx(10, rel=0.05)
    close(parts(bonded(metal(40.0), 1e12))[0], gap[0], 1e-6)


@pytest.mark.parametrize("layers", [1, 20, 200])
def test_superlattice_is_finite_and_quiet_before_the_pulse(layers):
    kinds = [metal(4.0, n_pump=3 + 0.05j, n_probe=3.2 + 0.02j), crystal(6.0)]
    stack = stacked(*[kinds[j % 2] for j in range(layers)], crystal(), compliance=[0.001] * layers)
    groups = ["well" if j % 2 else "wall" for j in range(layers)] + ["base"]
    found = parts(stack, groups=groups)
    check_finite(found)
    # The base lies 1 um down at 200 layers: sound does not reach it in this trace, its rows are left out
    seen = np.delete(found[0], np.s_[-6:-2], axis=0)
    quiet = np.abs(seen[:, DELAY < -2.2]).max(axis=-1)
    assert (quiet < 2e-6 * np.abs(seen).max(axis=-1)).all()


def test_identical_adjacent_layers_are_one():
    whole = parts(stacked(metal(36.0), crystal()))
    split = parts(stacked(*[metal(12.0)] * 3, crystal()))
    close(split[0], whole[0], 1e-10)


# --- coincident exponents ----------------------------------------------------------------------------------


def grid_of(delay, rms=0.3):
    grid = time_grid(delay, rms, earliest=0.0)
    return grid, grid.s[0, 0].real


def neighbours_agree(make, value, grid, delay, tolerance, **kwargs):
    """The response at a coincidence against the mean of its neighbours on both sides, 1e-4 away."""
    at, below, above = (
        parts(make(value * f), delay, grid=grid, **kwargs)[0] for f in (1.0, 1 - 1e-4, 1 + 1e-4)
    )
    check_finite(at)
    close(at, (below + above) / 2, tolerance)


def test_thermal_coincidence_at_zero_frequency():
    # C s = kappa p^2 at s = gamma, which a window of about 1 ns meets for Si at 400 nm
    delay = np.linspace(-2, 700, 300)
    grid, gamma = grid_of(delay)
    p = 4 * np.pi * 0.387 / 400
    capacity = 0.148 * p**2 / gamma
    neighbours_agree(
        lambda c: stacked(crystal(heat_capacity=c)), capacity, grid, delay, 2e-5, groups=["base"]
    )


def test_window_of_1_ns_on_silicon_at_400_nm_is_smooth():
    # The record's own silicon, windows scanned across the coincidence: the trace must not depend on them
    record = STACKS["si_bare_400"]
    stack, wavelengths = sample(record), (record["pump_nm"], record["probe_nm"])
    m = stack.media[0]
    p = 4 * np.pi * m.n_pump.item().imag / wavelengths[0]
    meeting = m.conductivity.item() * p**2 / m.heat_capacity.item()
    assert meeting == pytest.approx(0.01347, rel=1e-3)  # 1/ps, as the model's description says
    early = np.linspace(-1, 200, 150)
    found, gammas = [], []
    for window in np.log(1e6) / (meeting * np.array([1 - 1e-5, 1.0, 1 + 1e-5, 1.1])):
        origin = -1 - 8 * 0.3 - 1.0
        last = window / 1.3 + origin
        grid = time_grid(np.append(early, last), 0.3, earliest=0.0, stretch=1.3)
        found.append(parts(stack, None, *wavelengths, grid=grid, groups=["Si"])[0][:, : early.size])
        check_finite(found[-1])
        gammas.append(grid.s[0, 0].real)
    assert gammas[1] == pytest.approx(meeting, rel=1e-9)
    for other in found[:-1]:
        close(other, found[-1], 1e-5)


def test_diffusion_as_fast_as_sound_at_zero_frequency():
    # s = v^2 / D: the diffusing and the sounding exponent meet at s = gamma
    grid, gamma = grid_of(DELAY)
    conductivity = 6.42**2 / gamma * 2.4e-3
    neighbours_agree(lambda k: bonded(metal(30.0, conductivity=k)), conductivity, grid, DELAY, 2e-5)


def test_sound_as_steep_as_light_at_zero_frequency():
    # c p^2 = rho s^2 at s = gamma: v p = gamma
    grid, gamma = grid_of(DELAY)
    p = gamma / 6.42
    n_imag = p * 400 / (4 * np.pi)
    neighbours_agree(lambda n: bonded(metal(30.0, n_pump=2 + 1j * n)), n_imag, grid, DELAY, 2e-5)


def test_brillouin_resonance_met_exactly():
    # q + g = 0 for the probe's g = 2 i k n and sound's q = s / v: n'' = gamma / (2 k v) and a frequency of the
    # grid at 2 k n' v
    grid, gamma = grid_of(DELAY)
    k, v = 2 * np.pi / 800, 6.42
    at = grid.s[0, 7].imag
    n = at / (2 * k * v) + 1j * gamma / (2 * k * v)
    near = [n, n * (1 - 1e-6), n * (1 + 1e-6)]
    found = [parts(bonded(metal(30.0, n_probe=x)), grid=grid)[0] for x in near]
    check_finite(found[0])
    close(found[0], (found[1] + found[2]) / 2, 1e-6)


@pytest.mark.parametrize("ambient", [VACUUM, liquid()], ids=["vacuum", "liquid"])
@pytest.mark.parametrize("n_imag", [0.0, 1e-14, 1e-9, 1e-5])
def test_one_colour_in_a_transparent_layer(n_imag, ambient):
    # Pump and probe beat alike: exponents of absorbed light and of E^2 cancel
    film = crystal(120.0, n_pump=1.47 + 1j * n_imag, n_probe=1.47 + 1j * n_imag)
    media = film, metal(30.0, n_pump=3 + 3j, n_probe=3 + 3j), crystal(n_probe=3.7 + 0.01j)
    stack = stacked(*media, compliance=[0.01, 0.05], resistance=[1e3, 1e4], ambient=ambient)
    groups = [*(["liquid"] if ambient.is_liquid else []), "film", "metal", "base"]
    found = parts(stack, pump=800.0, probe=800.0, groups=groups)
    check_finite(found)
    clear = replace(stack, media=(replace(film, n_pump=one(1.47 + 0j), n_probe=one(1.47 + 0j)), *media[1:]))
    close(found[0], parts(clear, pump=800.0, probe=800.0, groups=groups)[0], 3e-8 + 3e2 * n_imag)


def test_response_is_proportional_to_the_absorption_of_an_almost_transparent_film():
    # One colour, nothing else absorbs: what the film's own heat does to its own light goes as n''
    def per_absorption(n_imag):
        n = 1.47 + 1j * n_imag
        film = crystal(120.0, n_pump=n, n_probe=n)
        base = crystal(n_pump=3.5 + 0j, n_probe=3.5 + 0j)
        return parts(stacked(film, base), pump=800.0, probe=800.0)[0, :4] / n_imag

    close(per_absorption(1e-12), per_absorption(1e-6), 1e-5)


def test_colours_almost_equal_are_as_equal_ones():
    film = crystal(120.0, n_pump=2 + 0.1j, n_probe=2 + 0.1j)
    stack = stacked(film, crystal())
    same = parts(stack, pump=800.0, probe=800.0)
    near = parts(stack, pump=800.0 * (1 + 1e-7), probe=800.0)
    close(near[0], same[0], 1e-5)


def test_transparent_stack_gives_nothing():
    # Nothing is absorbed, nothing moves
    clear = crystal(100.0, n_pump=1.5 + 0j, n_probe=1.5 + 0j), crystal(n_pump=2 + 0j, n_probe=2 + 0j)
    assert not parts(stacked(*clear)).any()


def test_index_close_to_the_ambients_is_finite():
    # r = 0 would leave nothing to be relative to; an index close to it still gives numbers
    film = metal(20.0, n_probe=1.0 + 1e-3j)
    check_finite(parts(bonded(film)))


def test_batch_may_mix_extremes():
    thickness = np.array([[0.5], [30.0], [1e5]])
    film = metal(
        thickness,
        electron_heat_capacity=np.array([[2.7e-5]] * 3),
        inverse_coupling=np.array([[0.0], [4e3], [1e8]]),
    )
    stack = bonded(film)
    stack = replace(stack, compliance=(np.array([[0.0], [0.1], [OPEN]]),))
    together = parts(stack, sets=3)
    check_finite(together)
    for i in range(3):
        alone = metal(
            thickness[i, 0], electron_heat_capacity=2.7e-5, inverse_coupling=film.inverse_coupling[i, 0]
        )
        single = bonded(alone, stack.compliance[0][i, 0])
        close(together[i], parts(single)[0], 1e-9)
