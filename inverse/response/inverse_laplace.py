"""From the Laplace domain back to the measured delays.

``f(t) = exp(gamma t) irfft[F(gamma + i w_k)] / dt`` on a uniform grid, then B-splines to the delays.
What the splines and their aliases do to each frequency is undone in the frequency domain by one real factor
(the kernel correction of nonuniform fast Fourier transforms), so that splines of degree 7 need no finer grid
than the highest frequency asks for.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft, sparse

__all__ = ["LaplaceGrid", "TimeGrid", "powers", "time_grid", "to_delays", "window_grid"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_RADIX = 32
# Each step of the window loses this factor: what wraps around is 1e-6 of what leaves.
_DAMPING = 1e6
# The Gaussian exp(-(w tau)^2 / 2) is 1.5e-8 here; the end of the window magnifies what is cut by up to _DAMPING.
_CUTOFF = 6.0
_DEGREE = 7
# Points of the uniform grid per frequency; 2 would be the least.
_OVERSAMPLING = 2.1
# A hundredth of a second at a time, a gigabyte together, and no measurement that was ever made.
_MOST = 1_000_000
# Functions of delay whose transforms stay in a core's cache together.
_ROWS = 64


@dataclass(frozen=True)
class LaplaceGrid:
    """Equally spaced samples of the Laplace variable on a line of constant real part.

    Attributes
    ----------
    s : complex array, shape (1, frequencies)
        rad/ps.
    pulse : complex array, shape (1, frequencies)
        ``exp((s tau)^2 / 2)``, the transform of the Gaussian cross-correlation.
    origin : float
        Delay from which times count, ps.
    """

    s: Complex
    pulse: Complex
    origin: float


@dataclass(frozen=True)
class TimeGrid(LaplaceGrid):
    """Laplace samples and interpolation weights for fixed delays, on a window that begins at the origin.

    Attributes
    ----------
    spline : array, shape (1, 1, frequencies)
        Inverse of the B-spline's smoothing, over dt.
    size : int
        Points of the uniform grid.
    weights : sparse array, shape (delays, size)
        B-spline weights times ``exp(gamma t)``.
    delay : array, shape (delays,)
        ps.
    """

    spline: Array
    size: int
    weights: sparse.csr_array
    delay: Array

    @property
    def block(self) -> int:
        """Parameter sets whose arrays stay in a core's cache together."""
        return max(1, 24576 // self.s.shape[1])


def time_grid(delay: Array, pulse_rms: float, earliest: float, stretch: float = 1.3) -> TimeGrid:
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
        If there is no delay, or one is not finite.
    """
    if delay.size == 0:
        raise ValueError("There is no delay; give one or more, in ps.")
    if not np.all(np.isfinite(delay)):
        raise ValueError(
            "A delay is not finite; remove such points before modelling (read_trace does on request)."
        )
    origin = min(float(delay.min()), earliest) - 8 * pulse_rms - 1.0
    window = max(float(delay.max()) - origin, 20 * pulse_rms) * stretch
    return window_grid(delay, pulse_rms, origin, window, _CUTOFF / pulse_rms)


def window_grid(delay: Array, pulse_rms: float, origin: float, window: float, highest: float) -> TimeGrid:
    """Lay out a grid on a given window.

    Parameters
    ----------
    delay : array, shape (delays,)
        ps, inside the window.
    pulse_rms : float
        ps.
    origin, window : float
        Beginning and length, ps.
    highest : float
        Angular frequency beyond which there is nothing, rad/ps.
    """
    count = _RADIX * int(np.ceil(highest / (2 * np.pi / window) / _RADIX))
    if count > _MOST:
        raise ValueError(
            f"Delays over {window:.3g} ps with a pulse that needs {highest / (2 * np.pi):.3g} THz are {count} "
            f"frequencies, more than {_MOST}; are the delays in ps? Cut the trace, or give a longer pulse_rms."
        )
    size = int(fft.next_fast_len(int(np.ceil(_OVERSAMPLING * count)), real=True))
    step = window / size
    gamma = np.log(_DAMPING) / window
    w = 2 * np.pi / window * np.arange(count)
    s = (gamma + 1j * w)[None, :]
    # The transform of a B-spline of degree p is sinc^(p + 1).
    spline = np.sinc(w * step / (2 * np.pi)) ** -(_DEGREE + 1) / step
    weights = _weights((delay - origin) / step, np.exp(gamma * (delay - origin)), size)
    return TimeGrid(s, np.exp((s * pulse_rms) ** 2 / 2), origin, spline[None, None, :], size, weights, delay)


def _weights(place: Array, growth: Array, size: int) -> sparse.csr_array:
    """Rows of B-spline weights at places on a periodic grid of unit step."""
    cell = np.floor(place).astype(np.intp)
    value = _b_splines(place - cell) * growth
    column = (cell[:, None] + np.arange(_DEGREE + 1) - _DEGREE // 2) % size
    row = np.repeat(np.arange(place.size), _DEGREE + 1)
    return sparse.csr_array((value.T.ravel(), (row, column.ravel())), shape=(place.size, size))


def _b_splines(x: Array) -> Array:
    """Values of the uniform B-splines that reach a point at fraction x of its cell, shape (degree + 1, points).

    The recurrence of Cox and de Boor on integer knots.
    """
    values = [np.ones_like(x)]
    for k in range(1, _DEGREE + 1):
        parts = [v / k for v in values]
        rising = [np.zeros_like(x), *((x + k - 1 - j) * part for j, part in enumerate(parts))]
        falling = [*((j + 1 - x) * part for j, part in enumerate(parts)), np.zeros_like(x)]
        values = [up + down for up, down in zip(rising, falling, strict=True)]
    return np.stack(values)


def powers(grid: LaplaceGrid, t: Array) -> Complex:
    """Return ``exp(-s t)`` on the equally spaced samples as an outer product of two short tables.

    Parameters
    ----------
    t : array, shape (sets, 1)
        ps.
    """
    first, step = grid.s[0, 0], (grid.s[0, 1] - grid.s[0, 0]).imag
    count = grid.s.shape[1]
    coarse = np.exp(-t * (first + 1j * step * np.arange(0, count, _RADIX)))
    fine = np.exp(-1j * t * (step * np.arange(_RADIX)))
    return (coarse[:, :, None] * fine[:, None, :]).reshape(t.shape[0], -1)[:, :count]


def to_delays(grid: TimeGrid, spectra: Complex, arrival: Complex | None = None) -> Array:
    """Transform spectra to the delays of the grid.

    Parameters
    ----------
    spectra : complex array, shape (sets, functions, frequencies)
    arrival : complex array, shape (sets, frequencies), optional
        A factor of all functions of a set.

    Returns
    -------
    array, shape (sets, functions, delays)
    """
    sets, functions, count = spectra.shape
    common = grid.spline if arrival is None else grid.spline * arrival[:, None]
    factor = np.broadcast_to(common, (sets, 1, count))
    out = np.empty((sets, functions, grid.weights.shape[0]))
    together = max(1, _ROWS // functions)
    padded = np.zeros((min(together, sets), functions, grid.size // 2 + 1), dtype=complex)
    for start in range(0, sets, together):
        part = slice(start, start + together)
        room = padded[: len(spectra[part])]
        np.multiply(spectra[part], factor[part], out=room[..., :count])
        # Transformed along the first axis: the sparse product wants the functions side by side.
        signal = fft.irfft(room.reshape(-1, room.shape[2]).T, n=grid.size, axis=0)
        out[part] = (grid.weights @ signal).T.reshape(out[part].shape)
    return out
