"""Minima of a problem: variable projection from several starting points, ranked by the probability they hold."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from inverse.description.arguments import checked_seed, whole_number
from inverse.description.wording import plus_minus
from inverse.inference.minima.minimise import Minimum, covariance_of, jacobian, minimise
from inverse.inference.minima.projection import Projected
from inverse.inference.minima.starts import best, candidates, coarse_noise, given_point, joined, parts_of
from inverse.inference.problem.parameters import Parameters
from inverse.inference.problem.posterior import Posterior

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["Basin", "Fit", "basin_distance", "least_squares", "make_basin", "ranked", "refine"]

Array = NDArray[np.float64]


class Density(Protocol):
    """A log posterior density of standard normal variables, shape (n, unknowns) -> (n,)."""

    @property
    def parameters(self) -> Parameters: ...

    def __call__(self, z: Array) -> Array: ...


# Ends the search from a starting point: it is refined once the distinct minima are known.
_ROUGH = 1e-8
# Far below what the minimum's own width means, and above the rounding of the response.
_FINE = 1e-10
# White noise, over the rms of the signal, that lets a coarse search see past narrow minima. Half of the starts each:
# the wider sees the round trip from afar, the narrower the weak echo of a nearly perfect bond.
_COARSE = (0.02, 0.005)
# Rough minima nearer than this, in deviations of the later and sharper search, are one.
_DISTINCT = 2.0


@dataclass(frozen=True)
class Basin:
    """A minimum and the normal approximation around it.

    Attributes
    ----------
    z : array, shape (unknowns,)
        In standard normal variables of the priors.
    covariance_z : array, shape (unknowns, unknowns)
    values, sd : array, shape (unknowns,)
        Public units; `sd` to first order.
    covariance : array
        Of `values`.
    log_posterior : float
        At z.
    weight : float
        Share of the posterior probability in the normal approximation, among the minima found.
    minimum : Minimum
        Of the unknowns other than noise.
    """

    z: Array
    covariance_z: Array
    values: Array
    sd: Array
    covariance: Array
    log_posterior: float
    weight: float
    minimum: Minimum


@dataclass(frozen=True)
class Fit:
    """Result of `least_squares` of a problem: distinct minima, the most probable first.

    Attributes
    ----------
    inversion : Inversion or ConstantsInversion
        The problem that was fitted.
    names : tuple of str
    minima : tuple of Basin
    seed : int
    """

    inversion: Any
    names: tuple[str, ...]
    minima: tuple[Basin, ...]
    seed: int

    def __repr__(self) -> str:
        """Say how many minima there are, and the values at the best with their standard deviations."""
        count = "1 minimum" if len(self.minima) == 1 else f"{len(self.minima)} minima, the best"
        width = max(map(len, self.names))
        rows = (
            f"  {name:{width}}  {plus_minus(value, sd)}{'' if unit == '1' else f' {unit}'}"
            for name, value, sd, unit in zip(self.names, self.values, self.sd, self.units, strict=True)
        )
        return "\n".join([f"Fit of {len(self.names)} unknowns, {count}:", *rows])

    @property
    def best(self) -> Basin:
        """The most probable minimum."""
        return self.minima[0]

    @property
    def values(self) -> Array:
        """Values at the best minimum, shape (unknowns,)."""
        return self.best.values

    @property
    def sd(self) -> Array:
        """Standard deviations in the normal approximation, shape (unknowns,)."""
        return self.best.sd

    @property
    def units(self) -> tuple[str, ...]:
        """Units of the unknowns."""
        return tuple(self.inversion.units[name] for name in self.names)

    @property
    def flags(self) -> tuple[str, ...]:
        """What to know about each number; empty where there is nothing."""
        notes = [] if self.best.minimum.converged else ["not converged"]
        if len(self.minima) > 1:
            notes.append(f"{len(self.minima)} minima")
        wide = self.best.covariance_z.diagonal() > 0.8
        return tuple("; ".join([*notes, *(["prior only"] if w else [])]) for w in wide)


def least_squares(
    inversion: Inversion, *, starts: int = 12, seed: int = 0, points: Sequence[Mapping[str, float]] = ()
) -> Fit:
    """Find the minima of a problem from several starting points.

    Parameters
    ----------
    inversion : Inversion
    starts : int
        Starting points that are followed to their minimum. They are the best of 512 draws from the priors
        (half of them moved to the round-trip time that the echoes show), distinct ones first.
    seed : int
    points : sequence of mapping
        Values of the unknowns at further starting points, such as the minima of a neighbouring site.

    Returns
    -------
    Fit

    Raises
    ------
    ValueError
        If `starts` or `seed` is no whole number or too small, a point lacks an unknown, or no start has a finite
        likelihood.
    """
    starts, seed = whole_number("starts", starts, 1), checked_seed(seed)
    posterior = inversion.posterior
    physical = np.array([n not in inversion.noise_names for n in inversion.names])
    centre = np.zeros(len(inversion.names))
    drawn = candidates(inversion, physical, seed)
    near = [given_point(inversion, point) for point in points]
    roughs: list[Minimum] = []
    for fraction, count in zip(_COARSE, (-(-starts // 2), starts // 2), strict=True):
        coarse = coarse_noise(inversion, centre, fraction)
        parts = parts_of(inversion, physical, drawn, count)
        for start in [*near, *best(posterior, joined(coarse, physical, drawn), count, parts)]:
            projected = Projected(posterior, physical, coarse)
            rough = minimise(
                projected,
                start[physical],
                derivative=projected.derivative,
                tolerance=_ROUGH,
                max_evaluations=60,
            )
            if all(_apart(rough, other) > _DISTINCT for other in roughs):
                roughs.append(rough)
        near = []
    found = [joined(centre, physical, rough.x) for rough in roughs]
    found = sorted(found, key=lambda z: -float(posterior(z[None])[0]))[: max(4, starts // 2)]
    basins: list[Basin] = []
    for z in found:
        basin = refine(posterior, physical, z)
        if all(basin_distance(basin.z, b) > 1.0 for b in basins):
            basins.append(basin)
    return Fit(inversion, inversion.names, ranked(basins), seed)


def _apart(rough: Minimum, other: Minimum) -> float:
    """Mahalanobis distance per root unknown, in the covariance of the first."""
    delta = rough.x - other.x
    covariance = np.where(np.isfinite(rough.covariance), rough.covariance, 1.0)
    return float(np.sqrt(delta @ np.linalg.pinv(covariance) @ delta / delta.size))


def refine(posterior: Posterior, physical: NDArray[np.bool_], z: Array, rounds: int = 3) -> Basin:
    """Alternate between the physical unknowns (least squares) and the noise (marginal likelihood)."""
    minimum: Minimum | None = None
    for _ in range(rounds):
        z = _fit_noise(posterior, physical, z)
        projected = Projected(posterior, physical, z)
        minimum = minimise(
            projected,
            z[physical],
            derivative=projected.derivative,
            tolerance=_FINE,
            max_evaluations=100,
        )
        z = joined(z, physical, minimum.x)
    assert minimum is not None
    if any(member.model.has_outliers for member in posterior.members):
        minimum = _with_own_curvature(posterior, physical, z, minimum)
    covariance = _laplace(posterior, physical, z, minimum)
    return make_basin(posterior, z, covariance, minimum)


def _with_own_curvature(
    posterior: Posterior, physical: NDArray[np.bool_], z: Array, minimum: Minimum
) -> Minimum:
    """Take the covariance from the noise's curvature: residuals that add up to its density curve too much."""
    j = jacobian(Projected(posterior.as_gaussian(z), physical, z), z[physical], typical=1.0)
    covariance, condition, left_open = covariance_of(j)
    return replace(minimum, covariance=covariance, condition=condition, open_directions=left_open)


