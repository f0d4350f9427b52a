"""The solver's optics against `tmm`, an independent package, at normal and oblique incidence."""

import numpy as np
import pytest
import tmm

from .transfer_matrices import Beam, solve

INDICES = np.array([2.7 + 8.3j, 1.45, 3.6 + 2.9j])
THICKNESSES = np.array([11.0, 170.0, 14.0])
EXIT = 3.69 + 0.0065j


def tmm_solution(n, d, beam, ambient=1.0, exit_index=EXIT):
    indices, depths = [ambient, *n, exit_index], [np.inf, *d, np.inf]
    return tmm.coh_tmm(beam.polarisation, indices, depths, beam.angle, beam.wavelength)


@pytest.mark.parametrize("polarisation", ["s", "p"])
@pytest.mark.parametrize("angle", [0.0, 0.9])
@pytest.mark.parametrize("ambient", [1.0, 1.33])
def test_reflection_transmission_and_absorption_agree_with_tmm(polarisation, angle, ambient):
    beam = Beam(800.0, angle, polarisation)
    ours, theirs = (
        solve(INDICES, THICKNESSES, beam, ambient, EXIT),
        tmm_solution(INDICES, THICKNESSES, beam, ambient),
    )
    assert abs(ours.reflection) ** 2 == pytest.approx(theirs["R"], rel=1e-12)
    np.testing.assert_allclose(ours.absorbed, tmm.absorp_in_each_layer(theirs)[1:-1], rtol=1e-10, atol=1e-14)
    assert 1 - theirs["R"] - ours.absorbed.sum() == pytest.approx(theirs["T"], rel=1e-10)
    assert abs(ours.transmission) == pytest.approx(
        abs(theirs["t"]) * (abs(np.cos(theirs["th_list"][-1]) / np.cos(angle)) if polarisation == "p" else 1),
        rel=1e-12,
    )


@pytest.mark.parametrize("polarisation", ["s", "p"])
@pytest.mark.parametrize("angle", [0.0, 0.9])
def test_sensitivities_agree_with_perturbed_tmm(polarisation, angle):
    beam, small = Beam(800.0, angle, polarisation), 1e-5
    ours = solve(INDICES, THICKNESSES, beam, 1.0, EXIT)
    for layer in range(3):
        unit = np.eye(3)[layer]
        for change, dn, dd in (
            (small, unit, 0 * unit),
            (1j * small, unit, 0 * unit),
            (small, 0 * unit, unit),
        ):
            up, down = (
                tmm_solution(INDICES + s * change * dn, THICKNESSES + s * (change * dd).real, beam)
                for s in (1, -1)
            )
            predicted_r = (change * (ours.dlog_r_dn @ dn + ours.dlog_r_dd @ dd)) / small
            predicted_t = (change * (ours.dlog_t_dn @ dn + ours.dlog_t_dd @ dd)) / small
            assert predicted_r == pytest.approx(np.log(up["r"] / down["r"]) / (2 * small), rel=1e-6, abs=1e-9)
            assert predicted_t == pytest.approx(np.log(up["t"] / down["t"]) / (2 * small), rel=1e-6, abs=1e-9)


def test_slicing_changes_nothing():
    whole = solve(INDICES, THICKNESSES, Beam(800.0), 1.0, EXIT)
    sliced = solve(np.repeat(INDICES, 50), np.repeat(THICKNESSES / 50, 50), Beam(800.0), 1.0, EXIT)
    assert sliced.reflection == pytest.approx(whole.reflection, rel=1e-12)
    np.testing.assert_allclose(
        sliced.absorbed.reshape(3, 50).sum(axis=1), whole.absorbed, rtol=1e-10, atol=1e-14
    )
    np.testing.assert_allclose(sliced.dlog_r_dn.reshape(3, 50).sum(axis=1), whole.dlog_r_dn, rtol=1e-10)
