"""Noise of a channel: white (Gaussian or Student's t), or white plus a correlated discrepancy, exponential kernel.

``K_ij = sigma^2 d_i^2 delta_ij + a^2 exp(-|t_i - t_j| / l)``; d is the relative noise per delay (ones, unless
repeated scans tell it). The exponential kernel's inverse is tridiagonal (Ornstein-Uhlenbeck is Markov), so that
``K^-1 = (1 - M^-1) / sigma^2``, ``M = 1 + (sigma/a)^2 T``, costs a tridiagonal solve: O(delays).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack

__all__ = ["FREEDOM", "NOISE_MODELS", "Noise", "noise_priors"]

Array = NDArray[np.float64]

NOISE_MODELS = ("correlated", "white", "student")

FREEDOM = 4.0
"""Degrees of freedom of Student's t: heavy tails, a finite variance; a choice, as a trace says little about it."""

# Beyond this ratio of variances the smaller part is lost in rounding and means nothing.
_RATIO = 1e12


@dataclass(frozen=True)
class Noise:
    """Noise model of one channel.

    Attributes
    ----------
    model : str
        ``"correlated"``, ``"white"``, or ``"student"``: correlated with white noise of Student's t distribution,
        whose likelihood is `inverse.inference.problem.robust`'s; `gram` and `whiten` take it for Gaussian.
    delay : array, shape (delays,)
        ps, strictly increasing.
    relative : array, shape (delays,)
        Relative standard deviation of the white part per delay.
    """

    model: str
    delay: Array
    relative: Array

    def gram(self, rows: Array, values: Mapping[str, Array]) -> tuple[Array, Array]:
        """Return ``Z K^-1 Z'`` and log det K for a batch.

        Parameters
        ----------
        rows : array, shape (sets, rows, delays)
            Basis functions and data.
        values : mapping
            ``white`` and, if correlated, ``discrepancy`` and ``correlation_time``, each of shape (sets,).

        Returns
        -------
        array, shape (sets, rows, rows)
        array, shape (sets,)
        """
        sigma = values["white"]
        log_det = 2 * self.delay.size * np.log(sigma) + 2 * np.log(self.relative).sum()
        if self.model == "white":
            scaled = rows / self.relative
            return scaled @ scaled.swapaxes(1, 2) / sigma[:, None, None] ** 2, log_det
        ratio = np.minimum((sigma / np.maximum(values["discrepancy"], 1e-300)) ** 2, _RATIO)
        diagonal, off, log_prior_det = self._precision(values["correlation_time"])
        pivots, multipliers = 1 + ratio[:, None] * diagonal, ratio[:, None] * off
        product = np.empty((len(sigma), rows.shape[1], rows.shape[1]))
        # Set by set: one set's rows stay in a core's cache from the first step to the last.
        for b in range(len(sigma)):
            scaled = rows[b] / self.relative
            lapack.dpttrf(pivots[b], multipliers[b], overwrite_d=True, overwrite_e=True)
            solved = lapack.dpttrs(pivots[b], multipliers[b], scaled.T)[0].T
            np.matmul(scaled, np.subtract(scaled, solved, out=solved).T, out=product[b])
        extra = np.log(pivots).sum(axis=1) - log_prior_det - self.delay.size * np.log(ratio)
        return (product + product.swapaxes(1, 2)) / (2 * sigma[:, None, None] ** 2), log_det + extra

    def whiten(self, rows: Array, values: Mapping[str, float]) -> Array:
        """Return vectors whose scalar products are those of ``K^-1``, for one parameter set.

        The correlated part contributes as many entries again: the best discrepancy f has cost
        ``|r - f|^2 / sigma^2 + f' T f / a^2``, which is ``r' K^-1 r``.

        Parameters
        ----------
        rows : array, shape (rows, delays)
        values : mapping
            As for `gram`, scalars.

        Returns
        -------
        array, shape (rows, delays) or (rows, 2 x delays)
        """
        sigma = values["white"]
        scaled = rows / self.relative
        if self.model == "white":
            return scaled / sigma
        f = self.discrepancy(rows, values) / self.relative
        return np.concatenate([(scaled - f) / sigma, self.steps(f * self.relative, values)], axis=1)

    def steps(self, discrepancy: Array, values: Mapping[str, float]) -> Array:
        """Return independent standard normal steps that make a discrepancy, shape (rows, delays)."""
        rho = np.exp(-np.diff(self.delay) / values["correlation_time"])
        g = discrepancy / values["discrepancy"]
        later = (g[:, 1:] - rho * g[:, :-1]) / np.sqrt(-np.expm1(2 * np.log(rho)))
        return np.concatenate([g[:, :1], later], axis=1)

    def discrepancy(self, rows: Array, values: Mapping[str, float]) -> Array:
        """Return the posterior mean of the discrepancy under residual rows, shape (rows, delays)."""
        if self.model == "white":
            return np.zeros_like(rows)
        ratio = min((values["white"] / max(values["discrepancy"], 1e-300)) ** 2, _RATIO)
        diagonal, off, _ = self._precision(np.array([values["correlation_time"]]))
        factor = lapack.dpttrf(1 + ratio * diagonal[0], ratio * off[0])
        scaled = rows / self.relative
        return lapack.dpttrs(factor[0], factor[1], scaled.T)[0].T * self.relative

    def draw(self, rng: np.random.Generator, values: Mapping[str, float], correlated: bool = True) -> Array:
        """Draw one realisation, shape (delays,)."""
        size = self.delay.size
        unit = rng.standard_t(FREEDOM, size) if self.model == "student" else rng.standard_normal(size)
        white = values["white"] * self.relative * unit
        if self.model == "white" or not correlated:
            return white
        rho = np.exp(-np.diff(self.delay) / values["correlation_time"])
        kicks = rng.standard_normal(self.delay.size)
        path = np.empty(self.delay.size)
        path[0] = kicks[0]
        for i, (r, kick) in enumerate(zip(rho, kicks[1:], strict=True)):
            path[i + 1] = r * path[i] + np.sqrt(1 - r * r) * kick
        return white + values["discrepancy"] * path

    def _precision(self, length: Array) -> tuple[Array, Array, Array]:
        """Diagonal, off-diagonal and log det of the unit discrepancy's inverse covariance, scaled by d, per set."""
        drop = np.expm1(-np.diff(self.delay) / length[:, None])
        rho, gap = 1 + drop, -drop * (2 + drop)
        inverse = 1 / gap
        diagonal = np.ones((length.size, self.delay.size))
        diagonal[:, 1:] = inverse
        diagonal[:, :-1] += rho * rho * inverse
        d = self.relative
        log_det = 2 * np.log(d).sum() - np.log(gap).sum(axis=1)
        return diagonal * (d * d), -rho * inverse * (d[1:] * d[:-1]), log_det


