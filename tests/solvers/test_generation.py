"""What launches sound beside the lattice's heat: hot electrons and photo-carriers, against the time-domain solver."""

from dataclasses import replace

import numpy as np
import pytest

import inverse as inv
from inverse.response.strain_map import strain_map

from . import face
from .samples import Experiment, Joint, Sample
from .time_domain import simulate, states
from .transfer_matrices import Beam

DELAY = np.arange(-1.5, 40, 0.1)
EXPERIMENT = Experiment(Beam(400.0), Beam(800.0), 0.3)
EV = 0.1602176634  # GPa nm^3
PHOTON = 1239.841984 / 400.0  # eV

# A semiconductor with everything at once: strong diffusion, a short life, a surface that recombines
GAP, POTENTIAL = 1.4, -9.0
CARRIERS = {
    "band_gap": GAP,
    "deformation_potential": POTENTIAL,
    "carrier_diffusivity": 0.2,
    "carrier_lifetime": 15.0,
    "surface_recombination": 2e5,
}
PAIRS = {
    "carrier_energy": PHOTON * EV,
    "prompt_heat": 1 - GAP / PHOTON,
    "carrier_stress": -POTENTIAL * EV,
    "carrier_diffusivity": 20.0,
    "carrier_lifetime": 15.0,
    "surface_recombination": 2.0,
}


def agree(sample, found, plain, at_pulse=3e-4, late=1e-4, step=0.01):
    solved = simulate(sample, EXPERIMENT, DELAY, step)
    for name, expected in (
        ("reflectance_change", solved.reflectance_change),
        ("optical_phase", solved.phase),
    ):
        error = np.abs(found[name].values - expected) / np.abs(expected).max()
        assert error.max() < at_pulse, name
        assert error[DELAY > 2].max() < late, name
        assert np.abs(plain[name] - expected)[DELAY > 2].max() > 2e-3 * np.abs(expected).max()


def trace(sample, media=None):
    return inv.simulate(face.stack(sample, media=media), face.setup(EXPERIMENT), DELAY)


@pytest.fixture(scope="module")
def dark(si):
    """Silicon-like, absorbing 400 nm light within 20 nm."""
    return replace(si, n_pump=5.0 + 1.6j)


def test_electron_pressure(al, si):
    hot = replace(al, thickness=47.0, electron_heat_capacity=3e-5, electron_phonon_coupling=2.5e-4)
    sample = Sample(
        (replace(hot, electron_stress=1.6 * 3e-5), si), (Joint(compliance=0.02, conductance=1e-4),)
    )
    found = trace(sample, {0: {"electron_gruneisen": 1.6}})
    agree(sample, found, trace(sample))


def test_carriers_in_a_bare_semiconductor(dark):
    sample = Sample((replace(dark, **PAIRS),))
    agree(sample, trace(sample, {0: CARRIERS}), trace(sample))


def test_carriers_in_a_film_and_in_what_lies_below(dark, al, si):
    # Two layers hold pairs of their own, which do not cross; light reaches both
    film = replace(dark, thickness=25.0, **PAIRS)
    slow = {**PAIRS, "carrier_diffusivity": 2.0, "carrier_lifetime": np.inf, "surface_recombination": 0.0}
    below = replace(dark, thickness=60.0, **slow)
    sample = Sample((film, below, si), (Joint(compliance=0.02, conductance=2e-4), Joint()))
    still = {**CARRIERS, "carrier_diffusivity": 0.02}
    still = {k: v for k, v in still.items() if k not in ("carrier_lifetime", "surface_recombination")}
    agree(sample, trace(sample, {0: CARRIERS, 1: still}), trace(sample))


def test_carriers_under_a_metal(dark, al):
    # Light leaks through 8 nm of metal; the semiconductor's top is buried and recombines
    sample = Sample((replace(al, thickness=8.0), replace(dark, **PAIRS)), (Joint(conductance=2e-4),))
    agree(sample, trace(sample, {1: CARRIERS}), trace(sample))


@pytest.mark.parametrize("thickness", [60.0, np.inf])
def test_carriers_change_the_index(dark, si, thickness):
    # A tenth of what free carriers make: as much as everything else together, at 1 J/m2
    seen = -0.03 + 0.02j
    medium = replace(dark, thickness=thickness, **PAIRS)
    below, joints = ((replace(si, velocity=6.0),), (Joint(compliance=0.02, conductance=1e-4),))
    rest = (below, joints) if thickness < 100 else ((), ())
    sample = Sample((replace(medium, dn_dN=seen), *rest[0]), rest[1])
    more = {0: {**CARRIERS, "dn_dN": seen}}
    agree(sample, trace(sample, more), trace(sample, {0: CARRIERS}))


