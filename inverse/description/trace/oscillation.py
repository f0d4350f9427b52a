"""A steady oscillation in a trace: sound in a transparent layer that scatters light, or a film that rings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.description.trace.arrivals import Estimate, slow_basis

_Floats = NDArray[np.float64]
_LEAST_SHARE = 0.5  # of what the slow background leaves
_LEAST_CYCLES = 3.5


@dataclass(frozen=True)
class Oscillation:
    """A damped oscillation A cos(2 pi f t + phase) e^{-rate t}.

    Attributes
    ----------
    frequency : Estimate
        THz.
    rate : float
        Damping of the amplitude, 1/ps.
    share : float
        Part of the variance about the slow background that it explains.
    """

    frequency: Estimate
    rate: float
    share: float


def find_oscillation(time: _Floats, signal: _Floats) -> Oscillation | None:
    """Find an oscillation that explains most of what a slow background leaves.

    Background (a spline in log time) and oscillation are fitted together; frequency and damping by least
    squares on
    the projected residual, from the highest peaks of the periodogram.

    Parameters
    ----------
    time : ndarray, shape (n,)
        ps after time zero.
    signal : ndarray, shape (n,)
        Any unit.

    Returns
    -------
    Oscillation or None
        None where less than half is explained, or fewer than 3.5 cycles are seen before it has decayed.
    """
    weight = np.sqrt(np.gradient(time) / np.median(np.diff(time)))
    basis, _ = np.linalg.qr(slow_basis(time) * weight[:, None])
    rest = signal * weight - basis @ (basis.T @ (signal * weight))
    if not np.linalg.norm(rest) > 1e-9 * np.linalg.norm(signal):
        return None
    rest = rest / np.linalg.norm(rest)  # of order 1, as the optimiser's tolerances expect
    fits = [_refine(start, time, weight, basis, rest) for start in _starts(time, rest / weight)]
    best = max(fits, key=lambda fit: fit.share, default=None)
    if best is None or best.share < _LEAST_SHARE or best.frequency.value <= 0.0:
        return None
    seen = min(time[-1] - time[0], 2.0 / max(best.rate, 1e-12))
    return best if best.frequency.value * seen >= _LEAST_CYCLES else None


def _starts(time: _Floats, rest: _Floats) -> list[tuple[float, float]]:
    """Frequency and damping of the highest periodogram peak for four dampings."""
    length = time[-1] - time[0]
    step = float(np.median(np.diff(time)))
    grid = np.arange(time[0], time[-1], step)
    uniform = np.interp(grid, time, rest)
    frequency = np.fft.rfftfreq(4 * grid.size, step)
    allowed = (frequency > 1.5 / length) & (frequency < 0.4 / step)
    starts = []
    for rate in np.array([0.0, 2.0, 5.0, 12.0]) / length:
        envelope = np.exp(-rate * (grid - grid[0]))
        power = np.abs(np.fft.rfft(uniform * envelope, 4 * grid.size)) ** 2 * allowed
        starts.append((float(frequency[np.argmax(power)]), float(rate)))
    return [start for start in starts if start[0] > 0.0]


def _refine(
    start: tuple[float, float], time: _Floats, weight: _Floats, basis: _Floats, rest: _Floats
) -> Oscillation:
    from scipy.optimize import least_squares

    since = time - time[0]
    length = since[-1]

    def residual(parameters: _Floats) -> _Floats:
        frequency, rate = parameters / length
        envelope = np.exp(-abs(rate) * since) * weight
        angle = 2.0 * np.pi * frequency * since
        pair = np.c_[np.cos(angle), np.sin(angle)] * envelope[:, None]
        pair = pair - basis @ (basis.T @ pair)
        return rest - pair @ np.linalg.lstsq(pair, rest, rcond=None)[0]

    fit = least_squares(residual, np.array(start) * length, x_scale=(0.1, 1.0))
    share = 1.0 - 2.0 * fit.cost / float(rest @ rest)
    frequency, rate = fit.x / length
    error = _error(np.asarray(fit.jac), fit.fun) / length
    floor = 0.02 / min(length, 2.0 / max(abs(rate), 1e-12))
    return Oscillation(
        Estimate(abs(float(frequency)), float(np.hypot(error, floor)), "THz"), abs(float(rate)), share
    )


def _error(jacobian: _Floats, residual: _Floats) -> float:
    """Give the standard error of the first parameter, for residuals correlated over a few points."""
    lags = np.arange(1, min(residual.size // 4, 200))
    power = float(residual @ residual)
    rho = np.array([residual[:-k] @ residual[k:] for k in lags]) / power if power > 0 else np.zeros(1)
    negative = np.flatnonzero(rho < 0.05)
    inflation = 1.0 + 2.0 * float(rho[: negative[0] if negative.size else rho.size].sum())
    covariance = np.linalg.pinv(jacobian.T @ jacobian) * power / max(residual.size - 2, 1)
    return float(np.sqrt(covariance[0, 0] * inflation))