def _fit_noise(posterior: Posterior, physical: NDArray[np.bool_], z: Array) -> Array:
    """Maximise the posterior over the noise at fixed basis functions."""
    noise = ~physical
    if not noise.any():
        return z
    density = _NoiseDensity(posterior, physical, z)
    scale = np.where(np.abs(z[noise]) > 4, 0.0, z[noise])
    simplex = np.vstack([scale, scale + np.eye(noise.sum())])
    limits: Any = {"xatol": 1e-3, "fatol": 1e-4, "maxfev": 400, "initial_simplex": simplex}

    def cost(x: Any) -> float:
        return -float(density(np.asarray(x)[None])[0])

    found = optimize.minimize(cost, np.asarray(scale, dtype=float), method="Nelder-Mead", options=limits)
    out = z.copy()
    out[noise] = found.x
    return out


class _NoiseDensity:
    """Log posterior of the noise unknowns with the basis functions held."""

    def __init__(self, posterior: Posterior, physical: NDArray[np.bool_], z: Array) -> None:
        self.posterior, self.physical, self.z = posterior, physical, z
        named = posterior.parameters.named(posterior.parameters.to_values(z[None]))
        self.functions = [m.model.functions(m.local(named)) for m in posterior.members]

    def __call__(self, x: Array) -> Array:
        z = np.repeat(self.z[None], len(x), axis=0)
        z[:, ~self.physical] = x
        named = self.posterior.parameters.named(self.posterior.parameters.to_values(z))
        total = -0.5 * (x * x).sum(axis=1)
        for member, functions in zip(self.posterior.members, self.functions, strict=True):
            repeated = {name: np.repeat(f, len(x), axis=0) for name, f in functions.items()}
            with np.errstate(all="ignore"):
                found = member.model.marginal(repeated, member.local(named))
            total = total + found.log_likelihood
        return np.where(np.isfinite(total), total, -1e300)