def test_an_index_that_pairs_do_not_change_is_the_default(dark):
    sample = Sample((replace(dark, **PAIRS),))
    zero, plain = trace(sample, {0: {**CARRIERS, "dn_dN": 0j}}), trace(sample, {0: CARRIERS})
    np.testing.assert_array_equal(zero.reflectance_change, plain.reflectance_change)
    assert "m0.dn_dN = 0j (default)" in plain.coefficients


def test_a_vanishing_lifetime_is_plain_heating(dark):
    # Pairs that recombine where they were made, at once, leave all their energy there
    sample = Sample((dark,))
    quick = {"band_gap": GAP, "carrier_diffusivity": 1e-4, "carrier_lifetime": 1e-2}
    found, plain = trace(sample, {0: quick}), trace(sample)
    scale = np.abs(plain.reflectance_change).max()
    assert (
        np.abs(found.reflectance_change - plain.reflectance_change)[DELAY > 2].max() < 5e-4 * scale
    )  # 0.01 ps late
    assert np.abs(found.reflectance_change - plain.reflectance_change).max() < 2e-2 * scale


def test_no_pressure_of_electrons_is_the_plain_metal(al, si):
    hot = replace(al, thickness=47.0, electron_heat_capacity=3e-5, electron_phonon_coupling=2.5e-4)
    sample = Sample((hot, si), (Joint(),))
    zero, plain = trace(sample, {0: {"electron_gruneisen": 0.0}}), trace(sample)
    np.testing.assert_array_equal(zero.reflectance_change, plain.reflectance_change)


# 0.4 of a weak conduction is the lattice's, weakly coupled: heat spreads in both for tens of picoseconds
SHARE = 0.4


def conducting(al, thickness):
    """A metal as the library and as the solver know it."""
    weak = {"electron_heat_capacity": 2.7e-5, "electron_phonon_coupling": 5e-5}
    metal = replace(al, thickness=thickness, conductivity=0.08, **weak)
    return metal, replace(metal, conductivity=0.08 * (1 - SHARE), lattice_conductivity=0.08 * SHARE)


@pytest.mark.parametrize("thickness", [12.0, 30.0, np.inf])
def test_a_lattice_that_conducts_beside_its_electrons(al, si, thickness):
    below, joints = ((si,), (Joint(compliance=0.02, conductance=1e-4),)) if thickness < 100 else ((), ())
    ours, theirs = (Sample((metal, *below), joints) for metal in conducting(al, thickness))
    found, plain = trace(ours, {0: {"lattice_share": SHARE}}), trace(ours)
    solved = simulate(theirs, EXPERIMENT, DELAY, 0.02)
    for name, expected in (
        ("reflectance_change", solved.reflectance_change),
        ("optical_phase", solved.phase),
    ):
        scale = np.abs(expected).max()
        assert np.abs(found[name].values - expected).max() < 4e-5 * scale
        assert np.abs(plain[name].values - expected)[DELAY > 2].max() > 2e-4 * scale


def test_a_conducting_lattice_pushes_with_its_electrons(al, si):
    ours, theirs = (Sample((m, si), (Joint(conductance=1e-4),)) for m in conducting(al, 30.0))
    pressing = replace(theirs.media[0], electron_stress=1.6 * 2.7e-5)
    more = {0: {"lattice_share": SHARE, "electron_gruneisen": 1.6}}
    agree(replace(theirs, media=(pressing, si)), trace(ours, more), trace(ours), step=0.02)


@pytest.mark.parametrize(
    ("share", "coupling", "off"),
    [(1e-10, 5e-5, 3e-6), (1e-14, 5e-5, 3e-8), (SHARE, 1e11, 1e-10)],
)
def test_a_lattice_conducts_nothing_or_all_in_the_limits(al, si, share, coupling, off):
    # What a lattice gives up at its closed faces lies within sqrt(kappa_l / g) of them: a slow limit, of the root.
    # Without a lag between the two, it is one temperature that conducts.
    metal = replace(conducting(al, 30.0)[0], electron_phonon_coupling=coupling)
    sample = Sample((metal, si), (Joint(conductance=1e-4),))
    found, plain = trace(sample, {0: {"lattice_share": share}}), trace(sample)
    for name in ("reflectance_change", "optical_phase"):
        scale = np.abs(plain[name]).max()
        assert np.abs(found[name] - plain[name]).max() < off * scale


