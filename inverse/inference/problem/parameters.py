"""The unknowns of a problem and their priors, seen by samplers as standard normal variables.

``value = F^-1(Phi(z))`` with F the prior's distribution function: in z every prior is N(0, 1), nothing has an
edge, and every unknown is of order one.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["Parameters", "normal_of", "parameters"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Parameters:
    """Names and priors of the unknowns, in a fixed order.

    Attributes
    ----------
    names : tuple of str
    priors : tuple of frozen scipy.stats distributions
    """

    names: tuple[str, ...]
    priors: tuple[Any, ...]
    maps: tuple[Callable[[Array], Array], ...] = field(repr=False)

    def to_values(self, z: Array) -> Array:
        """Map standard normal variables to values, both of shape (n, unknowns)."""
        return np.stack([m(z[:, i]) for i, m in enumerate(self.maps)], axis=1)

    def to_z(self, values: Array) -> Array:
        """Map values to standard normal variables; a value outside its prior's support gives +-inf."""
        return np.stack([normal_of(prior, values[:, i]) for i, prior in enumerate(self.priors)], axis=1)

    def log_prior(self, values: Array) -> Array:
        """Return the log prior density of values, shape (n,)."""
        return np.asarray(sum(prior.logpdf(values[:, i]) for i, prior in enumerate(self.priors)))

    def named(self, values: Array) -> dict[str, Array]:
        """Return values of shape (n, unknowns) as a mapping name -> (n,)."""
        return {name: values[:, i] for i, name in enumerate(self.names)}


def normal_of(prior: Any, value: Array) -> Array:
    """Return the standard normal variable of values of one unknown."""
    below = prior.cdf(value)
    return np.where(below < 0.5, special.ndtri(below), -special.ndtri(prior.sf(value)))


def parameters(priors: Mapping[str, Any]) -> Parameters:
    """Collect unknowns from a mapping of names to frozen distributions."""
    return Parameters(tuple(priors), tuple(priors.values()), tuple(_normal_map(p) for p in priors.values()))


def _normal_map(prior: Any) -> Callable[[Array], Array]:
    """Return F^-1(Phi(z)), in closed form for the families in everyday use."""
    family = getattr(prior.dist, "name", "")
    shapes, loc, scale = prior.dist._parse_args(*prior.args, **prior.kwds)
    known = _FAMILIES.get(family)
    return _QuantileMap(prior) if known is None else known(float(loc), float(scale), *map(float, shapes))


@dataclass(frozen=True)
class _QuantileMap:
    prior: Any

    def __call__(self, z: Array) -> Array:
        # The tail that is small keeps its digits.
        return np.where(z < 0, self.prior.ppf(special.ndtr(z)), self.prior.isf(special.ndtr(-z)))


@dataclass(frozen=True)
class _Normal:
    loc: float
    scale: float

    def __call__(self, z: Array) -> Array:
        return self.loc + self.scale * z


@dataclass(frozen=True)
class _Uniform:
    loc: float
    scale: float

    def __call__(self, z: Array) -> Array:
        return self.loc + self.scale * special.ndtr(z)


@dataclass(frozen=True)
class _Lognormal:
    loc: float
    scale: float
    shape: float

    def __call__(self, z: Array) -> Array:
        return self.loc + self.scale * np.exp(self.shape * z)


@dataclass(frozen=True)
class _Loguniform:
    loc: float
    scale: float
    low: float
    high: float

    def __call__(self, z: Array) -> Array:
        return self.loc + self.scale * self.low * (self.high / self.low) ** special.ndtr(z)


@dataclass(frozen=True)
class _Halfcauchy:
    loc: float
    scale: float

    def __call__(self, z: Array) -> Array:
        # tan(pi u / 2) and its reciprocal form near u = 1.
        u, v = special.ndtr(z), special.ndtr(-z)
        return self.loc + self.scale * np.where(
            z < 0, np.tan(np.pi / 2 * u), 1 / np.tan(np.pi / 2 * np.maximum(v, 1e-300))
        )


@dataclass(frozen=True)
class _Halfnormal:
    loc: float
    scale: float

    def __call__(self, z: Array) -> Array:
        return self.loc + self.scale * np.where(
            z < 0, special.ndtri(0.5 + special.ndtr(z) / 2), -special.ndtri(special.ndtr(-z) / 2)
        )


_FAMILIES: dict[str, Callable[..., Callable[[Array], Array]]] = {
    "norm": _Normal,
    "uniform": _Uniform,
    "lognorm": _Lognormal,
    "loguniform": _Loguniform,
    "reciprocal": _Loguniform,
    "halfcauchy": _Halfcauchy,
    "halfnorm": _Halfnormal,
}