def _laplace(posterior: Posterior, physical: NDArray[np.bool_], z: Array, minimum: Minimum) -> Array:
    """Join the least-squares covariance with the curvature of the noise's posterior."""
    covariance = np.eye(z.size)
    covariance[np.ix_(physical, physical)] = np.where(
        np.isfinite(minimum.covariance), minimum.covariance, 1.0
    )
    noise = ~physical
    if noise.any():
        curvature = -_hessian(_NoiseDensity(posterior, physical, z), z[noise])
        size, vectors = np.linalg.eigh(curvature)
        covariance[np.ix_(noise, noise)] = (vectors / np.maximum(size, 0.3)) @ vectors.T
    return covariance


def _hessian(density: _NoiseDensity, x: Array, step: float = 0.05) -> Array:
    """Second derivatives by central differences, all points in one batch."""
    size = x.size
    pairs = [(i, j) for i in range(size) for j in range(i, size)]
    signs = ((1, 1), (1, -1), (-1, 1), (-1, -1))
    points = [x + step * (s * np.eye(size)[i] + t * np.eye(size)[j]) for i, j in pairs for s, t in signs]
    value = density(np.array(points)).reshape(len(pairs), 4)
    out = np.empty((size, size))
    for (i, j), v in zip(pairs, value, strict=True):
        out[i, j] = out[j, i] = (v[0] - v[1] - v[2] + v[3]) / (4 * step**2)
    return out


def make_basin(posterior: Density, z: Array, covariance: Array, minimum: Minimum) -> Basin:
    """Describe a minimum at standard normal variables z, shape (unknowns,), in public units too."""
    step = 1e-5
    up, down = (posterior.parameters.to_values(z[None] + d) for d in (step, -step))
    slope = ((up - down) / (2 * step))[0]
    in_values = covariance * np.outer(slope, slope)
    return Basin(
        z=z,
        covariance_z=covariance,
        values=posterior.parameters.to_values(z[None])[0],
        sd=np.sqrt(in_values.diagonal()),
        covariance=in_values,
        log_posterior=float(posterior(z[None])[0]),
        weight=1.0,
        minimum=minimum,
    )


def basin_distance(z: Array, basin: Basin) -> float:
    """Mahalanobis distance per root unknown from a basin's centre."""
    delta = z - basin.z
    return float(np.sqrt(delta @ np.linalg.pinv(basin.covariance_z) @ delta / delta.size))


def ranked(basins: Sequence[Basin]) -> tuple[Basin, ...]:
    """Sort minima by the probability that each holds in the normal approximation, and state their shares."""
    log_mass = np.array([b.log_posterior + 0.5 * np.linalg.slogdet(b.covariance_z)[1] for b in basins])
    weight = np.exp(log_mass - log_mass.max())
    weight /= weight.sum()
    return tuple(replace(basins[i], weight=float(weight[i])) for i in np.argsort(-weight))
