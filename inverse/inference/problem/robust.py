"""Outliers: white noise of Student's t distribution beside the correlated discrepancy.

``y = X c + f + sigma d e``: e of Student's t with nu degrees of freedom, c ~ N(0, 1), f the discrepancy. The mode of
(c, f) is found by iteratively reweighted least squares with ``w = (nu + 1)/(nu + u^2)``, ``u = r/(sigma d)``, under
which every step raises the density (Lange, Little and Taylor, J. Am. Stat. Assoc. 84, 881, 1989; from memory). The
marginal likelihood is Laplace's approximation there, with a factor for what each point is not Gaussian in:

``log p(y) = log p(y, c, f) + (N + k)/2 log 2 pi - log det H /2 + sum_i log E[t(u_i)/g(u_i)]``.

H is the negative Hessian, to which a point adds ``h/(sigma d)^2``, ``h = (nu + 1)(nu - u^2)/(nu + u^2)^2``, or nothing
where that is negative, further out than sqrt(nu); g is the Gaussian factor that H puts in the place of the point's t
density, and the expectation is over the approximation's own distribution of ``(X c + f)_i``. (Alone, Laplace's
approximation misses several units of the log likelihood where the discrepancy is large: see the tests.) All is
tridiagonal plus a few columns: O(delays).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy import special
from scipy.linalg import lapack

from inverse.inference.problem.elimination import Eliminated
from inverse.inference.problem.noise import FREEDOM, Noise

if TYPE_CHECKING:
    from inverse.inference.problem.likelihood import Channel

__all__ = ["eliminate_student", "gaussian_noise", "student_residuals"]

Array = NDArray[np.float64]

_LARGEST_RATIO = 1e12
_ITERATIONS = 100
# Rise of the log density at which to stop; each step leaves about a tenth of what is missing. Residuals are
# differentiated, so that they take more.
_TOLERANCE = 1e-5
_FINE = 1e-8
# Curvature, relative to a Gaussian's, of points that have none.
_FLAT = 1e-9
_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(15)
_WEIGHTS = _WEIGHTS / _WEIGHTS.sum()

_LOG_PEAK = float(
    special.gammaln((FREEDOM + 1) / 2) - special.gammaln(FREEDOM / 2) - 0.5 * np.log(FREEDOM * np.pi)
)
"""Log of the standard t density at 0."""


@dataclass(frozen=True)
class _Part:
    """One channel of a batch.

    ``stacked`` (sets, coefficients + 1, delays) holds basis and data; the discrepancy's inverse covariance is
    tridiagonal, ``T / a^2``, and ``ratio = (sigma/a)^2``.
    """

    stacked: Array
    relative: Array
    sigma: Array
    ratio: Array
    diagonal: Array
    off: Array
    log_det: Array

    def take(self, chosen: NDArray[np.bool_]) -> _Part:
        """Return some sets of the batch."""
        sets = (self.sigma, self.ratio, self.diagonal, self.off, self.log_det)
        return _Part(self.stacked[chosen], self.relative, *(a[chosen] for a in sets))

    def smooth(self, weights: Array) -> tuple[Array, Array]:
        """Return the discrepancy each row would be taken for, and log det of ``w/d^2 + ratio T``."""
        heavy = weights / self.relative**2
        taken, log_det = np.empty_like(self.stacked), np.empty(len(heavy))
        for b in range(len(heavy)):
            factor = lapack.dpttrf(heavy[b] + self.ratio[b] * self.diagonal[b], self.ratio[b] * self.off[b])
            taken[b] = lapack.dpttrs(factor[0], factor[1], (heavy[b] * self.stacked[b]).T)[0].T
            log_det[b] = np.log(factor[0]).sum()
        return taken, log_det

    def variance(self, weights: Array) -> Array:
        """Return the variance of the discrepancy where the coefficients are known, shape (sets, delays)."""
        heavy = weights / self.relative**2 + self.ratio[:, None] * self.diagonal
        beside = self.ratio[:, None] * self.off
        out = np.empty_like(heavy)
        for b in range(len(heavy)):
            # The pivots of elimination from both ends meet at each delay.
            down = lapack.dpttrf(heavy[b], beside[b])[0]
            up = lapack.dpttrf(heavy[b, ::-1], beside[b, ::-1])[0][::-1]
            out[b] = self.sigma[b] ** 2 / (down + up - heavy[b])
        return out

    def gram(self, weights: Array, taken: Array) -> Array:
        """Return ``Z K^-1 Z'`` for white variances ``(sigma d)^2 / w``."""
        scaled = self.stacked * (weights / self.relative**2)[:, None]
        product = scaled @ (self.stacked - taken).swapaxes(1, 2)
        return np.asarray((product + product.swapaxes(1, 2)) / (2 * self.sigma[:, None, None] ** 2))

    def roughness(self, f: Array) -> Array:
        """Return ``f' T f / a^2``."""
        energy = (self.diagonal * f * f).sum(axis=1) + 2 * (self.off * f[:, 1:] * f[:, :-1]).sum(axis=1)
        return np.asarray(self.ratio * energy / self.sigma**2)


