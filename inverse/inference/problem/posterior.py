"""The posterior density of a problem of one or several traces."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.inference.problem.likelihood import TraceModel
from inverse.inference.problem.parameters import Parameters

__all__ = ["Member", "Posterior"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Member:
    """One trace of a problem and how its names map to the problem's.

    Attributes
    ----------
    model : TraceModel
    label : str
        Empty for a problem of one trace.
    names : dict
        Name inside the model -> name in the problem.
    fixed : dict
        Values inside the model that are known, such as a given time zero.
    """

    model: TraceModel
    label: str
    names: Mapping[str, str]
    fixed: Mapping[str, float]

    def local(self, named: Mapping[str, Array]) -> dict[str, Array]:
        """Translate the problem's named values into the model's."""
        sets = len(next(iter(named.values())))
        values = {inner: named[outer] for inner, outer in self.names.items()}
        return {**values, **{name: np.full(sets, v) for name, v in self.fixed.items()}}


@dataclass(frozen=True)
class Posterior:
    """Log posterior density of a problem; picklable, called with standard normal variables.

    Attributes
    ----------
    parameters : Parameters
    members : tuple of Member
    low, high : array, shape (unknowns,)
        Values outside are impossible whatever the prior's tail says.
    """

    parameters: Parameters
    members: tuple[Member, ...]
    low: Array
    high: Array

    def __call__(self, z: Array) -> Array:
        """Return the log posterior of standard normal variables, shape (n,)."""
        with np.errstate(all="ignore"):
            prior = -0.5 * (z * z).sum(axis=1) - 0.5 * z.shape[1] * np.log(2 * np.pi)
            total = prior + self.log_likelihood(self.parameters.to_values(z))
        return np.where(np.isnan(prior), -np.inf, total)

    def as_gaussian(self, z: Array) -> Posterior:
        """Return the problem whose Gaussian noise has the curvature of its own at one point z, shape (unknowns,)."""
        named = self.parameters.named(self.parameters.to_values(z[None]))
        members = (replace(m, model=m.model.as_gaussian(m.local(named))) for m in self.members)
        return replace(self, members=tuple(members))

    def log_prob(self, values: Array) -> Array:
        """Return the log posterior density of values, shape (n,); -inf where impossible, NaN included."""
        prior = self.parameters.log_prior(values)
        return np.where(np.isnan(prior), -np.inf, prior + self.log_likelihood(values))

    def possible(self, values: Array) -> NDArray[np.bool_]:
        """Tell which values of shape (n, unknowns) are numbers within their limits and their prior's support."""
        low, high = np.transpose([prior.support() for prior in self.parameters.priors])
        return (values >= np.maximum(low, self.low)) & (values <= np.minimum(high, self.high))

    def log_likelihood(self, values: Array) -> Array:
        """Return the log likelihood of values of shape (n, unknowns); -inf where impossible."""
        inside = (np.isfinite(values) & (values >= self.low) & (values <= self.high)).all(axis=1)
        out = np.full(len(values), -np.inf)
        if inside.any():
            named = self.parameters.named(values[inside])
            out[inside] = sum(m.model.log_likelihood(m.local(named)) for m in self.members)
        return out
