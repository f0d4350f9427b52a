"""Probability of each minimum: known mixtures, ensembles that disagree, walkers that never cross, minima unknown."""

import json

import numpy as np
import pytest
import xarray as xr
from fake_results import posterior
from problems import SETUP, bonded, noisy
from scipy import stats

import inverse as inv
from inverse.inference.checks.basins import basins, minima_record

PRIORS = {
    "Al.thickness": stats.norm(60, 10),
    "Al.velocity": stats.norm(6.42, 0.1),
    "noise.white": stats.loguniform(1e-7, 1e-4),
}
CENTRES = np.array([[-1.0, 0.5], [1.5, -0.5]])
COVARIANCE = np.array([[0.01, 0.004], [0.004, 0.04]])
WALKERS, STEPS = 10, 100


def tree(labels: np.ndarray, *, better: float = 0.0, centres=CENTRES, recorded=2, seed=1) -> xr.DataTree:
    """Draws around known minima; labels of shape (ensembles, draws), walker after walker."""
    rng = np.random.default_rng(seed)
    kicks = rng.standard_normal((*labels.shape, 2)) @ np.linalg.cholesky(COVARIANCE).T
    z = centres[labels] + kicks
    values = {
        "Al.thickness": 60 + 10 * z[..., 0],
        "Al.velocity": 6.42 + 0.1 * z[..., 1],
        "noise.white": np.exp(rng.uniform(-14, -12, labels.shape)),
    }
    lp = -0.5 * np.einsum("...i,ij,...j", kicks, np.linalg.inv(COVARIANCE), kicks) + better
    dataset = posterior(values, PRIORS).assign_coords(
        walker=("draw", np.repeat(np.arange(WALKERS), labels.shape[1] // WALKERS))
    )
    whole = np.zeros((3, 3))
    whole[:2, :2], whole[2, 2] = COVARIANCE, 1.0
    minima = [
        {
            "values": {"Al.thickness": 60 + 10 * c[0], "Al.velocity": 6.42 + 0.1 * c[1], "noise.white": 1e-6},
            "weight": w,
            "log_posterior": 0.0,
            "z": [*c, 0.0],
            "covariance_z": whole.tolist(),
        }
        for c, w in zip(CENTRES, (0.7, 0.3), strict=True)
    ]
    made = xr.DataTree.from_dict(
        {"posterior": dataset, "sample_stats": xr.Dataset({"lp": (("chain", "draw"), lp)})}
    )
    made.attrs["inverse"] = json.dumps({"minima": minima[:recorded]})
    return made


def hopping(share: float, seed: int, ensembles: int = 4) -> np.ndarray:
    """Labels that are independent from draw to draw."""
    return (np.random.default_rng(seed).uniform(size=(ensembles, WALKERS * STEPS)) < share).astype(int)


def test_shares_of_a_known_mixture() -> None:
    """4000 independent draws, 30 % in the second minimum."""
    found = basins(tree(hopping(0.3, 2)))
    first, second = found.minima
    assert first.probability + second.probability == pytest.approx(1.0)
    assert abs(second.probability - 0.3) < 3 * second.error
    assert second.error == pytest.approx(np.sqrt(0.3 * 0.7 / 4000), rel=0.8)
    np.testing.assert_allclose(second.errors, np.sqrt(0.3 * 0.7 / 1000), rtol=0.25)
    assert found.passages > 1000
    assert found.warnings == ()


def test_a_minimum_without_draws_is_still_reported() -> None:
    found = basins(tree(hopping(0.0, 3)))
    assert found.minima[1].probability == 0.0
    assert found.minima[1].error > 0
    assert "minimum 2: under" in str(found)


def test_ensembles_that_disagree_are_named() -> None:
    labels = hopping(0.3, 4)
    labels[2] = hopping(0.5, 5)[2]
    (first, second) = basins(tree(labels)).warnings
    assert first.startswith("The ensembles disagree on minimum 1: from 5")
    assert "minimum 2" in second


def test_ensembles_stuck_in_minima_of_their_own_are_named() -> None:
    labels = np.repeat([[0], [0], [1], [1]], WALKERS * STEPS, axis=1)
    found = basins(tree(labels))
    assert found.passages == 0
    assert any("The ensembles disagree" in w for w in found.warnings)
    assert any("Walkers went from one minimum to another 0 times" in w for w in found.warnings)


def test_walkers_that_never_cross_are_named_although_ensembles_agree() -> None:
    """Every ensemble has three of ten walkers in the second minimum and none moves over."""
    labels = np.tile(np.repeat([0, 0, 0, 0, 0, 0, 0, 1, 1, 1], STEPS), (4, 1))
    found = basins(tree(labels))
    assert found.passages == 0
    assert found.warnings[-1].startswith("Walkers went from one minimum to another 0 times")


def test_a_minimum_that_least_squares_missed_is_not_hidden() -> None:
    """The second minimum is not recorded: its draws are far from the first."""
    found = basins(tree(hopping(0.3, 6), recorded=1))
    assert any("lie more than 5 deviations from every minimum" in w for w in found.warnings)
    assert any("are better than it by" in w for w in basins(tree(hopping(0.3, 7), better=5.0)).warnings)


def test_the_record_of_a_fit_holds_what_basins_needs() -> None:
    stack = bonded(velocity=6.42, compliance=0.02)
    trace = noisy(stack, {"Al.thickness": 60.0}, 0.01, seed=1)
    fit = inv.Inversion(stack, SETUP, trace, time_zero=0.0).least_squares(seed=1, starts=2)
    record = json.loads(json.dumps(minima_record(fit)))
    assert len(record) == len(fit.minima)
    np.testing.assert_array_equal(record[0]["covariance_z"], fit.best.covariance_z)
    assert record[0]["values"]["Al.thickness"] == fit.values[0]
    assert record[0]["log_posterior"] == fit.best.log_posterior


def test_wrong_arguments_are_refused() -> None:
    with pytest.raises(ValueError, match="basins takes the result of sample_posterior, not list"):
        basins([])
    bare = tree(hopping(0.3, 8), recorded=0)
    with pytest.raises(ValueError, match="holds no record of minima"):
        basins(bare)