@dataclass(frozen=True)
class _Mode:
    """Mode of a batch: coefficients (sets, coefficients) and, per channel, residuals over scale and discrepancy."""

    coefficients: Array
    scaled: tuple[Array, ...]
    discrepancy: tuple[Array, ...]

    def log_density(self, parts: Sequence[_Part]) -> Array:
        """Return what of log p(y, c, f) depends on c and f, up to the constants of the t distribution."""
        total = -0.5 * (self.coefficients**2).sum(axis=1)
        for part, u, f in zip(parts, self.scaled, self.discrepancy, strict=True):
            total = total - (FREEDOM + 1) / 2 * np.log1p(u * u / FREEDOM).sum(axis=1)
            total = total - 0.5 * part.roughness(f)
        return np.asarray(total)


def eliminate_student(
    channels: Sequence[Channel],
    used: NDArray[np.bool_],
    functions: Mapping[str, Array],
    values: Mapping[str, Array],
) -> Eliminated:
    """Eliminate the coefficients and the discrepancy under Student's t noise, approximately.

    Parameters
    ----------
    channels : sequence of Channel
    used : bool array
        Which delays are fitted.
    functions : mapping
        Channel name -> basis times prior widths, shape (sets, coefficients, fitted delays).
    values : mapping
        Noise values among others, each of shape (sets,).

    Returns
    -------
    Eliminated
        The marginal likelihood in Laplace's approximation, the mode of the coefficients and the factor of
        their inverse covariance there. Minus infinity where the model was not finite.
    """
    parts = [_part(c, used, functions[c.name], c.noise_values(values)) for c in channels]
    sets, rows = parts[0].stacked.shape[:2]
    good = np.all(
        [np.isfinite(p.stacked).all(axis=(1, 2)) & np.isfinite(p.sigma * p.ratio) for p in parts], axis=0
    )
    value = np.full(sets, -np.inf)
    mean, factor = np.zeros((sets, rows - 1)), np.tile(np.eye(rows - 1), (sets, 1, 1))
    if good.any():
        chosen = [part.take(good) for part in parts]
        mode = _mode(chosen)
        value[good], factor[good] = _laplace(chosen, mode)
        mean[good] = mode.coefficients
    return Eliminated(np.where(np.isfinite(value), value, -np.inf), mean, factor)


def student_residuals(
    channels: Sequence[Channel],
    used: NDArray[np.bool_],
    functions: Mapping[str, Array],
    values: Mapping[str, float],
) -> Array:
    """Return residuals of one parameter set whose sum of squares is minus twice the log density at its mode.

    Each point adds ``sign(u) sqrt((nu + 1) log(1 + u^2/nu))``, the discrepancy its steps, the coefficients themselves.
    """
    batch = {name: np.full(1, v) for name, v in values.items()}
    parts = [_part(c, used, functions[c.name][None], c.noise_values(batch)) for c in channels]
    mode = _mode(parts, _FINE)
    out = [mode.coefficients[0]]
    for channel, u, f in zip(channels, mode.scaled, mode.discrepancy, strict=True):
        noise = {name: float(v[0]) for name, v in channel.noise_values(batch).items()}
        out.append((np.sign(u) * np.sqrt((FREEDOM + 1) * np.log1p(u * u / FREEDOM)))[0])
        out.append(channel.noise.steps(f, noise)[0])
    return np.concatenate(out)


def gaussian_noise(
    channels: Sequence[Channel],
    used: NDArray[np.bool_],
    functions: Mapping[str, Array],
    values: Mapping[str, float],
) -> list[Noise]:
    """Return the Gaussian noise that has, at the mode of one parameter set, the curvature of each channel's."""
    batch = {name: np.full(1, v) for name, v in values.items()}
    parts = [_part(c, used, functions[c.name][None], c.noise_values(batch)) for c in channels]
    mode = _mode(parts, _FINE)
    return [
        Noise("correlated", c.noise.delay, c.noise.relative / np.sqrt(np.maximum(_curvature(u)[0], 1e-6)))
        for c, u in zip(channels, mode.scaled, strict=True)
    ]


def _part(channel: Channel, used: NDArray[np.bool_], rows: Array, noise: Mapping[str, Array]) -> _Part:
    data = np.broadcast_to(channel.data[used], (len(rows), 1, rows.shape[2]))
    rho = np.exp(-np.diff(channel.noise.delay) / noise["correlation_time"][:, None])
    gap = -np.expm1(-2 * np.diff(channel.noise.delay) / noise["correlation_time"][:, None])
    diagonal = np.ones((len(rows), rows.shape[2]))
    diagonal[:, 1:] = 1 / gap
    diagonal[:, :-1] += rho * rho / gap
    ratio = (noise["white"] / np.maximum(noise["discrepancy"], 1e-300)) ** 2
    return _Part(
        stacked=np.concatenate([rows, data], axis=1),
        relative=channel.noise.relative,
        sigma=noise["white"],
        ratio=np.minimum(ratio, _LARGEST_RATIO),
        diagonal=diagonal,
        off=-rho / gap,
        log_det=-np.log(gap).sum(axis=1),
    )


