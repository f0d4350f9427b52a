"""Profile likelihood of one unknown: the best fit for every value of it, noise and all other unknowns adjusted."""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy import interpolate, optimize

from inverse.description.arguments import whole_number
from inverse.inference.inversion import Inversion
from inverse.inference.minima.least_squares import Basin, Fit
from inverse.inference.problem.posterior import Posterior

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["LEVELS", "profile"]

Array = NDArray[np.float64]

LEVELS = {0.68: 0.98894, 0.95: 3.84146}
"""Deviance at the ends of likelihood-ratio intervals: quantiles of chi-square with one degree of freedom."""

_FAR = 6.5
_EDGE = 6.0
_STEP = 1e-4
_LEAST_WEIGHT = 1e-3
_IMPOSSIBLE = 1e10


def profile(
    inversion: Inversion,
    name: str,
    *,
    points: int = 25,
    fit: Fit | None = None,
    own_prior: bool = False,
    seed: int = 0,
) -> xr.Dataset:
    """Compute the profile likelihood of one unknown.

    ``D(x) = 2 [max log L - max over the others of log L at x]``; ``log L`` is the marginal likelihood with the
    linear coefficients eliminated, times the priors of the other unknowns, without which those that the data do
    not determine would have no best value. The prior of `name` itself is left out.

    Parameters
    ----------
    inversion : Inversion
    name : str
        An unknown, noise included.
    points : int
        Values at which the profile is computed, at least 7.
    fit : Fit, optional
        Minima to start from; least squares is run first if left out.
    own_prior : bool
        Include the prior of `name`, as a density of its standard normal variable.
    seed : int
        For least squares.

    Returns
    -------
    xarray.Dataset
        On ``value``: ``deviance``, ``log_likelihood`` and ``best`` (value, unknown), the best values of all
        unknowns. attrs: ``name``, ``units``, ``estimate``, and ``interval_68`` and ``interval_95``, JSON lists of
        [low, high] where the deviance is below 0.99 and 3.84 (Wilks 1938, from memory): several where the
        profile has several minima; an end that the likelihood leaves open is the prior's, and named in
        ``open`` ("low", "high", "both" or "").

    Raises
    ------
    ValueError
        If there is no such unknown or `points` is below 7.
    """
    import xarray as xr

    if not hasattr(inversion, "posterior"):
        raise ValueError(f"profile takes an Inversion first, not a {type(inversion).__name__}.")
    if name not in inversion.names:
        raise ValueError(f"There is no unknown '{name}'; there are {', '.join(inversion.names)}.")
    points = whole_number("points", points, 7)
    fit = inversion.least_squares(seed=seed) if fit is None else fit
    i = inversion.names.index(name)
    ascent = _Ascent(_Objective(inversion.posterior, None if own_prior else i), i)
    traced = _trace(ascent, [b for b in fit.minima if b.weight > _LEAST_WEIGHT], points)
    values = inversion.posterior.parameters.to_values(traced.z)
    # Near an edge of the prior several z may round to one value.
    _, first = np.unique(values[:, i], return_index=True)
    values, z, height = values[first], traced.z[first], traced.height[first]
    deviance = 2 * (height.max() - height)
    segments = {mass: _segments(z[:, i], deviance, level) for mass, level in LEVELS.items()}
    unit = inversion.units[name]
    return xr.Dataset(
        {
            "deviance": ("value", deviance, {"units": "1", "long_name": "2 x log likelihood ratio"}),
            "log_likelihood": ("value", height, {"units": "1"}),
            "best": (("value", "unknown"), values, {"long_name": "best values of all unknowns"}),
        },
        coords={
            "value": ("value", values[:, i], {"units": unit, "long_name": name}),
            "unknown": list(inversion.names),
        },
        attrs={
            "name": name,
            "units": unit,
            "estimate": float(values[int(np.argmin(deviance)), i]),
            "own_prior": int(own_prior),
            "open": _open_ends(segments[0.95]),
            **{
                f"interval_{100 * mass:.0f}": json.dumps(_in_values(found, inversion, i, z[0]))
                for mass, found in segments.items()
            },
        },
    )


@dataclass(frozen=True)
class _Traced:
    """Points along a profile: all unknowns in z, and the objective there."""

    z: Array
    height: Array


@dataclass(frozen=True)
class _Objective:
    """Log posterior in z, without the prior of one unknown."""

    posterior: Posterior
    left_out: int | None

    def __call__(self, z: Array) -> Array:
        own = 0.0 if self.left_out is None else 0.5 * z[:, self.left_out] ** 2
        return np.nan_to_num(self.posterior(z) + own, nan=-_IMPOSSIBLE, neginf=-_IMPOSSIBLE)


@dataclass(frozen=True)
class _Ascent:
    """Maximises the objective over all unknowns but one."""

    objective: Callable[[Array], Array]
    i: int

    def at(self, z: Array, covariance: Array) -> tuple[Array, float]:
        """Maximise from z with its entry i held; `covariance` sets the scale of the others."""
        others = np.arange(z.size) != self.i
        return self._climb(z, others, covariance)

    def free(self, z: Array, covariance: Array) -> tuple[Array, float]:
        """Maximise over all unknowns from z."""
        return self._climb(z, np.ones(z.size, dtype=bool), covariance)

    def _climb(self, z: Array, moving: NDArray[np.bool_], covariance: Array) -> tuple[Array, float]:
        if not moving.any():
            return z, float(self.objective(z[None])[0])
        root = _root(np.linalg.pinv(np.linalg.pinv(covariance)[np.ix_(moving, moving)]))
        size = root.shape[1]
        shifts = _STEP * np.concatenate([np.zeros((1, size)), np.eye(size), -np.eye(size)])

        def slope(w: Array) -> tuple[float, Array]:
            points = np.repeat(z[None], len(shifts), axis=0)
            points[:, moving] += (w + shifts) @ root.T
            f = -self.objective(points)
            return float(f[0]), (f[1 : size + 1] - f[size + 1 :]) / (2 * _STEP)

        found = optimize.minimize(slope, np.zeros(size), jac=True, method="BFGS", options={"gtol": 1e-3})
        best = z.copy()
        best[moving] += root @ found.x
        return best, -float(found.fun)


