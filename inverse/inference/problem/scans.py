"""Noise per delay from repeated scans: standard errors, drawn towards a smooth course where the scans are few.

A standard error from n scans has n - 1 degrees of freedom: with three, it is wrong by half its size, and the delays
that came out small by chance would rule the fit. The log variances are smoothed along the delay. How much they scatter
about the smooth course beyond what their own degrees of freedom d explain tells what the course is worth at a delay,
d0 degrees of freedom; each variance is then ``(d0 s0^2 + d s^2) / (d0 + d)``, s0^2 the course (scaled inverse
chi-squared priors, moments of log variances matched: Smyth, Stat. Appl. Genet. Mol. Biol. 3, 3, 2004; from memory).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["moderated", "relative_noise"]

Array = NDArray[np.float64]

WINDOW = 21
"""Delays over which log variances are averaged: 21 of three scans give the course to 14 % (in standard deviation)."""


def relative_noise(scatter: Array, scans: Array | None) -> Array:
    """Return the relative standard deviation of the white noise per delay, of median 1.

    Parameters
    ----------
    scatter : array, shape (delays,)
        Standard error of the mean of the scans per delay.
    scans : array, shape (delays,), optional
        How many scans; without it the standard errors are taken as they are.

    Raises
    ------
    ValueError
        If a standard error is negative or not finite, most are zero, or a count is below 2.
    """
    if not (np.isfinite(scatter).all() and (scatter >= 0).all() and np.median(scatter) > 0):
        raise ValueError(
            "The standard errors of repeated scans must be finite and not negative, most of them above zero; drop the "
            "variable that ends in '_scatter' if they are not known."
        )
    if scans is None and (scatter == 0).any():
        raise ValueError(
            "A standard error of repeated scans is zero, so that its delay would outweigh all others; give the number "
            "of scans in a variable that ends in '_scans', or drop the one that ends in '_scatter'."
        )
    if scans is not None and (scans < 2).any():
        raise ValueError(f"Standard errors need 2 scans or more at each delay; there are {int(scans.min())}.")
    known = scatter if scans is None else np.sqrt(moderated(scatter**2, np.asarray(scans, dtype=float) - 1))
    return np.asarray(known / np.median(known))


def moderated(variance: Array, freedom: Array) -> Array:
    """Draw sample variances towards their smooth course along the delay.

    Parameters
    ----------
    variance : array, shape (delays,)
        Sample variances; a zero counts as the smallest that is not.
    freedom : array, shape (delays,)
        Degrees of freedom of each.

    Returns
    -------
    array, shape (delays,)
    """
    log = np.log(np.maximum(variance, variance[variance > 0].min()))
    # A log of a chi-squared variable is low on average.
    centred = log - special.digamma(freedom / 2) + np.log(freedom / 2)
    course = _smooth(centred)
    width = min(WINDOW, variance.size)
    excess = np.mean((centred - course) ** 2) * width / (width - 1) - np.mean(
        special.polygamma(1, freedom / 2)
    )
    worth = _freedom_of(float(excess))
    # The course is that of E[log s^2]; its scale s0^2 stands above it by the bias of the prior's own logarithm.
    scale = (
        np.exp(course) if np.isinf(worth) else np.exp(course + special.digamma(worth / 2) - np.log(worth / 2))
    )
    if np.isinf(worth):
        return np.asarray(scale)
    return np.asarray((worth * scale + freedom * variance) / (worth + freedom))


def _smooth(values: Array) -> Array:
    """Return running means over `WINDOW` delays, over what there is of the window at the ends."""
    width = min(WINDOW, values.size)
    window = np.ones(width)
    return np.asarray(np.convolve(values, window, "same") / np.convolve(np.ones(values.size), window, "same"))


def _freedom_of(excess: float) -> float:
    """Return d0 with ``trigamma(d0/2) = excess``, by Newton's method; infinite where there is no excess."""
    if excess <= 1e-3:
        return np.inf
    half = 0.5 + 1 / excess
    for _ in range(50):
        value = float(special.polygamma(1, half))
        step = value * (1 - value / excess) / float(special.polygamma(2, half))
        half += step
        if abs(step) < 1e-10 * half:
            break
    return 2 * half