def _mode(parts: Sequence[_Part], tolerance: float = _TOLERANCE) -> _Mode:
    """Reweight until the density rises no more; sets that are done are left out of further steps."""
    sets = len(parts[0].sigma)
    mode = _step(parts, [np.ones(p.diagonal.shape) for p in parts])
    density = mode.log_density(parts)
    active = np.ones(sets, dtype=bool)
    for _ in range(_ITERATIONS):
        chosen = [part.take(active) for part in parts]
        better = _step(chosen, [_weights(u[active]) for u in mode.scaled])
        new = better.log_density(chosen)
        _put(mode, active, better)
        rise, density[active] = new - density[active], new
        active[active] = rise > tolerance
        if not active.any():
            break
    return mode


def _put(mode: _Mode, active: NDArray[np.bool_], better: _Mode) -> None:
    mode.coefficients[active] = better.coefficients
    for old, new in zip(
        (*mode.scaled, *mode.discrepancy), (*better.scaled, *better.discrepancy), strict=True
    ):
        old[active] = new


def _step(parts: Sequence[_Part], weights: Sequence[Array]) -> _Mode:
    """Solve the weighted Gaussian problem for coefficients and discrepancy."""
    taken = [part.smooth(w)[0] for part, w in zip(parts, weights, strict=True)]
    gram = np.sum([p.gram(w, t) for p, w, t in zip(parts, weights, taken, strict=True)], axis=0)
    matrix = gram[:, :-1, :-1] + np.eye(gram.shape[1] - 1)
    c = np.linalg.solve(matrix, gram[:, :-1, -1:])[..., 0]
    scaled, discrepancy = [], []
    for part, t in zip(parts, taken, strict=True):
        f = t[:, -1] - np.einsum("bk,bkn->bn", c, t[:, :-1])
        fit = np.einsum("bk,bkn->bn", c, part.stacked[:, :-1])
        scaled.append((part.stacked[:, -1] - fit - f) / (part.sigma[:, None] * part.relative))
        discrepancy.append(f)
    return _Mode(c, tuple(scaled), tuple(discrepancy))


def _weights(u: Array) -> Array:
    return (FREEDOM + 1) / (FREEDOM + u * u)


def _curvature(u: Array) -> Array:
    return np.maximum((FREEDOM + 1) * (FREEDOM - u * u) / (FREEDOM + u * u) ** 2, _FLAT)


def _laplace(parts: Sequence[_Part], mode: _Mode) -> tuple[Array, Array]:
    """Return the log marginal likelihood, and the factor of the coefficients' inverse covariance."""
    value, size = mode.log_density(parts), mode.coefficients.shape[1]
    curvatures = [_curvature(u) for u in mode.scaled]
    smoothed = [part.smooth(h) for part, h in zip(parts, curvatures, strict=True)]
    grams = [p.gram(h, taken) for p, h, (taken, _) in zip(parts, curvatures, smoothed, strict=True)]
    factor = np.linalg.cholesky(np.sum(grams, axis=0)[:, :size, :size] + np.eye(size))
    for part, u, h, (taken, log_det) in zip(parts, mode.scaled, curvatures, smoothed, strict=True):
        count = u.shape[1]
        value = value + count * (_LOG_PEAK - np.log(part.sigma)) - np.log(part.relative).sum()
        value = value - 0.5 * (log_det - part.log_det - count * np.log(part.ratio))
        own = np.linalg.solve(factor, (part.stacked - taken)[:, :-1])
        variance = part.variance(h) + (own**2).sum(axis=1)
        value = value + _corrections(u, h, np.sqrt(variance) / (part.sigma[:, None] * part.relative))
    volume = np.log(np.diagonal(factor, axis1=1, axis2=2)).sum(axis=1)
    return np.asarray(value - volume), np.asarray(factor)


def _corrections(u: Array, h: Array, spread: Array) -> Array:
    """Return sum_i log E[t/g] over normal deviations of the residuals u from the mode, shape (sets,)."""
    total = np.zeros(u.shape)
    for node, weight in zip(_NODES, _WEIGHTS, strict=True):
        d = node * spread
        # t over the parabola through its top at u.
        rise = np.log1p(u * u / FREEDOM) - np.log1p((u + d) ** 2 / FREEDOM)
        slope = 2 * u / (FREEDOM + u * u)
        total += weight * np.exp((FREEDOM + 1) / 2 * (rise + slope * d) + 0.5 * h * d * d)
    return np.asarray(np.log(total).sum(axis=1))
