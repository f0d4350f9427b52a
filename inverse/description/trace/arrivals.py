"""Echo arrivals and oscillations in one channel, with no model of the sample."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

_Floats = NDArray[np.float64]
_SIGNIFICANCE = 5.0  # envelope over its noise
_WIDEST = 10.0  # an envelope wider than this many filter scales is ringing, not an echo
_FINE = 8  # points of the uniform grid per filter scale


@dataclass(frozen=True)
class Estimate:
    """A number with its standard uncertainty and unit."""

    value: float
    uncertainty: float
    unit: str = "ps"

    def __str__(self) -> str:
        digits = max(0, 1 - int(np.floor(np.log10(self.uncertainty)))) if self.uncertainty > 0 else 3
        return f"{self.value:.{digits}f} ± {self.uncertainty:.{digits}f} {self.unit}"


@dataclass(frozen=True)
class Echo:
    """One arrival.

    Attributes
    ----------
    arrival : Estimate
        Time after time zero of the peak of the envelope, ps.
    amplitude : Estimate
        Largest excursion about the slow background near the arrival, signed, in the channel's unit.
    sign : int
        +1 or -1, the sign of that excursion.
    strength : float
        Peak of the envelope over the strongest one's.
    width : float
        Full width of the envelope at half its peak, ps.
    """

    arrival: Estimate
    amplitude: Estimate
    sign: int
    strength: float
    width: float


@dataclass(frozen=True)
class Train:
    """Arrivals of one channel and the round trip they make.

    Attributes
    ----------
    echoes : tuple of Echo
        Every arrival above the noise, in order.
    round_trip : Estimate or None
        Time between successive echoes, ps.
    members : tuple of int
        Indices into `echoes` of those that make the round trip.
    earlier : tuple of int
        Indices of clear arrivals before the first member.
    others : tuple of int
        Indices of clear arrivals after it that are no repetition, nor one of an earlier arrival.
    """

    echoes: tuple[Echo, ...] = ()
    round_trip: Estimate | None = None
    members: tuple[int, ...] = ()
    earlier: tuple[int, ...] = ()
    others: tuple[int, ...] = ()


def slow_background(time: _Floats, signal: _Floats) -> _Floats:
    """Heat's slow decay under the echoes.

    A cubic spline with nine knots even in log(1 + time / 2 ps), fitted with Cauchy weights so that echoes
    do not pull it:
    diffusion is smooth on a logarithmic axis, an echo is narrow there.

    Parameters
    ----------
    time : ndarray, shape (n,)
        ps, increasing.
    signal : ndarray, shape (n,)
        Any unit.

    Returns
    -------
    ndarray, shape (n,)
        The background in the unit of `signal`.
    """
    design = slow_basis(time)
    weight = np.ones_like(time)
    for _ in range(15):
        coefficients = np.linalg.lstsq(design * weight[:, None], signal * weight, rcond=None)[0]
        residual = signal - design @ coefficients
        scale = float(np.median(np.abs(residual))) / 0.6745 + np.finfo(float).tiny
        weight = 1.0 / np.hypot(1.0, residual / (2.0 * scale))
    return signal - residual


def slow_basis(time: _Floats) -> _Floats:
    """Columns of a cubic spline with up to nine knots even in log(1 + time / 2 ps); shape (n, knots + 2)."""
    from scipy.interpolate import BSpline

    x = np.log1p((time - time[0]) / 2.0)
    inner = np.linspace(x[0], x[-1], int(np.clip(time.size // 8, 4, 9)))
    knots = np.r_[[x[0]] * 3, inner, [x[-1]] * 3]
    return np.asarray(BSpline.design_matrix(x, knots, 3, extrapolate=True).toarray())


def find_train(time: _Floats, residual: _Floats, noise: float, scale: float, zero_sd: float) -> Train:
    """Find echo arrivals and the round trip they make.

    The envelope is sqrt(even^2 + odd^2) of the residual filtered with a second derivative of a Gaussian
    and its Hilbert
    transform. The scale is doubled, twice at most, until an arrival stands 5 times above the noise.

    Parameters
    ----------
    time : ndarray, shape (n,)
        ps after time zero.
    residual : ndarray, shape (n,)
        Signal without its slow background.
    noise : float
        White noise of `residual`.
    scale : float
        Standard deviation of the Gaussian, ps: about the rise time of the pulse.
    zero_sd : float
        Uncertainty of time zero, ps.

    Returns
    -------
    Train
        Empty where nothing stands above the noise.
    """
    for factor in (1.0, 2.0, 4.0):
        if time[-1] - time[0] < 12.0 * scale * factor:
            break
        echoes = _echoes(time, residual, noise, scale * factor)
        if echoes:
            return _round_trip(echoes, zero_sd)
    return Train()


def _filters(scale: float, step: float) -> tuple[_Floats, _Floats]:
    """Even and odd filter, normalised to unit sum of squares."""
    from scipy.signal import hilbert

    half = int(6.0 * scale / step)
    x = np.arange(-half, half + 1) * step / scale
    even = (1.0 - x**2) * np.exp(-(x**2) / 2.0)
    even -= even.mean()
    odd = np.imag(hilbert(even))
    odd -= odd.mean()
    return even / np.linalg.norm(even), odd / np.linalg.norm(odd)


def _envelope(time: _Floats, residual: _Floats, scale: float) -> tuple[_Floats, _Floats]:
    """Uniform grid and envelope of the residual on it."""
    from scipy.interpolate import CubicSpline

    step = scale / _FINE
    grid = np.arange(time[0], time[-1], step)
    even, odd = _filters(scale, step)
    padded = np.pad(CubicSpline(time, residual)(grid), even.size // 2, mode="reflect", reflect_type="odd")
    envelope = np.hypot(np.convolve(padded, even, "valid"), np.convolve(padded, odd, "valid"))
    return grid, envelope


def _echoes(time: _Floats, residual: _Floats, noise: float, scale: float) -> tuple[Echo, ...]:
    from scipy.signal import find_peaks, peak_widths

    grid, envelope = _envelope(time, residual, scale)
    step = grid[1] - grid[0]
    spread = noise * np.sqrt(np.interp(grid, time, np.gradient(time)) / step)
    floor = np.maximum(_SIGNIFICANCE * spread, 3.0 * np.median(envelope))
    peaks, _ = find_peaks(envelope, height=floor, distance=2 * _FINE, prominence=0.5 * floor)
    widths = peak_widths(envelope, peaks, 0.5)[0] * step
    inside = (grid[peaks] > grid[0] + 1.5 * scale) & (grid[peaks] < grid[-1] - 1.5 * scale)
    narrow = widths < _WIDEST * scale
    peaks, widths = peaks[inside & narrow], widths[inside & narrow]
    found = zip(peaks, widths, strict=True)
    return tuple(_echo(grid[p], w, envelope[p], spread[p], envelope, time, residual, noise) for p, w in found)


def _echo(
    at: float,
    width: float,
    peak: float,
    spread: float,
    envelope: _Floats,
    time: _Floats,
    residual: _Floats,
    noise: float,
) -> Echo:
    near = np.abs(time - at) <= max(width, 1.5 * float(np.diff(time).max()))
    excursion = float(residual[near][np.argmax(np.abs(residual[near]))])
    jitter = float(np.hypot(0.1 * width, width * spread / peak))
    return Echo(
        arrival=Estimate(float(at), jitter),
        amplitude=Estimate(excursion, noise, ""),
        sign=1 if excursion > 0 else -1,
        strength=float(peak / envelope.max()),
        width=float(width),
    )


def _round_trip(echoes: tuple[Echo, ...], zero_sd: float) -> Train:
    """Choose the first echo of the round trip, and refine by its repetitions.

    The first clear arrival (a quarter of the strongest) is taken, unless a stronger one follows at about
    twice its time:
    strain launched at a film's buried side arrives at half the round trip.
    """
    strength = np.array([echo.strength for echo in echoes])
    times = np.array([echo.arrival.value for echo in echoes])
    clear = [i for i in range(len(echoes)) if strength[i] >= 0.25 * strength.max()]
    first = clear[0]
    while True:
        ratio = times / times[first]
        later = [i for i in clear if 1.6 < ratio[i] < 2.7 and strength[i] > strength[first]]
        if not later:
            break
        first = max(later, key=lambda i: strength[i])
    members = _repetitions(times, strength, first, echoes[first].width)
    earlier = tuple(i for i in clear if i < first)
    round_trip = _comb(echoes, members, zero_sd)
    order = times / round_trip.value * (2.0 if earlier else 1.0)
    whole = np.abs(order - np.round(order)) * round_trip.value < 0.75 * echoes[first].width
    others = tuple(i for i in clear if i > first and i not in members and not (earlier and whole[i]))
    return Train(echoes, round_trip, tuple(members), earlier, others)


def _repetitions(times: _Floats, strength: _Floats, first: int, width: float) -> list[int]:
    """Arrivals at whole multiples of the first one's time, until one is missing."""
    members = [first]
    period = times[first]
    while True:
        order = len(members) + 1
        expected = times[members[-1]] + period
        near = np.flatnonzero(np.abs(times - expected) < min(period / 8, 0.75 * width))
        if not near.size:
            return members
        members.append(int(near[np.argmax(strength[near])]))
        period = times[members[-1]] / order


def _comb(echoes: tuple[Echo, ...], members: list[int], zero_sd: float) -> Estimate:
    """Round trip T from arrivals n T + offset.

    The offset has a prior of 0.2 widths and of time zero's uncertainty. An interface delays and reshapes
    an echo a
    little at every pass, which no repetition reveals, so the uncertainty never falls under 0.1 widths.
    """
    width = float(np.median([echoes[i].width for i in members]))
    offset = float(np.hypot(0.2 * width, zero_sd))
    order = np.arange(1.0, len(members) + 1.0)
    sigma = np.array([echoes[i].arrival.uncertainty for i in members])
    design = np.vstack([np.c_[order, np.ones_like(order)] / sigma[:, None], [[0.0, 1.0 / offset]]])
    target = np.r_[[echoes[i].arrival.value for i in members] / sigma, 0.0]
    covariance = np.linalg.inv(design.T @ design)
    period = float((covariance @ design.T @ target)[0])
    return Estimate(period, float(np.hypot(np.sqrt(covariance[0, 0]), 0.1 * width)))
