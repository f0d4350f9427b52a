"""From the Laplace domain back to the measured delays.

``f(t) = exp(gamma t) irfft[F(gamma + i w_k)] / dt`` on a uniform grid, then cubic B-splines to the delays.
The spline's own smoothing is undone in the frequency domain, where that is one real factor.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

__all__ = ["TimeGrid", "powers", "time_grid", "to_delays"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_RADIX = 32
# Each step of the window loses this factor: what wraps around is 1e-6 of what leaves.
_DAMPING = 1e6
# The Gaussian exp(-(w tau)^2 / 2) is below 1e-7 beyond.
_CUTOFF = 6.0
_SAMPLES_PER_RMS = 4


@dataclass(frozen=True)
class TimeGrid:
    """Laplace samples and interpolation weights for fixed delays.

    Attributes
    ----------
    s : complex array, shape (1, frequencies)
        rad/ps.
    pulse : complex array, shape (1, frequencies)
        ``exp((s tau)^2 / 2)``, the transform of the Gaussian cross-correlation.
    spline : array, shape (1, 1, frequencies)
        Inverse of the B-spline's smoothing, over dt.
    origin : float
        Delay at which the window begins, ps.
    size : int
        Points of the uniform grid.
    first : int array, shape (delays,)
        First grid point under each delay.
    weight : array, shape (4, delays)
        B-spline weights times ``exp(gamma t)``.
    """

    s: Complex
    pulse: Complex
    spline: Array
    origin: float
    size: int
    first: NDArray[np.intp]
    weight: Array

    @property
    def block(self) -> int:
        """Parameter sets whose arrays stay in a core's cache together."""
        return max(1, 8192 // self.s.shape[1])


def time_grid(delay: Array, pulse_rms: float, earliest: float, stretch: float = 1.5) -> TimeGrid:
    """Lay out a grid for given delays.

    Parameters
    ----------
    delay : array, shape (delays,)
        ps, any order, any spacing.
    pulse_rms : float
        ps.
    earliest : float
        Earliest time zero that will be asked for, ps.
    stretch : float
        Window over trace length.

    Raises
    ------
    ValueError
        If a delay is not finite.
    """
    if not np.all(np.isfinite(delay)):
        raise ValueError("A delay is not finite; remove such points before modelling (read_trace does on request).")
    origin = min(float(delay.min()), earliest) - 8 * pulse_rms - 1.0
    window = max(float(delay.max()) - origin, 20 * pulse_rms) * stretch
    size = int(fft.next_fast_len(int(np.ceil(window * _SAMPLES_PER_RMS / pulse_rms)), real=True))
    step = window / size
    count = min(_RADIX * int(np.ceil(_CUTOFF / pulse_rms / (2 * np.pi / window) / _RADIX)), size // 2)
    gamma = np.log(_DAMPING) / window
    w = 2 * np.pi / window * np.arange(count)
    s = (gamma + 1j * w)[None, :]
    place = (delay - origin) / step
    first = np.floor(place).astype(np.intp) - 1
    weight = _cubic(place - np.floor(place)) * np.exp(gamma * (delay - origin))
    spline = 6 / (4 + 2 * np.cos(w * step)) / step
    return TimeGrid(s, np.exp((s * pulse_rms) ** 2 / 2), spline[None, None, :], origin, size, first, weight)


def _cubic(x: Array) -> Array:
    """Weights of the four uniform cubic B-splines that reach a point at fraction x of its cell."""
    y = 1 - x
    return np.stack([y**3, 3 * x**3 - 6 * x**2 + 4, 3 * y**3 - 6 * y**2 + 4, x**3]) / 6


def powers(grid: TimeGrid, t: Array) -> Complex:
    """Return ``exp(-s t)`` on the uniform grid as an outer product of two short tables.

    Parameters
    ----------
    t : array, shape (sets, 1)
        ps.
    """
    gamma, step = grid.s[0, 0].real, grid.s[0, 1].imag
    count = grid.s.shape[1]
    coarse = np.exp(-t * (gamma + 1j * step * np.arange(0, count, _RADIX)))
    fine = np.exp(-1j * t * (step * np.arange(_RADIX)))
    return (coarse[:, :, None] * fine[:, None, :]).reshape(t.shape[0], -1)[:, :count]


def to_delays(grid: TimeGrid, spectra: Complex) -> Array:
    """Transform spectra to the delays of the grid.

    Parameters
    ----------
    spectra : complex array, shape (sets, functions, frequencies)

    Returns
    -------
    array, shape (sets, functions, delays)
    """
    signal = fft.irfft(spectra * grid.spline, n=grid.size, axis=-1, overwrite_x=True)
    out = signal[..., grid.first] * grid.weight[0]
    for tap in (1, 2, 3):
        out += signal[..., grid.first + tap] * grid.weight[tap]
    return out
