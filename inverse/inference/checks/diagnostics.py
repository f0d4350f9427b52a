"""What the data added to the priors: how far each unknown was narrowed, and what the data cannot separate."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from inverse.description.quantities import quantity
from inverse.description.wording import percent
from inverse.inference.checks.combinations import Combination, combinations_of
from inverse.inference.checks.identifiability import Local, local_covariances, ridges
from inverse.inference.checks.interlayer import Interlayer, interlayers
from inverse.inference.checks.posterior_draws import PosteriorDraws, posterior_draws
from inverse.inference.checks.prior_view import touches, view_of_distribution
from inverse.inference.mcmc.convergence import bulk_ess
from inverse.inference.minima.least_squares import Fit

__all__ = ["DataAdded", "Learned", "information_bits", "normal_bits", "what_data_added"]

Array = NDArray[np.float64]

_LOCAL_DRAWS = 24
_STRONG = 0.5
_PRIOR_ONLY = 0.8


@dataclass(frozen=True)
class Learned:
    """What the data added to one unknown.

    Attributes
    ----------
    name, unit, role : str
        ``role`` is ``unknown`` or ``noise``.
    prior, posterior : tuple of (float, float)
        Central 68 % intervals.
    narrowed : float
        Width of the first over that of the second.
    bits : float
        Kullback-Leibler information of the posterior over the prior, from the draws; for least squares the
        normal formula.
    normal_bits : float
        The same if the posterior were normal in the standard normal variable z of the prior,
        ``(s^2 + m^2 - 1 - ln s^2) / (2 ln 2)``; where it differs from `bits` the posterior is not.
    data_share : float
        Share of the posterior variance that the noise of the data causes; the rest comes from priors. NaN for noise.
    prior_shares : tuple of (str, float)
        Priors that cause 5 % of the variance or more, the largest first.
    correlations : tuple of (str, float)
        Correlations in z of 0.5 or more in size, the strongest first.
    flags : tuple of str
        ``upper limit``, ``lower limit``, ``prior edge``, ``prior only``.
    """

    name: str
    unit: str
    role: str
    prior: tuple[float, float]
    posterior: tuple[float, float]
    narrowed: float
    bits: float
    normal_bits: float
    data_share: float
    prior_shares: tuple[tuple[str, float], ...]
    correlations: tuple[tuple[str, float], ...]
    flags: tuple[str, ...]


@dataclass(frozen=True, repr=False)
class DataAdded:
    """What the data added to a problem.

    Attributes
    ----------
    unknowns : tuple of Learned
        In the order of the problem.
    combinations : tuple of Combination
        What is measured where the unknowns themselves are not; empty if nothing is inseparable.
    interlayers : tuple of Interlayer
        For each compliance, the layer that would act the same and whether the trace tells the two apart.
    names : tuple of str
        Unknowns other than noise.
    eigenvalues : array, shape (unknowns,)
        Of the posterior covariance in z, ascending: 0 is learned, 1 is left as the prior had it.
    directions : array, shape (unknowns, unknowns)
        Eigenvectors, in columns.
    """

    unknowns: tuple[Learned, ...]
    combinations: tuple[Combination, ...]
    interlayers: tuple[Interlayer, ...]
    names: tuple[str, ...]
    eigenvalues: Array
    directions: Array

    def __getitem__(self, name: str) -> Learned:
        """Return what is known of one unknown.

        Raises
        ------
        ValueError
            If there is no such unknown.
        """
        for learned in self.unknowns:
            if learned.name == name:
                return learned
        raise ValueError(
            f"There is no unknown '{name}'; there are {', '.join(u.name for u in self.unknowns)}."
        )

    @property
    def sentences(self) -> tuple[str, ...]:
        """What the data cannot tell, in words."""
        silent = [
            f"The data say nothing of {u.name} that its prior did not."
            for u in self.unknowns
            if u.role == "unknown"
            and "prior only" in u.flags
            and not any(u.name in c.names for c in self.combinations)
        ]
        apart = [c.sentence for c in self.combinations]
        return (*apart, *(i.sentence for i in self.interlayers if i.verdict != "bond"), *silent)

    def __str__(self) -> str:
        """Write the table and the sentences."""
        head = (
            f"{'unknown':30s} {'narrowed':>9s} {'bits':>6s} {'data':>6s}  variance from priors; correlations"
        )
        said = self.sentences or ("The data separate all unknowns.",)
        return "\n".join([head, *(_line(u) for u in self.unknowns), "", *said])

    __repr__ = __str__


def what_data_added(result: Any, *, interlayer: str = "SiO2", seed: int = 0) -> DataAdded:
    """Say what the data added to the priors and what they cannot separate.

    Parameters
    ----------
    result : xarray.DataTree or Fit
        From `sample_posterior`, `load` or `Inversion.least_squares`.
    interlayer : str
        Reference material of the thin layer that each compliance is compared with.
    seed : int
        For the draws from the normal approximation of a `Fit`.

    Returns
    -------
    DataAdded
        Prints as a table and sentences.

    Raises
    ------
    ValueError
        If `result` is neither kind, or the material is not in the reference tables.

    Notes
    -----
    Shares of variance and inseparable combinations come from the curvature of the likelihood at draws of the
    posterior (`inverse.inference.checks.identifiability`). Noise unknowns are averaged over and stand in no
    combination.
    """
    draws = posterior_draws(result, seed=seed)
    inversion = draws.inversion
    points = draws.thinned(math.ceil(_LOCAL_DRAWS / len(draws.values))).flat
    local = local_covariances(inversion, inversion.posterior.parameters.to_z(points))
    z = draws.z
    covariance, centre = (np.cov(z.T, ddof=1), z.mean(axis=0))
    if isinstance(result, Fit) and len(result.minima) == 1:
        covariance, centre = result.best.covariance_z, result.best.z
    physical = [inversion.names.index(name) for name in local.names]
    size, vectors = np.linalg.eigh(covariance[np.ix_(physical, physical)])
    every = draws.flat[:, physical] if draws.sampled else None
    found = [c for r in ridges(local.covariance) for c in combinations_of(r, local, every, inversion.units)]
    return DataAdded(
        _learned(draws, z, covariance, centre, local),
        tuple(found),
        interlayers(draws, interlayer),
        local.names,
        size,
        vectors,
    )


def normal_bits(mean: float, variance: float) -> float:
    """Return the information of N(mean, variance) over N(0, 1) in bits."""
    return (variance + mean**2 - 1 - math.log(variance)) / (2 * math.log(2))


def information_bits(z: Array, effective: float) -> float:
    """Estimate the information of draws over N(0, 1) in bits.

    Parameters
    ----------
    z : array, shape (draws,)
    effective : float
        Effective number of draws; sets the number of bins.

    Notes
    -----
    Bins of equal posterior probability p: ``sum p log2(p / prior probability of the bin)``, less the bias
    (bins - 1) / (2 x effective x ln 2) of a histogram's information.
    """
    bins = int(np.clip(effective / 20, 8, 64))
    edges = np.quantile(z, np.linspace(0, 1, bins + 1))
    low, high = edges[:-1], edges[1:]
    # The tail that is small keeps its digits.
    mass = np.where(low > 0, ndtr(-low) - ndtr(-high), ndtr(high) - ndtr(low))
    bias = (bins - 1) / (2 * effective * math.log(2))
    return float(-np.log2(bins * np.maximum(mass, 1e-300)).mean()) - bias


def _learned(
    draws: PosteriorDraws, z: Array, covariance: Array, centre: Array, local: Local
) -> tuple[Learned, ...]:
    deviation = np.sqrt(covariance.diagonal())
    correlation = covariance / np.outer(deviation, deviation)
    return tuple(
        _one(draws, i, z[:, i], covariance[i, i], centre[i], correlation[i], local) for i in range(z.shape[1])
    )


def _one(
    draws: PosteriorDraws, i: int, z: Array, variance: float, mean: float, correlation: Array, local: Local
) -> Learned:
    inversion = draws.inversion
    name = inversion.names[i]
    prior = tuple(float(v) for v in inversion.priors[name].ppf([0.16, 0.84]))
    low, high = np.quantile(draws.flat[:, i], [0.16, 0.84])
    narrowed = (prior[1] - prior[0]) / (high - low)
    shares = _shares(name, local)
    normal = normal_bits(mean, variance)
    bits = information_bits(z, _effective(draws.values[..., i])) if draws.sampled else normal
    own = dict(shares).get(name, 0.0)
    only = variance > _PRIOR_ONLY and (own > _PRIOR_ONLY or not shares)
    return Learned(
        name=name,
        unit=inversion.units[name],
        role="noise" if name in inversion.noise_names else "unknown",
        prior=(prior[0], prior[1]),
        posterior=(float(low), float(high)),
        narrowed=float(narrowed),
        bits=max(bits, 0.0),
        normal_bits=normal,
        data_share=1 - sum(s for _, s in _all_shares(name, local)) if name in local.names else math.nan,
        prior_shares=tuple(s for s in shares if s[1] >= 0.05),
        correlations=_strongest(inversion.names, i, correlation),
        flags=(*_bounds(draws, i), *(["prior only"] if only else [])),
    )


def _all_shares(name: str, local: Local) -> list[tuple[str, float]]:
    if name not in local.names:
        return []
    row = local.prior_shares[local.names.index(name)]
    return list(zip(local.names, map(float, row), strict=True))


def _shares(name: str, local: Local) -> list[tuple[str, float]]:
    return sorted(_all_shares(name, local), key=lambda s: -s[1])


def _strongest(names: tuple[str, ...], i: int, correlation: Array) -> tuple[tuple[str, float], ...]:
    order = [int(j) for j in np.argsort(-np.abs(correlation)) if j != i and abs(correlation[j]) >= _STRONG]
    return tuple((names[j], float(correlation[j])) for j in order)


def _bounds(draws: PosteriorDraws, i: int) -> list[str]:
    """Flag the bounds on which an unknown leans."""
    name = draws.inversion.names[i]
    known = quantity(draws.inversion.fields[name])
    view = view_of_distribution(draws.inversion.priors[name], (known.low, known.high))
    column = draws.flat[:, i]
    low, high = touches(column, view.low, "<"), touches(column, view.high, ">")
    edge = (low and view.low != known.low) or (high and view.high != known.high)
    side = ["upper limit"] * (low and not high) + ["lower limit"] * (high and not low)
    return side + ["prior edge"] * edge


def _effective(chains: Array) -> float:
    found = bulk_ess(chains) if chains.shape[1] >= 8 else math.nan
    return found if math.isfinite(found) else float(chains.size)


def _line(u: Learned) -> str:
    data = "" if math.isnan(u.data_share) else percent(u.data_share)
    shares = ", ".join(f"{n} {percent(s)}" for n, s in u.prior_shares)
    links = ", ".join(f"{n} {r:+.2f}" for n, r in u.correlations[:3])
    notes = "; ".join(filter(None, [shares, links, *u.flags]))
    return f"{u.name:30s} {u.narrowed:9.3g} {u.bits:6.2f} {data:>6s}  {notes}".rstrip()
