"""Traces of layers known by their constants: the scalar answer for symmetry cuts, three components otherwise."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv
from inverse.elastic import StiffnessTensor, longitudinal_velocity, plane_waves

SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
DELAY = np.arange(-4.0, 60.0, 0.1)
# Copper, CRC constants: strongly anisotropic.
COPPER = {"symmetry": "cubic", "c11": 168.3, "c12": 121.2, "c44": 75.7}
TENSOR = StiffnessTensor.cubic(c11=168.3, c12=121.2, c44=75.7)
SUBSTRATE = inv.Substrate("Si", orientation="100")


def trace(layer: inv.Layer, **bond: object) -> np.ndarray:
    interface = inv.Interface(boundary_conductance=100.0, **{"compliance": 0.02, **bond})
    found = inv.simulate(inv.Stack(layer, interface, SUBSTRATE), SETUP, DELAY)
    return found["reflectance_change"].to_numpy()


def cut(orientation: object, **changes: object) -> inv.Layer:
    return inv.Layer("Cu", **{"thickness": 60.0, "stiffness": COPPER, "orientation": orientation, **changes})


@pytest.mark.parametrize("orientation", ["100", "110", "111"])
def test_a_symmetry_cut_is_the_layer_of_its_velocity(orientation: str) -> None:
    layer = cut(orientation)
    velocity = float(longitudinal_velocity(TENSOR, layer.material.density, orientation))
    plain = inv.Layer("Cu", thickness=60.0, velocity=velocity)
    np.testing.assert_allclose(trace(layer), trace(plain), rtol=0, atol=1e-12 * np.abs(trace(plain)).max())


@pytest.mark.parametrize("axis", [[1, 0, 1e-6], [1, 1, 1e-6], [1, 1, 1 + 1e-6]])
def test_three_components_meet_the_scalar_path_at_a_symmetry_cut(axis: list) -> None:
    name = {(1, 0): "100", (1, 1): "110"}[(axis[0], axis[1])] if axis[2] < 0.5 else "111"
    exact = trace(cut(name))
    assert np.abs(trace(cut(axis)) - exact).max() < 1e-9 * np.abs(exact).max()


def test_all_that_launches_sound_does_so_in_three_components_too() -> None:
    film = {
        "electron_gruneisen": 1.5,
        "lattice_share": 0.3,
        "initial_stress": 0.4,
        "initial_stress_lifetime": 9.0,
    }
    carriers = {
        "band_gap": 1.1,
        "deformation_potential": -8.0,
        "carrier_diffusivity": 20.0,
        "carrier_lifetime": 12.0,
    }
    clear = inv.Layer("SiO2", thickness=40.0, stiffness={"symmetry": "isotropic", "c11": 78.5, "c44": 31.2})

    def of(axis: object) -> np.ndarray:
        stack = inv.Stack(
            clear, cut(axis, thickness=20.0, **film), inv.Substrate("Si", orientation="100", **carriers)
        )
        return inv.simulate(stack, SETUP, DELAY)["reflectance_change"].to_numpy()

    exact, plain = (
        of("100"),
        inv.simulate(inv.Stack(clear, cut("100", thickness=20.0), SUBSTRATE), SETUP, DELAY),
    )
    assert np.abs(of([1, 0, 1e-6]) - exact).max() < 1e-9 * np.abs(exact).max()
    assert np.abs(exact - plain["reflectance_change"]).max() > 1e-2 * np.abs(exact).max()


@pytest.mark.parametrize("flaw", ["roughness", "areal_mass"])
def test_flaws_that_three_components_do_not_know_are_refused(flaw: str) -> None:
    with pytest.raises(
        ValueError, match=rf"Cu\|Si has {flaw}, which the response of an oblique cut does not know"
    ):
        trace(cut([0.0, 1.0, 2.0]), **{flaw: 1.0})
    stack = inv.Stack(cut([0.0, 1.0, 2.0]), SUBSTRATE, surface_roughness=1.0)
    with pytest.raises(ValueError, match="surface has roughness, which the response of an oblique cut"):
        inv.simulate(stack, SETUP, DELAY)


def test_an_oblique_cut_shows_a_shear_echo_that_no_scalar_layer_has() -> None:
    # Copper tilted: the quasi-shear wave returns at 2 d / v, where a scalar layer of the same velocity is quiet.
    axis, thickness = [0.0, np.sin(np.deg2rad(25)), np.cos(np.deg2rad(25))], 60.0
    layer = cut(axis, thickness=thickness)
    waves = plane_waves(TENSOR, layer.material.density, axis)
    order = np.argsort(waves.longitudinal_part)
    slow, fast = (2 * thickness / float(waves.phase_velocity[order[k]]) for k in (1, 2))
    assert abs(slow - 2 * fast) > 3.0  # clear of the longitudinal echoes
    plain = inv.Layer("Cu", thickness=thickness, velocity=2 * thickness / fast)
    difference = np.abs(np.diff(trace(layer) - trace(plain), 2))
    near = np.abs(DELAY[1:-1] - slow) < 1.0
    quiet = (DELAY[1:-1] > 0.5 * (fast + slow) + 3.0) & (DELAY[1:-1] < 2 * fast - 3.0)
    assert quiet.sum() > 20
    assert difference[near].max() > 20 * difference[quiet].max()


def test_a_tangential_spring_changes_the_trace_of_an_oblique_cut_only_there() -> None:
    axis = [0.0, 1.0, 2.0]
    same = trace(cut(axis), tangential_compliance=0.02)
    np.testing.assert_array_equal(same, trace(cut(axis)))
    loose = trace(cut(axis), tangential_compliance=10.0)
    assert np.abs(loose - same).max() > 1e-4 * np.abs(same).max()


def test_a_photoelastic_ratio_shows_shear_to_polarised_light() -> None:
    # The trace is linear in the ratio, and a symmetry cut has no shear to show.
    axis = [0.0, 1.0, 2.0]
    none, one, two = (trace(cut(axis, photoelastic_xz=r, photoelastic_yz=r)) for r in (0.0, 1.0, 2.0))
    assert np.abs(one - none).max() > 1e-3 * np.abs(none).max()
    np.testing.assert_allclose(two - none, 2 * (one - none), atol=1e-10 * np.abs(none).max())
    np.testing.assert_array_equal(trace(cut("111", photoelastic_xz=1.0)), trace(cut("111")))


def test_a_shear_stress_launches_a_shear_wave() -> None:
    axis = [0.0, 1.0, 2.0]
    plain, sheared = trace(cut(axis)), trace(cut(axis, thermal_stress_xz=2e-3, thermal_stress_yz=2e-3))
    assert np.abs(sheared - plain).max() > 1e-3 * np.abs(plain).max()


def test_shares_of_an_oblique_stack_add_up() -> None:
    interface = inv.Interface(boundary_conductance=100.0, compliance=0.02)
    found = inv.simulate(inv.Stack(cut([1, 2, 3]), interface, SUBSTRATE), SETUP, DELAY, shares=True)
    total = found["reflectance_change_share"].sum("part")
    scale = float(np.abs(found["reflectance_change"]).max())
    assert float(np.abs(total - found["reflectance_change"]).max()) < 1e-12 * scale


@pytest.mark.parametrize("orientation", ["111", [1, 2, 3]])
def test_log_prob_of_constants_is_set_by_set_and_refuses_unstable_ones(orientation: object) -> None:
    priors = {"c11": stats.norm(168, 8), "c12": stats.norm(121, 8), "c44": stats.norm(76, 4)}
    layer = cut(orientation, stiffness={"symmetry": "cubic", **priors})
    stack = inv.Stack(layer, inv.Interface(compliance=0.02, boundary_conductance=100.0), SUBSTRATE)
    data = inv.simulate(stack, SETUP, DELAY)[["reflectance_change"]]
    size = 1e-3 * float(np.abs(data["reflectance_change"]).max())
    data["reflectance_change"] += np.random.default_rng(1).normal(0.0, size, DELAY.size)
    problem = inv.Inversion(stack, SETUP, data, time_zero=0.0, noise="white")
    assert problem.names == ("Cu.c11", "Cu.c12", "Cu.c44", "noise.white")
    level = float(problem.priors["noise.white"].median())
    values = np.array([[168.3, 121.2, 75.7, level], [160.0, 170.0, 75.7, level], [170.0, 119.0, 74.0, level]])
    together = problem.log_prob(values)
    assert together[1] == -np.inf
    alone = [float(problem.log_prob(row)[0]) for row in values[[0, 2]]]
    np.testing.assert_allclose(together[[0, 2]], alone, rtol=1e-9)


def test_derived_quantities_of_a_cut_layer() -> None:
    from inverse.description.sample.places import bind
    from inverse.inference.derived import derived

    layer = cut("110", stiffness={**COPPER, "c11": stats.norm(168, 8)}, density=8.932)
    found = derived(bind(inv.Stack(layer, SUBSTRATE), SETUP), {"Cu.c11": np.array([168.3, 170.0])})
    # [110] of copper 4968.0 m/s, computed outside this library; rho v^2 = (c11 + c12 + 2 c44) / 2.
    assert 1e3 * found["Cu.velocity"][0] == pytest.approx(4968.0, abs=0.06)
    np.testing.assert_allclose(
        found["Cu.longitudinal_modulus"], (np.array([168.3, 170.0]) + 121.2 + 2 * 75.7) / 2
    )
    assert "Cu.c33" not in found


@pytest.mark.parametrize("thickness", [0.5, 60.0, 1e5])
@pytest.mark.parametrize("compliance", [0.0, 0.02, np.inf])
@pytest.mark.parametrize("tangential", [0.0, np.inf])
def test_an_oblique_layer_is_finite_throughout_the_range(
    thickness: float, compliance: float, tangential: float
) -> None:
    found = trace(
        cut([1, 2, 3], thickness=thickness), compliance=compliance, tangential_compliance=tangential
    )
    assert np.all(np.isfinite(found)) and np.ptp(found) > 0


def test_two_hundred_oblique_layers_are_finite_and_thin_ones_are_one() -> None:
    # Cutting one layer into 200 welded slices changes nothing.
    axis = [1.0, 2.0, 3.0]
    sliced = inv.Stack(inv.Repeat(200, cut(axis, thickness=0.3)), SUBSTRATE)
    whole = inv.Stack(cut(axis, thickness=60.0), SUBSTRATE)
    first, second = (inv.simulate(s, SETUP, DELAY)["reflectance_change"].to_numpy() for s in (sliced, whole))
    assert np.abs(first - second).max() < 1e-7 * np.abs(second).max()


def test_an_oblique_membrane_rings_at_the_thickness_modes_of_its_waves() -> None:
    # Between free faces nothing converts at normal incidence: modes at v / 2 d of either wave that moves in z.
    axis, thickness = [0.0, 1.0, 2.0], 40.0
    film = cut(axis, thickness=thickness)
    delay = np.arange(-4.0, 1000.0, 0.2)
    found = inv.simulate(inv.Stack(film, inv.Substrate("vacuum")), SETUP, delay)[
        "reflectance_change"
    ].to_numpy()
    ringing = np.diff(found[delay > 20.0], 2)
    spectrum = np.abs(np.fft.rfft(ringing * np.hanning(ringing.size), 8 * ringing.size))
    frequency = np.fft.rfftfreq(8 * ringing.size, 0.2)
    waves = plane_waves(TENSOR, film.material.density, axis)
    for k in np.flatnonzero(waves.longitudinal_part > 1e-3):
        mode = float(waves.phase_velocity[k]) / (2 * thickness)
        near = np.abs(frequency / mode - 1) < 0.06
        assert frequency[near][np.argmax(spectrum[near])] == pytest.approx(mode, rel=3e-3)
        assert spectrum[near].max() > 5 * np.median(spectrum[frequency < 0.1])
