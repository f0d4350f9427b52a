"""Proposals from an approximation of the whole posterior: a mixture of Student t distributions, drawn afresh.

A Metropolis-Hastings step whose proposal does not depend on the present point moves as far as the posterior is wide.
Where the approximation is good, a few steps suffice; the accept-reject rule keeps the target whatever it is
(Tierney, Annals of Statistics 22 (1994) 1701; from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, logsumexp

__all__ = ["IndependenceMove", "StudentMixture", "adapt", "fit_mixture", "refit"]

Array = NDArray[np.float64]

DEGREES = 10.0
"""Degrees of freedom: tails heavier than a normal posterior's, so that no region is left out for long."""

EXTRA = (0, 0, 2, 2)
"""Components beside one per mode, round by round: a banana or a tail takes two more."""

DRAWS_PER_UNKNOWN = 200
STIFFENING = 0.1
ROUNDS = 30


@dataclass(frozen=True)
class StudentMixture:
    """A mixture of multivariate t distributions.

    Attributes
    ----------
    weights : array, shape (components,)
    means : array, shape (components, unknowns)
    roots : array, shape (components, unknowns, unknowns)
        Lower Cholesky factors of the scale matrices.
    """

    weights: Array
    means: Array
    roots: Array

    def draw(self, rng: Any, count: int) -> Array:
        """Draw points of shape (count, unknowns); `rng` is a legacy RandomState or a Generator."""
        which = rng.choice(len(self.weights), size=count, p=self.weights)
        normal = rng.normal(size=(count, self.means.shape[1]))
        stretch = np.sqrt(DEGREES / rng.chisquare(DEGREES, size=count))
        kick = np.einsum("nij,nj->ni", self.roots[which], normal)
        return np.asarray(self.means[which] + stretch[:, None] * kick)

    def log_density(self, points: Array) -> Array:
        """Return the log density at points of shape (n, unknowns)."""
        size = self.means.shape[1]
        constant = gammaln((DEGREES + size) / 2) - gammaln(DEGREES / 2) - size / 2 * np.log(DEGREES * np.pi)
        terms = []
        for weight, mean, root in zip(self.weights, self.means, self.roots, strict=True):
            white = np.linalg.solve(root, (points - mean).T)
            distance = (white * white).sum(axis=0)
            volume = np.log(np.diagonal(root)).sum()
            terms.append(
                np.log(weight) + constant - volume - (DEGREES + size) / 2 * np.log1p(distance / DEGREES)
            )
        return np.asarray(logsumexp(terms, axis=0))


@dataclass(frozen=True)
class IndependenceMove:
    """The step for emcee: every walker is offered a fresh draw from a fixed mixture."""

    mixture: StudentMixture

    def propose(self, model: Any, state: Any) -> tuple[Any, NDArray[np.bool_]]:
        """Make one step; called by emcee with its model and state."""
        present = np.asarray(state.coords)
        offered = self.mixture.draw(model.random, len(present))
        log_prob, _ = model.compute_log_prob_fn(offered)
        gain = (
            log_prob - state.log_prob + self.mixture.log_density(present) - self.mixture.log_density(offered)
        )
        accepted = np.log(model.random.rand(len(present))) < gain
        state.coords[accepted] = offered[accepted]
        state.log_prob[accepted] = log_prob[accepted]
        return state, accepted

    def tune(self, state: Any, accepted: Any) -> None:
        """Do nothing: the proposal stays as it is, or the target would be lost."""


def adapt(
    log_density: Callable[[Array], Array], first: StudentMixture, rng: np.random.Generator
) -> tuple[StudentMixture, Array, Array]:
    """Bring a mixture close to a density by importance sampling, round by round.

    Each round draws from the mixture, weights the draws by density over proposal (the largest weights cut, so that
    a few lucky draws do not rule) and fits the next mixture to them (population Monte Carlo: Cappe, Douc, Guillin,
    Marin and Robert, Statistics and Computing 18 (2008) 447; truncation: Ionides, J. Comp. Graph. Stat. 17 (2008) 295;
    from memory).

    Parameters
    ----------
    log_density : callable
        Points (n, unknowns) to log densities (n,).
    first : StudentMixture
        One component per mode.
    rng : Generator

    Returns
    -------
    mixture : StudentMixture
    points, log_weights : array
        The last round's draws, finite ones, and their log weights (not cut).
    """
    mixture = first
    size = first.means.shape[1]
    for extra in EXTRA:
        points = mixture.draw(rng, max(1200, DRAWS_PER_UNKNOWN * size))
        log_weights = log_density(points) - mixture.log_density(points)
        good = np.isfinite(log_weights)
        points, log_weights = points[good], log_weights[good]
        mixture = refit(points, log_weights, first.means, extra, rng)
    return mixture, points, log_weights


def refit(
    points: Array, log_weights: Array, centres: Array, extra: int, rng: np.random.Generator
) -> StudentMixture:
    """Fit the next mixture to weighted points, the largest weights cut.

    Parameters
    ----------
    points : array, shape (n, unknowns)
    log_weights : array, shape (n,)
        Finite.
    centres : array, shape (components, unknowns)
        Where components start; `extra` more start at points drawn by weight.
    extra : int
    rng : Generator
    """
    cut = np.minimum(log_weights, logsumexp(log_weights) - 0.5 * np.log(len(points)))
    share = np.exp(cut - logsumexp(cut))
    starts = points[rng.choice(len(points), extra, p=share, replace=False)] if extra else points[:0]
    return fit_mixture(points, share, np.concatenate([centres, starts]))


def fit_mixture(points: Array, share: Array, centres: Array) -> StudentMixture:
    """Fit a mixture to weighted points by expectation and maximisation of its normal counterpart.

    Parameters
    ----------
    points : array, shape (n, unknowns)
    share : array, shape (n,)
        Weights, adding up to one.
    centres : array, shape (components, unknowns)
        Where the components start.
    """
    middle = share @ points
    whole = ((points - middle).T * share) @ (points - middle) + 1e-10 * np.eye(points.shape[1])
    weights = np.full(len(centres), 1 / len(centres))
    means, scales = centres, np.repeat(whole[None], len(centres), axis=0)
    for _ in range(ROUNDS):
        part = _shares(points, weights, means, _roots(scales)) * share[:, None]
        count = part.sum(axis=0) + 1e-12
        weights = count / count.sum()
        means = (part.T @ points) / count[:, None]
        centred = points[None] - means[:, None]
        own = np.einsum("nk,kni,knj->kij", part, centred, centred) / count[:, None, None]
        # Part of the whole spread keeps a component from collapsing on a few points.
        scales = own + STIFFENING * whole if len(centres) > 1 else whole[None]
    kept = weights > 1e-4
    return StudentMixture(weights[kept] / weights[kept].sum(), means[kept], _roots(scales[kept]))


def _roots(scales: Array) -> Array:
    return np.asarray(np.linalg.cholesky(scales), dtype=float)


def _shares(points: Array, weights: Array, means: Array, roots: Array) -> Array:
    """Probability that each point belongs to each normal component, shape (n, components)."""
    terms = []
    for weight, mean, root in zip(weights, means, roots, strict=True):
        white = np.linalg.solve(root, (points - mean).T)
        terms.append(np.log(weight) - (white * white).sum(axis=0) / 2 - np.log(np.diagonal(root)).sum())
    log_share = np.array(terms).T
    return np.asarray(np.exp(log_share - logsumexp(log_share, axis=1, keepdims=True)))
