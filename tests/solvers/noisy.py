"""Make a measured-looking trace of a clean one: uneven delays, noise, drift, time zero, scale, baseline.

Every random function takes a seed, or a numpy Generator to go on with.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

Real = NDArray[np.float64]
Seed = int | np.random.SeedSequence | np.random.Generator


@dataclass(frozen=True)
class Disturbance:
    """What stands between the sample and the file.

    The trace is `scale` times the clean one, seen at delay - `time_zero` (ps). `white`, `drift` (rms of each)
    and `baseline` are fractions of the scaled trace's largest absolute value; drift forgets over
    `correlation_time` (ps of delay).
    """

    time_zero: float = 0.0
    scale: float = 1.0
    white: float = 0.0
    drift: float = 0.0
    correlation_time: float = 10.0
    baseline: float = 0.0


def uneven_delays(edges: Real, spacings: Real, jitter: float, seed: Seed) -> Real:
    """Increasing delays (ps): `spacings[i]` between `edges[i]` and `edges[i + 1]`, each moved at random.

    The move is uniform, up to `jitter` times the spacing either way. A jitter below 0.5 keeps the order.
    """
    if not 0 <= jitter < 0.5:
        raise ValueError(
            f"jitter = {jitter} would reorder delays: give a fraction of the spacing in [0, 0.5)"
        )
    generator = np.random.default_rng(seed)
    pieces = [np.arange(a, b, h) for a, b, h in zip(edges[:-1], edges[1:], spacings, strict=True)]
    move = np.repeat(spacings, [len(piece) for piece in pieces])
    delays = np.concatenate(pieces)
    return np.sort(delays + move * generator.uniform(-jitter, jitter, len(delays)))


def ornstein_uhlenbeck(delay: Real, rms: float, correlation_time: float, seed: Seed) -> Real:
    """Stationary drift of covariance rms^2 exp(-|t - t'| / correlation_time), exact at uneven delays."""
    draws = np.random.default_rng(seed).standard_normal(len(delay))
    kept = np.exp(-np.diff(delay) / correlation_time)
    drift = np.empty(len(delay))
    drift[0] = draws[0]
    for i, keep in enumerate(kept):
        drift[i + 1] = keep * drift[i] + np.sqrt(1 - keep**2) * draws[i + 1]
    return rms * drift


def disturb(clean_delay: Real, clean: Real, delay: Real, disturbance: Disturbance, seed: Seed) -> Real:
    """The disturbed trace at `delay`, from a clean one at `clean_delay` read by cubic spline.

    Raises ValueError where a shifted delay lies outside the clean trace: nothing is extrapolated.
    """
    seen = delay - disturbance.time_zero
    if seen.min() < clean_delay[0] or seen.max() > clean_delay[-1]:
        raise ValueError(
            f"delays {seen.min():.3f} to {seen.max():.3f} ps are needed, the clean trace has "
            f"{clean_delay[0]:.3f} to {clean_delay[-1]:.3f} ps: simulate a longer one"
        )
    generator = np.random.default_rng(seed)
    signal = disturbance.scale * CubicSpline(clean_delay, clean)(seen)
    full_scale = np.abs(disturbance.scale * clean).max()
    drift = ornstein_uhlenbeck(delay, disturbance.drift, disturbance.correlation_time, generator)
    white = disturbance.white * generator.standard_normal(len(delay))
    return signal + full_scale * (disturbance.baseline + drift + white)
