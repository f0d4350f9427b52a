"""Time zero and noise of a trace, from the trace alone."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from inverse.description.trace.checks import TraceError, channels_of, check_trace

if TYPE_CHECKING:
    import xarray as xr

_Floats = NDArray[np.float64]
_FLOOR = 0.1  # ps: what the half height of any edge leaves open (electrons, choice of height)


@dataclass(frozen=True)
class Edge:
    """The rising edge of one channel.

    Attributes
    ----------
    channel : str
        Channel it was found in.
    centre : float
        Delay at half height, ps.
    uncertainty : float
        Standard uncertainty of `centre` as a time zero, ps.
    rise : float
        Time from 10 to 90 % of the height, ps.
    baseline, height : float
        Signal before the edge, and its signed step, in the channel's unit.
    """

    channel: str
    centre: float
    uncertainty: float
    rise: float
    baseline: float
    height: float


def edge_prior(trace: xr.Dataset) -> tuple[float, float]:
    """Centre and standard deviation of a prior for time zero, from the rising edge.

    Parameters
    ----------
    trace : xarray.Dataset
        A trace; see `read_trace`.

    Returns
    -------
    centre, sd : float
        ps. The centre is the delay at half height, corrected for nothing. The variance is the sum of 0.1
        ps squared,
        (0.12 rise)^2 for the unknown shape of the rise (10 to 90 %; in a two-temperature film the lattice
        lags the
        pulse), (0.2 step)^2 for the sampling and (noise / slope)^2. An optical phase that takes longer
        than 1 ps follows
        the moving surface: 0.35 (rise - 1 ps) is added to its shape term.

    Raises
    ------
    TraceError
        If the trace has no points before the edge, or no edge above its noise.
    """
    edge = find_edge(trace)
    return edge.centre, edge.uncertainty


def find_edge(trace: xr.Dataset) -> Edge:
    """Find the rising edge in the channel where it is shortest.

    Parameters
    ----------
    trace : xarray.Dataset
        A trace.

    Returns
    -------
    Edge
        Its place, rise and height.

    Raises
    ------
    TraceError
        If no channel has points before an edge above its noise.
    """
    check_trace(trace)
    delay = np.asarray(trace["delay"].values, dtype=float)
    edges, problems = [], []
    for name in channels_of(trace):
        try:
            edges.append(_edge(name, delay, np.asarray(trace[name].values, dtype=float)))
        except TraceError as error:
            problems.append(str(error))
    if not edges:
        raise TraceError("; ".join(problems) + "; give time_zero yourself")
    return min(edges, key=lambda edge: edge.rise)


def white_noise(delay: _Floats, signal: _Floats) -> float:
    """Level of the white noise, robust to echoes and slow change, for uneven delays.

    Each point is compared with the cubic through its four neighbours; the level is the median absolute
    deviation over
    0.6745, each difference scaled by what white noise gives it. A signal that moves faster than the cubic
    follows makes it
    an upper limit.

    Parameters
    ----------
    delay, signal : ndarray, shape (n,)
        ps and the channel's unit, n >= 5.

    Returns
    -------
    float
        Standard deviation in the channel's unit.
    """
    offsets = (-2, -1, 1, 2)
    centre = np.arange(2, delay.size - 2)
    nodes = np.stack([delay[centre + k] for k in offsets]) - delay[centre]
    weights = np.ones_like(nodes)
    for i in range(4):
        for j in range(4):
            if i != j:
                weights[i] *= -nodes[j] / (nodes[i] - nodes[j])
    smooth = sum(weights[i] * signal[centre + k] for i, k in enumerate(offsets))
    scaled = (signal[centre] - smooth) / np.sqrt(1.0 + (weights**2).sum(axis=0))
    return float(np.median(np.abs(scaled)) / 0.6745)


def _edge(name: str, delay: _Floats, signal: _Floats) -> Edge:
    steepest, onset, top = _steepest(delay, signal)
    before = delay <= onset
    if np.count_nonzero(before) < 3:
        raise TraceError(f"{name} has {np.count_nonzero(before)} points before its rising edge; 3 are needed")
    baseline = float(np.median(signal[before]))
    inside = (delay > onset) & (delay <= top)
    rise = signal[inside] - baseline
    height = float(rise[np.argmax(np.abs(rise))])
    noise = white_noise(delay, signal)
    if abs(height) < 6.0 * noise:
        raise TraceError(f"{name} has no rising edge above its noise (step {height:.3g}, noise {noise:.3g})")
    low, half, high = (
        _crossing(delay, (signal - baseline) / height, f, steepest, top) for f in (0.1, 0.5, 0.9)
    )
    index = int(np.searchsorted(delay, half))
    step = float(delay[index] - delay[index - 1])
    slope = 0.8 * abs(height) / (high - low)
    shape = 0.12 * (high - low)
    # A slow rise is the surface moving, and half of it comes long after time zero.
    if name in ("optical_phase", "beam_deflection"):
        shape += 0.35 * max(0.0, high - low - 1.0)
    parts = (_FLOOR, shape, 0.2 * step, noise / slope)
    return Edge(name, half, float(np.sqrt(np.sum(np.square(parts)))), high - low, baseline, height)


def _steepest(delay: _Floats, signal: _Floats) -> tuple[float, float, float]:
    """Delay of the first steep change, and where the steepness begins and ends."""
    width = max(0.6, 2.0 * float(np.diff(delay).min()))
    grid = np.arange(delay[0] + width / 2, delay[-1] - width / 2, width / 20)
    change = np.interp(grid + width / 2, delay, signal) - np.interp(grid - width / 2, delay, signal)
    first = int(np.argmax(np.abs(change) >= 0.6 * np.abs(change).max()))
    change = change * np.sign(change[first])
    peak = first + int(np.argmax(change[first : first + 40]))
    below = np.flatnonzero(change[:peak] < 0.05 * change[peak])
    after = np.flatnonzero(change[peak:] < 0.1 * change[peak])
    onset = grid[below[-1]] - width / 2 if below.size else delay[0] - 1.0
    top = grid[peak + after[0]] + width / 2 if after.size else delay[-1]
    return float(grid[peak]), float(onset), float(top)


def _crossing(delay: _Floats, level: _Floats, fraction: float, steepest: float, top: float) -> float:
    """Delay where the normalised edge crosses a fraction, the crossing nearest to its steepest point."""
    up = np.flatnonzero((level[:-1] < fraction) & (level[1:] >= fraction) & (delay[:-1] <= top))
    at = delay[up] + (fraction - level[up]) / (level[up + 1] - level[up]) * (delay[up + 1] - delay[up])
    if not at.size:
        raise TraceError("the rising edge is not resolved by the delays")
    return float(at[np.argmin(np.abs(at - steepest))])
