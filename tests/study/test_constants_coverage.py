"""Round trip: constants drawn from their priors, noisy velocities, and how often the intervals hold them."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy import stats

from inverse.elastic import BRANCHES, branch_moduli
from inverse.study.stiffness.constants import ConstantsInversion
from inverse.study.stiffness.measurements import Velocity
from inverse.study.stiffness.velocity_posterior import VelocityPosterior

REPLICATES = 60


@dataclass(frozen=True)
class Case:
    """Priors about published constants, and what is measured of each replicate."""

    symmetry: str
    density: float
    centre: dict
    spread: float
    directions: tuple
    labels: tuple


CUBIC = Case(
    "cubic",
    2.3296,
    {"c11": 165.78, "c12": 63.94, "c44": 79.62},  # Si, CRC
    15.0,
    ([1.0, 0.0, 0.0], [1.0, 1.0, 0.0], [1.0, 1.0, 0.0], [1.0, 2.0, 4.0]),
    ("longitudinal", "fast transverse", "transverse", "unknown"),
)
HEXAGONAL = Case(
    "hexagonal",
    6.10,
    {"c11": 390.0, "c12": 145.0, "c13": 106.0, "c33": 398.0, "c44": 105.0},  # GaN, Brillouin scattering 1996
    25.0,
    ([0.0, 0.0, 1.0], [0.0, 0.0, 1.0], [1.0, 0.0, 0.0], [1.0, 0.0, 0.0], [1.0, 0.0, 1.0], [1.0, 0.0, 1.0]),
    ("longitudinal", "transverse", "longitudinal", "transverse", "longitudinal", "unknown"),
)
TRIGONAL = Case(
    "trigonal_6",
    3.99,
    {
        "c11": 497.35,
        "c12": 163.97,
        "c13": 112.2,
        "c14": -23.58,
        "c33": 499.11,
        "c44": 147.39,
    },  # sapphire, CRC
    15.0,
    (
        *([0.0, 0.0, 1.0], [0.0, 0.0, 1.0], [1.0, 0.0, 0.0], [0.0, 1.0, 0.0]),
        *([0.0, 1.0, 1.0], [0.0, 1.0, 1.0], [0.0, -1.0, 1.0]),
    ),
    (
        *("longitudinal", "transverse", "longitudinal", "fast transverse"),
        *("longitudinal", "unknown", "longitudinal"),
    ),
)
SIGMA = 0.03


def replicate(case: Case, seed: int, understated: float = 1.0) -> tuple[np.ndarray, ConstantsInversion]:
    """Constants from the priors (stable ones) and a problem with one noisy data set of them."""
    rng = np.random.default_rng([seed, 77])
    priors = {name: stats.norm(value, case.spread) for name, value in case.centre.items()}
    directions = np.array([np.array(d) / np.linalg.norm(d) for d in case.directions])
    truth = np.array([rng.normal(value, case.spread) for value in case.centre.values()])
    moduli = branch_moduli(case.symmetry, directions)(truth[None])[0]
    assert np.all(moduli > 0)
    rows = []
    for label, direction, wave in zip(case.labels, directions, np.sqrt(moduli / case.density), strict=True):
        which = {"transverse": rng.integers(1, 3), "unknown": rng.integers(0, 3)}.get(label)
        index = BRANCHES.index(label) if which is None else which
        value = rng.normal(wave[index], SIGMA)
        rows.append(Velocity(direction=direction, value=value, uncertainty=SIGMA / understated, branch=label))
    return truth, ConstantsInversion(case.symmetry, rows, density=case.density, priors=priors)


def importance_draws(posterior: VelocityPosterior, fit: object, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Weighted draws: every minimum's covariance, widened, as a mixture of t distributions of 4 degrees."""
    rng = np.random.default_rng(seed)
    each = 4000 // len(fit.minima)
    parts = [stats.multivariate_t(b.z, 1.4**2 * b.covariance_z, df=4, seed=rng) for b in fit.minima]
    z = np.concatenate([part.rvs(each).reshape(each, -1) for part in parts])
    proposal = np.log(np.mean([part.pdf(z).reshape(-1) for part in parts], axis=0))
    log_weight = posterior(z) - proposal
    return posterior.parameters.to_values(z), np.exp(log_weight - log_weight.max())


