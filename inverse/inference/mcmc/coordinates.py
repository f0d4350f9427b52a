"""Coordinates in which what the data cannot separate lies on straight lines.

Of a thickness and a velocity a trace sees the ratio: a ridge a thousand times longer than wide, straight in the values
themselves, bent in standard normal variables where a prior ends. So an unknown whose prior has two ends is sampled by
its value, or by its logarithm if the prior is log-uniform; nothing is possible beyond the ends.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.inference.problem.parameters import normal_of

if TYPE_CHECKING:
    from inverse.inference.minima.least_squares import Density

__all__ = ["Edged", "Straight", "straightened"]

Array = NDArray[np.float64]

_LOG_NORM = 0.5 * np.log(2 * np.pi)
_LOGARITHMIC = ("loguniform", "reciprocal")


@dataclass(frozen=True)
class Edged:
    """An unknown between two ends: its value, or the logarithm of it, with the prior's mean at 0 and deviation 1.

    Attributes
    ----------
    column : int
    prior : frozen scipy.stats distribution
    logarithmic : bool
    middle, scale : float
        Of the value or its logarithm.
    ends : tuple of float
        Of the coordinate.
    """

    column: int
    prior: Any
    logarithmic: bool
    middle: float
    scale: float
    ends: tuple[float, float]

    def of_value(self, value: Array) -> Array:
        """Return the coordinate of values."""
        return np.asarray(((np.log(value) if self.logarithmic else value) - self.middle) / self.scale)

    def within(self, y: Array) -> NDArray[np.bool_]:
        """Tell which coordinates neither end cuts off."""
        return np.asarray((y > self.ends[0]) & (y < self.ends[1]))

    def to_z(self, y: Array) -> tuple[Array, Array]:
        """Return standard normal variables and log dz/dy; not a number beyond the ends."""
        scaled = self.middle + self.scale * np.where(self.within(y), y, np.nan)
        value = np.exp(scaled) if self.logarithmic else scaled
        z = normal_of(self.prior, value)
        slope = self.prior.logpdf(value) + np.log(self.scale) + (scaled if self.logarithmic else 0.0)
        return z, slope + 0.5 * z * z + _LOG_NORM


@dataclass(frozen=True)
class Straight:
    """A log posterior density in straight coordinates; picklable, called with points of shape (n, unknowns).

    Attributes
    ----------
    posterior : Density
        Of standard normal variables.
    edged : tuple of Edged
        The other unknowns keep their standard normal variables.
    """

    posterior: Density
    edged: tuple[Edged, ...]

    def __call__(self, y: Array) -> Array:
        """Return the log density, shape (n,); -inf beyond an end."""
        z, slope = self.to_z(y)
        out = np.full(len(y), -np.inf)
        inside = np.isfinite(z).all(axis=1)
        if inside.any():
            out[inside] = self.posterior(z[inside]) + slope[inside]
        return out

    def to_z(self, y: Array) -> tuple[Array, Array]:
        """Return standard normal variables of shape (..., unknowns) and log |dz/dy| of shape (...)."""
        z, slope = np.array(y, dtype=float), np.zeros(np.shape(y)[:-1])
        for axis in self.edged:
            z[..., axis.column], own = axis.to_z(y[..., axis.column])
            slope = slope + own
        return z, slope

    def within(self, y: Array) -> NDArray[np.bool_]:
        """Tell which points of shape (n, unknowns) no end cuts off."""
        inside = np.isfinite(y).all(axis=1)
        for axis in self.edged:
            inside &= axis.within(y[:, axis.column])
        return np.asarray(inside)

    def of_z(self, z: Array) -> Array:
        """Return the coordinates of standard normal variables of shape (..., unknowns)."""
        y = np.array(z, dtype=float)
        for axis in self.edged:
            to_value = self.posterior.parameters.maps[axis.column]
            y[..., axis.column] = axis.of_value(to_value(z[..., axis.column]))
        return y


def straightened(posterior: Density) -> Straight:
    """Return a density in straight coordinates."""
    priors = posterior.parameters.priors
    return Straight(
        posterior, tuple(_edged(i, p) for i, p in enumerate(priors) if np.isfinite(p.support()).all())
    )


def _edged(column: int, prior: Any) -> Edged:
    low, high = map(float, prior.support())
    logarithmic = getattr(prior.dist, "name", "") in _LOGARITHMIC and low > 0
    if logarithmic:
        a, b = np.log(low), np.log(high)
        middle, scale = (a + b) / 2, (b - a) / np.sqrt(12)
    else:
        a, b, middle, scale = low, high, float(prior.mean()), float(prior.std())
    return Edged(column, prior, logarithmic, middle, scale, ((a - middle) / scale, (b - middle) / scale))
