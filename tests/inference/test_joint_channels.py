"""Two probe wavelengths and two channels of one site: shared film, separate optics, intervals that add up."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv
from inverse.study.coverage.check import check_coverage

DELAY = np.arange(-4.0, 45.0, 0.2)
FILM = {
    "thickness": inv.Unknown("d", stats.norm(30, 2)),
    "velocity": inv.Unknown("v", stats.norm(6.42, 0.2)),
}
COMPLIANCE = inv.Unknown("compliance", stats.uniform(0, 0.2))
TRUE = {"d": 30.4, "v": 6.5, "compliance": 0.05}


def stack():
    return inv.Stack(
        inv.Layer("Al", **FILM),
        inv.Interface(compliance=COMPLIANCE, boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )


def problem(probe, channels, seed, level=2e-3):
    setup = inv.PumpProbe(pump=400, probe=probe, pulse_rms=0.3)
    trace = inv.simulate(stack(), setup, DELAY, values=TRUE, channels=channels)
    rng = np.random.default_rng(seed)
    for name in channels:
        values = trace[name].values
        noise = level * np.ptp(values) * rng.standard_normal(values.size)
        trace[name] = trace[name].copy(data=values + noise)
    return inv.Inversion(stack(), setup, trace, time_zero=0.0, noise="white")


@pytest.fixture(scope="module")
def problems():
    return [
        problem(800, ("reflectance_change",), 1),
        problem(532, ("reflectance_change",), 2),
        problem(800, ("optical_phase", "transmission_change"), 3),
    ]


def precision(fit):
    """Inverse covariance of the shared unknowns in their own units, at the first minimum."""
    at = [fit.names.index(name) for name in TRUE]
    return np.linalg.inv(fit.best.covariance[np.ix_(at, at)])


def test_joint_intervals_narrow_as_fishers_information_adds_up(problems):
    singles = [precision(p.least_squares(seed=1, starts=3)) for p in problems]
    joint = inv.Inversion.joint(problems, labels=["red", "green", "through"]).least_squares(seed=1, starts=3)
    widths = [fit_sd for fit_sd in np.sqrt(np.diag(np.linalg.inv(precision(joint))))]
    prior = np.diag([1 / 2**2, 1 / 0.2**2, 0.0])
    expected = np.sqrt(np.diag(np.linalg.inv(sum(singles) - 2 * prior)))
    np.testing.assert_allclose(widths, expected, rtol=0.1)
    for single in singles:
        assert (np.array(widths) < np.sqrt(np.diag(np.linalg.inv(single)))).all()
    found = dict(zip(joint.names, joint.values, strict=True))
    for name, width in zip(TRUE, widths, strict=True):
        assert found[name] == pytest.approx(TRUE[name], abs=4 * width)


def test_each_wavelength_has_optics_of_its_own(problems):
    red, green = (p.posterior.members[0].model for p in problems[:2])
    index = [
        next(
            c["value"]
            for c in m.bound.constants
            if c["place"] == "Al" and "n_real" in c["field"] and c["field"].endswith(w)
        )
        for m, w in ((red, "800"), (green, "532"))
    ]
    assert index[0] != index[1]
    joint = inv.Inversion.joint(problems[:2], labels=["red", "green"])
    assert list(joint.names) == ["d", "v", "compliance", "red:noise.white", "green:noise.white"]


@pytest.mark.slow
def test_joint_intervals_of_two_wavelengths_and_two_channels_are_calibrated(problems):
    joint = inv.Inversion.joint(problems, labels=["red", "green", "through"])
    found = check_coverage(joint, seed=1, replicates=20, method="importance", progress=False)
    assert found.passed, found.verdict
    # the three shared unknowns together: three binomial errors
    assert abs(found.share(0.9, TRUE) - 0.9) < 3 * np.sqrt(0.09 / (20 * 3))