def rank_of(truth: np.ndarray, problem: ConstantsInversion, fit: object, seed: int) -> np.ndarray:
    """Share of the posterior below the truth, by constant; from the sampler where the weights are too uneven."""
    values, weight = importance_draws(problem.posterior, fit, seed)
    if weight.sum() ** 2 / (weight**2).sum() > 100:
        return (weight[:, None] * (values < truth)).sum(axis=0) / weight.sum()
    draws = problem.sample_posterior(seed=seed, fit=fit, progress=False)["posterior"]
    return np.array([float((draws[n] < t).mean()) for n, t in zip(problem.names, truth, strict=True)])


def ranks(case: Case, understated: float = 1.0) -> tuple[np.ndarray, np.ndarray]:
    """Posterior rank of the truth, shape (replicates, constants), and normal scores of least squares."""
    found, scores = [], []
    for seed in range(REPLICATES):
        truth, problem = replicate(case, seed, understated)
        fit = problem.least_squares(seed=seed)
        found.append(rank_of(truth, problem, fit, seed))
        scores.append((truth - fit.values) / fit.sd)
    return np.array(found), np.array(scores)


def held(rank: np.ndarray, mass: float) -> np.ndarray:
    return (np.abs(rank - 0.5) < mass / 2).sum(axis=0)


def band(mass: float) -> tuple[float, float]:
    """Counts that 99.9 % of honest intervals stay in, for one constant."""
    return tuple(stats.binom(REPLICATES, mass).ppf([0.0005, 0.9995]))


@pytest.mark.slow
@pytest.mark.parametrize("case", [CUBIC, HEXAGONAL, TRIGONAL], ids=lambda case: case.symmetry)
def test_intervals_hold_the_truth_as_often_as_they_say(case: Case) -> None:
    rank, score = ranks(case)
    for mass in (0.68, 0.95):
        low, high = band(mass)
        assert np.all((held(rank, mass) >= low) & (held(rank, mass) <= high)), (mass, held(rank, mass))
        normal = stats.norm.cdf(score)
        assert np.all((held(normal, mass) >= low) & (held(normal, mass) <= high)), (mass, held(normal, mass))
    for constant in rank.T:
        assert stats.kstest(constant, "uniform").pvalue > 1e-3


@pytest.mark.slow
def test_understated_uncertainties_are_seen_by_the_same_check() -> None:
    rank, _ = ranks(CUBIC, understated=3.0)
    assert held(rank, 0.68).min() < band(0.68)[0]


@pytest.mark.slow
@pytest.mark.parametrize("case", [CUBIC, HEXAGONAL, TRIGONAL], ids=lambda case: case.symmetry)
def test_the_sampler_agrees_with_importance_sampling(case: Case) -> None:
    _, problem = replicate(case, 3)
    fit = problem.least_squares(seed=3)
    result = problem.sample_posterior(seed=3, fit=fit, ess=2000, progress=False)
    values, weight = importance_draws(problem.posterior, fit, 3)
    for i, name in enumerate(problem.names):
        mean = np.average(values[:, i], weights=weight)
        sd = np.sqrt(np.average((values[:, i] - mean) ** 2, weights=weight))
        effective = weight.sum() ** 2 / (weight**2).sum()
        draws = result["posterior"][name].to_numpy()
        assert draws.mean() == pytest.approx(mean, abs=4 * sd * np.sqrt(1 / effective + 1 / 2000))
        assert draws.std() == pytest.approx(sd, rel=0.15)
