"""Draws of a posterior with the problem they belong to, from a sampling result or a least-squares fit."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_seed
from inverse.inference.minima.least_squares import Fit
from inverse.inference.result import rebuild

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["PosteriorDraws", "posterior_draws", "sampled_values"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class PosteriorDraws:
    """Draws and their problem.

    Attributes
    ----------
    inversion : Inversion
    values : array, shape (chains, draws, unknowns)
        Public units, in the order of ``inversion.names``.
    sampled : bool
        False where the draws come from the normal approximation of least squares.
    """

    inversion: Inversion
    values: Array
    sampled: bool

    @property
    def flat(self) -> Array:
        """Values of all chains, shape (draws, unknowns)."""
        return self.values.reshape(-1, self.values.shape[-1])

    @property
    def z(self) -> Array:
        """Standard normal variables of the priors, shape (draws, unknowns)."""
        return self.inversion.posterior.parameters.to_z(self.flat)

    def thinned(self, count: int) -> PosteriorDraws:
        """Keep at most `count` draws of every chain, evenly spread over it."""
        draws = self.values.shape[1]
        keep = np.unique(np.linspace(0, draws - 1, min(count, draws)).round().astype(int))
        return PosteriorDraws(self.inversion, self.values[:, keep], self.sampled)


def posterior_draws(result: Any, *, seed: int = 0, count: int = 400) -> PosteriorDraws:
    """Collect the draws of a result.

    Parameters
    ----------
    result : xarray.DataTree or Fit
        From `sample_posterior`, `load` or `Inversion.least_squares`.
    seed : int
        For the draws from the normal approximation of a `Fit`.
    count : int
        Number of those.

    Raises
    ------
    ValueError
        If `result` is neither.
    """
    seed = checked_seed(seed)
    if isinstance(result, Fit):
        return PosteriorDraws(result.inversion, _normal_draws(result, seed, count)[None], False)
    if "posterior" not in getattr(result, "children", ()) or "inverse" not in result.attrs:
        raise ValueError(
            f"Got {type(result).__name__} instead of a result; give what sample_posterior, least_squares or load "
            "returned."
        )
    inversion = rebuild(result)
    return PosteriorDraws(inversion, sampled_values(result, inversion.names), True)


def sampled_values(result: Any, names: tuple[str, ...]) -> Array:
    """Return the draws of named variables of a sampling result, shape (chains, draws, names)."""
    posterior = result["posterior"].to_dataset()
    columns = [np.asarray(posterior[name].transpose("chain", "draw"), dtype=float) for name in names]
    return np.stack(columns, axis=-1)


def _normal_draws(fit: Fit, seed: int, count: int) -> Array:
    """Draw from the normal approximations of the minima in proportion to their weights, where possible at all."""
    rng = np.random.default_rng(seed)
    which = rng.choice(len(fit.minima), count, p=[b.weight for b in fit.minima])
    kicks = rng.standard_normal((count, len(fit.names)))
    roots = [_root(b.covariance_z) for b in fit.minima]
    z = np.array([fit.minima[w].z + roots[w] @ k for w, k in zip(which, kicks, strict=True)])
    possible = np.isfinite(fit.inversion.posterior(z))
    return fit.inversion.posterior.parameters.to_values(z[possible] if possible.any() else fit.best.z[None])


def _root(covariance: Array) -> Array:
    """Square root of a covariance, its directions no wider than the prior."""
    size, vectors = np.linalg.eigh(covariance)
    return np.asarray(vectors * np.sqrt(np.clip(size, 0.0, 1.0)))
