"""Sites fitted jointly against the two-step way, where they share what no one of them measures well."""

import numpy as np
import pytest
from scipy import stats

import inverse as inv

pytestmark = pytest.mark.slow

THICKNESSES = (55.0, 58.0, 61.0, 64.0)
SHARED = ("bond", "ratio", "speed")


def stack(thickness, speed, ratio, bond):
    return inv.Stack(
        inv.Layer("Al", thickness=thickness, velocity=speed, density_ratio=ratio),
        inv.Interface(compliance=bond, boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )


@pytest.fixture(scope="module")
def fits():
    """Four sites of one film with one bond: each by itself, and all together."""
    setup = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
    unknown = {
        "speed": inv.Unknown("speed", stats.norm(6.42, 0.01)),
        "ratio": inv.Unknown("ratio", stats.norm(1.16, 0.004)),
        "bond": inv.Unknown("bond", stats.halfcauchy(scale=0.05)),
    }
    rng, singles = np.random.default_rng(3), []
    for thickness in THICKNESSES:
        trace = inv.simulate(stack(thickness, 6.42, 1.16, 0.15), setup, np.arange(-5.0, 70.0, 0.2))
        clean = trace["reflectance_change"].values
        noisy = clean + 0.002 * np.abs(clean).max() * rng.standard_normal(clean.size)
        trace = inv.make_trace(trace["delay"].values, reflectance_change=noisy)
        described = stack(stats.norm(thickness, 2), unknown["speed"], unknown["ratio"], unknown["bond"])
        singles.append(inv.Inversion(described, setup, trace, noise="white", time_zero=0.0))
    alone = [single.least_squares(seed=1, starts=3) for single in singles]
    start = {}
    for number, fit in enumerate(alone, 1):
        for name, value in zip(fit.names, fit.values, strict=True):
            start[name if name in SHARED else f"{number}:{name}"] = float(value)
    return alone, inv.Inversion.joint(singles).least_squares(seed=1, starts=1, points=[start])


def shared(fit):
    places = [fit.names.index(name) for name in SHARED]
    return fit.best.covariance[np.ix_(places, places)]


def prior_precision():
    """Of speed and ratio; the bond's prior is flat over its likelihood."""
    return np.diag([0.0, 0.004**-2, 0.01**-2])


def test_joint_covariance_counts_the_shared_priors_once(fits):
    """Precisions of the data add, that of the shared priors enters once."""
    alone, together = fits
    data = sum(np.linalg.inv(shared(fit)) - prior_precision() for fit in alone)
    expected = np.sqrt(np.linalg.inv(data + prior_precision()).diagonal())
    assert np.sqrt(shared(together).diagonal()) == pytest.approx(expected, rel=0.05)


def test_the_two_step_way_claims_too_much(fits):
    """Averaging four results as if independent counts the prior of density and speed four times."""
    alone, together = fits
    two_steps = sum(1 / shared(fit)[0, 0] for fit in alone) ** -0.5
    joint = np.sqrt(shared(together)[0, 0])
    assert joint > 1.2 * two_steps
    assert joint < min(np.sqrt(shared(fit)[0, 0]) for fit in alone)


def test_the_joint_fit_finds_the_truth(fits):
    _, together = fits
    for name, known in (("bond", 0.15), ("ratio", 1.16), ("speed", 6.42)):
        place = together.names.index(name)
        assert abs(together.values[place] - known) < 3 * together.sd[place]
