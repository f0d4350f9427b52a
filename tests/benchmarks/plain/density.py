"""Posterior of the example, one point a call: amplitudes sampled with everything else, or eliminated."""

import math
from typing import NamedTuple

import numpy as np
from scipy.linalg import cho_factor, cho_solve, solveh_banded

from plain.film import Grid, Material, Unknowns, basis

LOG_2PI = math.log(2 * math.pi)


class Problem(NamedTuple):
    """Data and what is known.

    `widths` are the prior widths of the amplitudes, the baseline's last; all but that are scaled together so that the
    trace they predict has the rms `size`, if there is one.
    """

    film: Material
    base: Material
    base_sound: tuple[float, float]
    wavelengths: tuple[float, float]
    grid: Grid
    delay: np.ndarray
    data: np.ndarray
    widths: np.ndarray
    size: float | None
    busy: np.ndarray
    time_zero: tuple[float, float]
    level: float


def log_prior(problem: Problem, x: np.ndarray) -> float:
    """Priors of the bundled example; -inf outside."""
    d, ratio, velocity, compliance, conductance, zero, white, discrepancy, time = x
    step, length = 3 * np.median(np.diff(problem.delay)), problem.delay[-1] - problem.delay[0]
    if not (40 < d < 80 and compliance > 0 and 20 < conductance < 500 and step < time < length):
        return -math.inf
    if white <= 0 or discrepancy <= 0 or ratio <= 0 or velocity <= 0:
        return -math.inf
    return (
        normal(ratio, 1.16, 0.035)
        + normal(velocity, 6.42, 0.10)
        - math.log1p((compliance / 0.05) ** 2)
        - math.log(conductance)
        - math.log(time)
        + normal(zero, *problem.time_zero)
        + normal(math.log(white / problem.level), 0, math.log(2))
        - math.log(white)
        + normal(math.log(discrepancy / problem.level), 0, math.log(10))
        - math.log(discrepancy)
    )


def normal(value: float, mean: float, sd: float) -> float:
    return -0.5 * ((value - mean) / sd) ** 2


def functions(problem: Problem, x: np.ndarray) -> np.ndarray:
    """Basis functions and baseline in units of their prior widths, (10, delays)."""
    d, ratio, velocity, compliance, conductance, zero, *_ = x
    density, _ = problem.base_sound
    unknowns = Unknowns(d, ratio * density, velocity, compliance, 1e6 / conductance, zero)
    rows = basis(unknowns, problem.film, problem.base, problem.base_sound, problem.wavelengths, problem.grid)
    rows = rows * problem.widths[:-1, None]
    if problem.size is not None:
        rows *= problem.size / np.sqrt((rows[problem.busy] ** 2).sum(axis=0).mean())
    return np.vstack([rows, np.full(problem.delay.size, problem.widths[-1])])


def weigh(problem: Problem, rows: np.ndarray, x: np.ndarray) -> tuple[np.ndarray, float]:
    """Return K^-1 times rows, and log det K, for white noise with an exponentially correlated part: O(delays)."""
    *_, white, discrepancy, time = x
    n, rho = problem.delay.size, np.exp(-np.diff(problem.delay) / time)
    gap = 1 - rho**2
    diagonal = np.ones(n)
    diagonal[1:] = 1 / gap
    diagonal[:-1] += rho**2 / gap
    ratio = (white / discrepancy) ** 2
    bands = np.zeros((2, n))
    bands[0] = 1 + ratio * diagonal
    bands[1, :-1] = -ratio * rho / gap
    solved = solveh_banded(bands, rows.T, lower=True).T
    log_det = 2 * n * math.log(discrepancy) + np.log(gap).sum() + log_det_tridiagonal(bands)
    return (rows - solved) / white**2, log_det


def log_det_tridiagonal(bands: np.ndarray) -> float:
    """Log determinant by the recurrence of the pivots."""
    total, pivot = 0.0, math.inf
    off = np.concatenate([[0.0], bands[1, :-1]])
    for a, b in zip(bands[0].tolist(), off.tolist(), strict=True):
        pivot = a - b * b / pivot
        total += math.log(pivot)
    return total


def log_likelihood_of_all(problem: Problem, x: np.ndarray, amplitudes: np.ndarray) -> float:
    """Likelihood of unknowns and amplitudes (in prior widths)."""
    residual = problem.data - amplitudes @ functions(problem, x)
    weighted, log_det = weigh(problem, residual[None], x)
    return -0.5 * (residual @ weighted[0] + log_det + residual.size * LOG_2PI)


def log_likelihood_eliminated(problem: Problem, x: np.ndarray) -> float:
    """Likelihood with the amplitudes integrated out in closed form."""
    rows = np.vstack([functions(problem, x), problem.data])
    weighted, log_det = weigh(problem, rows, x)
    gram = rows @ weighted.T
    factor = cho_factor(gram[:-1, :-1] + np.eye(len(rows) - 1), lower=True)
    misfit = gram[-1, -1] - gram[-1, :-1] @ cho_solve(factor, gram[-1, :-1])
    return -0.5 * (misfit + log_det + problem.data.size * LOG_2PI) - np.log(np.diag(factor[0])).sum()


def log_posterior_of_all(point: np.ndarray, problem: Problem) -> float:
    """Of nine unknowns and ten amplitudes, as emcee wants it."""
    x, amplitudes = point[:9], point[9:]
    prior = log_prior(problem, x)
    if not math.isfinite(prior):
        return -math.inf
    return prior - 0.5 * amplitudes @ amplitudes + log_likelihood_of_all(problem, x, amplitudes)


def log_posterior_eliminated(point: np.ndarray, problem: Problem) -> float:
    """Of nine unknowns, as emcee wants it."""
    prior = log_prior(problem, point)
    return prior + log_likelihood_eliminated(problem, point) if math.isfinite(prior) else -math.inf