def noise_priors(model: str, level: float, delay: Array) -> dict[str, Any]:
    """Return the weak default priors of a channel's noise.

    Parameters
    ----------
    model : str
        One of `NOISE_MODELS`.
    level : float
        White noise per point, estimated from the trace (`first_look`), in its unit.
    delay : array
        ps.

    Returns
    -------
    dict
        ``white``: log-normal about the estimate, a factor of 2 at one standard deviation.
        ``discrepancy``: log-normal about the white level, a factor of 10 at one standard deviation: from nothing that
        matters to far above the noise. (A half-Cauchy on that scale leaves too little room for no discrepancy: where
        there is none, it widens a boundary conductance to 1.4 times Cramer-Rao.)
        ``correlation_time``: log-uniform from three median steps to the trace's length.

    Raises
    ------
    ValueError
        If the model is not known or the level is not positive.
    """
    from scipy import stats

    if model not in NOISE_MODELS:
        raise ValueError(f"noise={model!r} is not known; choose one of {', '.join(NOISE_MODELS)}.")
    if not (np.isfinite(level) and level > 0):
        raise ValueError(
            f"The white noise level is {level!r}; it must be positive. Is the trace noise-free or constant?"
        )
    priors: dict[str, Any] = {"white": stats.lognorm(np.log(2), scale=level)}
    if model != "white":
        step = float(np.median(np.diff(delay)))
        priors["discrepancy"] = stats.lognorm(np.log(10), scale=level)
        priors["correlation_time"] = stats.loguniform(3 * step, float(delay[-1] - delay[0]))
    return priors
