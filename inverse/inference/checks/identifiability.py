"""What data and priors each contribute, from the curvature of the likelihood at draws of the posterior.

In the standard normal variables z of the priors the posterior's local precision is ``P = F + 1``, F the Fisher
information of the data with the linear coefficients eliminated. With ``C = P^-1``,

``C = C F C + C C``,  ``C_ii = (C F C)_ii + sum_j C_ij^2``:

the share of unknown i's variance that comes from the prior on j is ``C_ij^2 / C_ii``, what is left is the data's. An
eigenvalue of C is 1 where the data say nothing and 0 where they say all. Curved ridges are straight to their
draws: everything is computed at draws of the posterior and put together afterwards.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.inference.inversion import Inversion
from inverse.inference.minima.projection import Projected

__all__ = ["Local", "Ridge", "local_covariances", "ridges"]

Array = NDArray[np.float64]

OPEN = 0.5
"""A direction is open where the prior supplies at least this part of its precision."""

CARRIED = 0.75
"""An unknown is carried by open directions where they supply at least this part of its variance."""

_LINKED = 0.5
_STEP = 1e-4


@dataclass(frozen=True)
class Local:
    """Curvature at draws of the posterior.

    Attributes
    ----------
    names : tuple of str
        Unknowns other than noise.
    covariance : array, shape (draws, unknowns, unknowns)
        C, in standard normal variables.
    slope : array, shape (draws, unknowns)
        d(value) / dz.
    values : array, shape (draws, unknowns)
    """

    names: tuple[str, ...]
    covariance: Array
    slope: Array
    values: Array

    @property
    def prior_shares(self) -> Array:
        """Share of the variance of each unknown (row) that comes from each prior (column), mean over draws."""
        diagonal = np.diagonal(self.covariance, axis1=1, axis2=2)
        return np.asarray((self.covariance**2 / diagonal[:, :, None]).mean(axis=0))


@dataclass(frozen=True)
class Ridge:
    """Unknowns that the data do not tell apart.

    Attributes
    ----------
    free : tuple of int
        Unknowns whose priors make the split.
    tied : tuple of int
        Unknowns that follow them.
    """

    free: tuple[int, ...]
    tied: tuple[int, ...]


def local_covariances(inversion: Inversion, z: Array) -> Local:
    """Compute the curvature at points of the posterior.

    Parameters
    ----------
    inversion : Inversion
    z : array, shape (draws, unknowns)
        Standard normal variables, noise included.
    """
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    to_values = inversion.posterior.parameters.to_values
    covariance = []
    for point in z:
        residuals = Projected(inversion.posterior.as_gaussian(point), physical, point)
        x = point[physical]
        shifted = x + _STEP * np.concatenate([np.eye(x.size), -np.eye(x.size)])
        found = residuals(shifted)
        jacobian = (found[: x.size] - found[x.size :]) / (2 * _STEP)
        covariance.append(np.linalg.inv(jacobian @ jacobian.T))
    slope = (to_values(z + _STEP) - to_values(z - _STEP)) / (2 * _STEP)
    names = tuple(name for name in inversion.names if name not in inversion.noise_names)
    return Local(names, np.array(covariance), slope[:, physical], to_values(z)[:, physical])


def ridges(covariance: Array) -> tuple[Ridge, ...]:
    """Find the groups of unknowns that the data do not tell apart.

    Parameters
    ----------
    covariance : array, shape (draws, unknowns, unknowns)
        C at draws of the posterior; a link holds if it does at most of them.

    Returns
    -------
    tuple of Ridge
        Each of two unknowns or more. An unknown of which the data say nothing at all is in none.
    """
    links = np.mean([_links(c) for c in covariance], axis=0) > 0.5
    return tuple(_ridge(group, covariance) for group in _groups(links) if len(group) > 1)


def _links(covariance: Array) -> NDArray[np.bool_]:
    """Which unknowns are carried by the same open direction, at one draw."""
    size, vectors = np.linalg.eigh(covariance)
    is_open = size > OPEN
    part = (vectors[:, is_open] * size[is_open]) @ vectors[:, is_open].T
    own = np.maximum(part.diagonal(), 1e-150)
    carried = own / covariance.diagonal() > CARRIED
    together = np.abs(part) / np.sqrt(np.outer(own, own)) > _LINKED
    return np.asarray(together & np.outer(carried, carried))


def _groups(links: NDArray[np.bool_]) -> list[list[int]]:
    """Split into connected components."""
    left, groups = set(range(len(links))), []
    while left:
        front, group = [left.pop()], []
        while front:
            i = front.pop()
            group.append(i)
            near = {j for j in left if links[i, j]}
            left -= near
            front += near
        groups.append(sorted(group))
    return groups


def _ridge(group: list[int], covariance: Array) -> Ridge:
    """Choose as free the unknowns with the widest distributions in units of their priors, one per open direction."""
    block = covariance[:, group][:, :, group]
    open_count = int(np.median([(np.linalg.eigvalsh(b) > OPEN).sum() for b in block]))
    rest, free = block.copy(), []
    for _ in range(min(max(open_count, 1), len(group) - 1)):
        i = int(np.argmax(np.diagonal(rest, axis1=1, axis2=2).mean(axis=0)))
        free.append(i)
        column = rest[:, :, i]
        rest = (
            rest - column[:, :, None] * column[:, None, :] / np.maximum(rest[:, i, i], 1e-300)[:, None, None]
        )
    tied = [i for i in range(len(group)) if i not in free]
    return Ridge(tuple(group[i] for i in free), tuple(group[i] for i in tied))