def _root(covariance: Array) -> Array:
    size, vectors = np.linalg.eigh(covariance)
    return np.asarray(vectors * np.sqrt(np.clip(size, 1e-10, 1.0)))


def _trace(ascent: _Ascent, minima: Sequence[Basin], points: int) -> _Traced:
    """March outwards from every minimum to find the range, then fill it evenly with the highest branch."""
    i = ascent.i
    tops, branches = [], []
    climbed = [(basin, *ascent.free(basin.z, basin.covariance_z)) for basin in minima]
    # A minimum whose top is beyond every level holds no part of an interval; its range would only thin the points.
    best = max(height for _, _, height in climbed)
    climbed = [(basin, top, height) for basin, top, height in climbed if 2 * (best - height) < _FAR]
    for basin, top, height in climbed:
        marched = [(top, height)]
        for direction in (-1.0, 1.0):
            marched += _march(ascent, top, height, basin.covariance_z, direction)
        tops.append((top, height))
        branches.append(np.array(sorted((p[0] for p in marched), key=lambda z: float(z[i]))))
    ends = [branch[[0, -1], i] for branch in branches]
    wanted = np.linspace(min(e[0] for e in ends), max(e[1] for e in ends), points)
    kept = [basin for basin, _, _ in climbed]
    filled = [_highest(ascent, value, branches, kept) for value in wanted]
    filled.append(max(tops, key=lambda t: t[1]))
    filled.sort(key=lambda f: float(f[0][i]))
    return _Traced(np.array([f[0] for f in filled]), np.array([f[1] for f in filled]))


def _highest(
    ascent: _Ascent, value: float, branches: Sequence[Array], minima: Sequence[Basin]
) -> tuple[Array, float]:
    """Maximise at a value from what each branch has there (its end where it does not reach), and keep the best."""
    found = []
    for branch, basin in zip(branches, minima, strict=True):
        guess = np.array([np.interp(value, branch[:, ascent.i], column) for column in branch.T])
        guess[ascent.i] = value
        found.append(ascent.at(guess, basin.covariance_z))
    return max(found, key=lambda f: f[1])


def _march(
    ascent: _Ascent, top: Array, height: float, covariance: Array, direction: float
) -> list[tuple[Array, float]]:
    """Step outwards, in growing steps, until the deviance is beyond the 95 % level or z at its edge."""
    i = ascent.i
    response = covariance[:, i] / covariance[i, i]
    step = 0.6 * np.sqrt(covariance[i, i])
    out: list[tuple[Array, float]] = []
    z = top
    for _ in range(20):
        step = min(step, direction * (direction * _EDGE - z[i]))
        if step < 1e-9:
            break
        found = ascent.at(z + direction * step * response, covariance)
        out.append(found)
        if 2 * (height - found[1]) > _FAR:
            break
        z, step = found[0], 1.3 * step
    return out


def _segments(z: Array, deviance: Array, level: float) -> list[tuple[float, float]]:
    """Return the stretches of z where the interpolated deviance is below a level."""
    fine = np.unique(np.concatenate([np.linspace(z[0], z[-1], 4001), z]))
    curve = np.asarray(interpolate.CubicSpline(z, deviance)(fine))
    below = curve < level
    change = np.flatnonzero(np.diff(np.concatenate([[0], below, [0]]).astype(int))).reshape(-1, 2)
    return [
        (_crossing(fine, curve, level, a - 1, a), _crossing(fine, curve, level, b - 1, b)) for a, b in change
    ]


def _crossing(x: Array, y: Array, level: float, before: int, after: int) -> float:
    """Interpolate where y crosses a level between two points; the end of x where it does not."""
    if before < 0 or after >= x.size:
        return float(x[np.clip(after if before < 0 else before, 0, x.size - 1)])
    part = (level - y[before]) / (y[after] - y[before])
    return float(x[before] + part * (x[after] - x[before]))


def _open_ends(segments: list[tuple[float, float]]) -> str:
    low, high = segments[0][0] <= -_EDGE + 1e-6, segments[-1][1] >= _EDGE - 1e-6
    return "both" if low and high else "low" if low else "high" if high else ""


def _in_values(
    segments: list[tuple[float, float]], inversion: Inversion, i: int, own: Array
) -> list[list[float]]:
    """Translate stretches of z into values; an end at the edge of z is the prior's own."""
    support = [float(b) for b in inversion.priors[inversion.names[i]].support()]
    ends = np.repeat(own[None], 2 * len(segments), axis=0)
    ends[:, i] = np.ravel(segments)
    values = inversion.posterior.parameters.to_values(ends)[:, i]
    values = np.where(ends[:, i] <= -_EDGE + 1e-6, support[0], values)
    values = np.where(ends[:, i] >= _EDGE - 1e-6, support[1], values)
    return [[float(a), float(b)] for a, b in values.reshape(-1, 2)]