def test_a_share_of_the_lattice_needs_two_temperatures():
    film = inv.Material("film", density=5.0, velocity=5.0, n=3.0 + 3.0j, heat_capacity=2.5, conductivity=10.0,
                        thermal_stress_coefficient=5e-3, lattice_share=0.1)  # fmt: skip
    with pytest.raises(
        ValueError, match="film has a lattice_share but one temperature only; give electron_heat"
    ):
        inv.simulate(inv.Stack(inv.Substrate(film)), face.setup(EXPERIMENT), DELAY)
    hot = {"electron_heat_capacity": 0.02, "electron_phonon_coupling": 1e17}
    pairs = replace(film, band_gap=1.0, carrier_diffusivity=1.0, **hot)
    with pytest.raises(
        ValueError, match="has a lattice_share and a band_gap; a medium is a metal or a semicon"
    ):
        inv.simulate(inv.Stack(inv.Substrate(pairs)), face.setup(EXPERIMENT), DELAY)


def test_the_map_of_a_conducting_lattice_has_both_temperatures(al, si):
    ours, theirs = (Sample((m, si), (Joint(conductance=1e-4),)) for m in conducting(al, 30.0))
    depth = np.array([3.0, 15.0, 27.0])
    stack = face.stack(ours, media={0: {"lattice_share": SHARE}})
    found = strain_map(stack, face.setup(EXPERIMENT), [6.0], depth)
    *_, last = states(theirs, EXPERIMENT, 6.0, 0.02)
    for name, at in (("electron_temperature", last.heat.hot), ("temperature", last.heat.lattice)):
        expected = np.interp(depth, last.depth[:400], last.temperature[at][:400])
        np.testing.assert_allclose(found[name].values[:, 0], expected, rtol=2e-4)
    strain = np.interp(depth, last.depth[:400], last.strain[:400])
    np.testing.assert_allclose(found.strain.values[:, 0], strain, atol=1e-3 * np.abs(strain).max())


def test_semiconductors_launch_mostly_by_deformation_potential():
    # Common practice: in GaAs the pairs' stress exceeds the heat's. dE_gap / d strain = -9 eV along [100] and the
    # carriers' constants are round numbers from memory; heat's are the reference tables'.
    carriers = {"band_gap": 1.42, "carrier_diffusivity": 20.0, "deformation_potential": -9.0}
    setup = inv.PumpProbe(pump=800, probe=800, pulse_rms=0.2)
    peaks = []
    for more in ({**carriers, "deformation_potential": 0.0}, carriers):
        stack = inv.Stack(inv.Substrate("GaAs", orientation="100", **more))
        peaks.append(np.abs(strain_map(stack, setup, [60.0], np.linspace(1, 1500, 800)).elastic_strain).max())
    assert peaks[1] > 3 * peaks[0]


def test_the_stretch_of_pairs_is_in_the_map(dark):
    # Far from any wave, at rest: c eta = beta T - a N; with a frozen cloud of pairs the strain is theirs
    frozen = {**CARRIERS, "carrier_diffusivity": 1e-4}
    frozen = {k: v for k, v in frozen.items() if k not in ("carrier_lifetime", "surface_recombination")}
    stack = face.stack(Sample((replace(dark, thermal_stress=0.0),)), media={0: frozen})
    found = strain_map(stack, face.setup(EXPERIMENT), [30.0], [5.0, 40.0])
    alpha = 4 * np.pi * 1.6 / 400.0
    absorbed = 1 - abs((1 - (5.0 + 1.6j)) / (1 + 5.0 + 1.6j)) ** 2
    density = absorbed * alpha * np.exp(-alpha * np.array([5.0, 40.0])) / (PHOTON * EV)
    expected = -POTENTIAL * EV * density / dark.modulus
    np.testing.assert_allclose(found.strain[:, 0], expected, rtol=1e-3)
    assert np.abs(found.elastic_strain).max() < 1e-3 * expected.max()


@pytest.mark.parametrize(
    ("more", "message"),
    [
        ({"band_gap": 1.4}, "has a band_gap but no carrier_diffusivity"),
        ({"carrier_lifetime": 10.0}, "m0 has carrier_lifetime but no band_gap"),
        ({"dn_dN": 1 + 0j}, "m0 has dn_dN but no band_gap"),
        (
            {"band_gap": 5.0, "carrier_diffusivity": 1.0},
            r"band_gap = 5 eV, more than a photon of 400 nm \(3\.1 eV\)",
        ),
    ],
)
def test_carriers_half_described_are_refused(dark, more, message):
    with pytest.raises(ValueError, match=message):
        trace(Sample((dark,)), {0: more})
