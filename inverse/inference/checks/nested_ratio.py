"""Bayes factor of a value against a prior around it (Savage-Dickey), and how much of it is the prior's doing.

For a model that is nested at ``x = x0`` with priors of the other unknowns unchanged,

``B = p(y | x = x0) / p(y) = p(x0 | y) / p(x0)``  (Dickey 1971, from memory),

the marginal likelihood of x at x0 over its mean under the prior. At the edge of a prior a kernel estimate would be half
of what it should be; here ``p(x | y) / p(x) = exp(polynomial)`` is fitted to counts in bins, the prior's mass in each
bin as offset: exact for a likelihood that is normal in x, edge or not.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.unknowns import rebuild_prior
from inverse.inference.checks.posterior_draws import sampled_values
from inverse.inference.mcmc.convergence import bulk_ess

__all__ = ["SavageDickey", "savage_dickey"]

Array = NDArray[np.float64]

_ORDER = 3
_BINS = 60
_WINDOW = 0.9
_LEAST_NEAR = 10.0
_LIMIT = 0.95
_FACTORS = np.geomspace(0.1, 10, 9)


@dataclass(frozen=True, repr=False)
class SavageDickey:
    """Bayes factor for a value of an unknown against the unknown's prior.

    Attributes
    ----------
    name, unit : str
    at : float
        The value.
    ratio : float
        Probability of the data with the value over that with the prior; above 1 the value is favoured.
    error : float
        Standard error of ``ln ratio``; NaN for a bound.
    is_bound : bool
        True where too few draws are near the value for an estimate: then `ratio` is an upper limit (95 %), valid if
        the likelihood falls from the draws towards the value.
    scales : array, shape (scales,)
        Scale parameter of the prior, from a tenth to ten times that used.
    ratios, errors : array, shape (scales,)
        The same with each of these priors, by reweighting the draws.
    """

    name: str
    unit: str
    at: float
    ratio: float
    error: float
    is_bound: bool
    scales: Array
    ratios: Array
    errors: Array

    def __str__(self) -> str:
        """Say the finding in words."""
        value = f"{self.name} = {self.at:g} {self.unit}".rstrip()
        low, high = self.ratios[0], self.ratios[-1]
        sign = "< " if self.is_bound else ""
        span = (
            f"{sign}{low:.2g} to {sign}{high:.2g} as the prior's scale goes from {self.scales[0]:.2g} to "
            f"{self.scales[-1]:.2g} (it was {self.scales[len(self.scales) // 2]:.2g})"
        )
        if self.is_bound:
            return f"{value} against its prior: odds under {self.ratio:.2g} (no draws near it); {span}."
        return f"{value} against its prior: odds {self.ratio:.3g} (± {100 * self.error:.0f} %); {span}."

    __repr__ = __str__


def savage_dickey(result: Any, name: str, *, at: float = 0.0) -> SavageDickey:
    """Compare a value of one unknown, such as a perfect bond, with its prior around it.

    Parameters
    ----------
    result : xarray.DataTree
        From `sample_posterior` or `load`.
    name : str
        The unknown, such as ``Al|Si.compliance``.
    at : float
        The value, in the unknown's unit; inside its prior or at its edge.

    Returns
    -------
    SavageDickey
        Prints as a sentence with the dependence on the prior's scale.

    Raises
    ------
    ValueError
        If there are no draws of such an unknown, or the prior's density at the value is zero or infinite.
    """
    prior, unit = _prior(result, name)
    if not isinstance(at, int | float | np.number):
        raise ValueError(f"at = {at!r}; give a number, in the unit of {name}.")
    density = float(prior.pdf(at))
    if not (np.isfinite(density) and density > 0):
        raise ValueError(
            f"The prior of {name} has density {density:g} at {at:g}; the ratio needs a finite one there, such as that "
            "of stats.halfcauchy or stats.halfnorm at 0."
        )
    chains = sampled_values(result, (name,))[..., 0]
    effective = min(float(bulk_ess(chains)), float(chains.size))
    shares = chains.size / effective
    if _effective_near(chains, at) / shares < _LEAST_NEAR:
        log_ratio, error, is_bound = np.log(_bound(chains.ravel(), prior, at, effective)), np.nan, True
    else:
        log_ratio, error = _estimate(chains, prior, at, shares)
        is_bound = False
    scales, shift, spread = _reweighted(chains, prior, effective)
    return SavageDickey(
        name,
        unit,
        at,
        float(np.exp(log_ratio)),
        float(error),
        is_bound,
        scales,
        np.exp(log_ratio - shift),
        np.hypot(error, spread),
    )


def _prior(result: Any, name: str) -> tuple[Any, str]:
    if "posterior" not in getattr(result, "children", ()):
        raise ValueError(f"savage_dickey takes the result of sample_posterior, not {type(result).__name__}.")
    posterior = result["posterior"].to_dataset()
    known = [str(n) for n in posterior.data_vars if posterior[n].attrs.get("prior")]
    if name not in known:
        raise ValueError(f"There is no unknown '{name}'; there are {', '.join(known)}.")
    attrs = posterior[name].attrs
    return rebuild_prior(json.loads(attrs["prior"])), "" if attrs["units"] == "1" else str(attrs["units"])


def _effective_near(chains: Array, at: float) -> float:
    """Draws within half a deviation of the value."""
    low, high = np.quantile(chains, [0.16, 0.84])
    return float((np.abs(chains - at) < (high - low) / 4).sum())


def _estimate(chains: Array, prior: Any, at: float, shares: float) -> tuple[float, float]:
    """Return ln B and its standard error: the larger of the regression's and that between ensembles."""
    edges = _edges(chains, prior, at)
    value, variance = _fit(chains.ravel(), prior, at, edges)
    apart = [_fit(chain, prior, at, edges)[0] for chain in chains]
    between = np.std(apart, ddof=1) / np.sqrt(len(apart)) if len(apart) > 1 else 0.0
    return value, max(float(np.sqrt(variance * shares)), float(between))


def _edges(chains: Array, prior: Any, at: float) -> Array:
    """Bins that cover most draws and the value."""
    low, high = np.quantile(chains, [(1 - _WINDOW) / 2, (1 + _WINDOW) / 2])
    bottom = float(prior.support()[0])
    # An edge of the prior near the draws is where the density must be known.
    low = bottom if np.isfinite(bottom) and low - bottom < high - low else low
    low, high = min(low, at), max(high, at)
    return np.linspace(low, high, _BINS + 1)


def _fit(draws: Array, prior: Any, at: float, edges: Array) -> tuple[float, float]:
    """Fit ``count = n x prior mass x exp(polynomial)`` by maximum likelihood; return its value at `at` and variance."""
    counts = np.histogram(draws, edges)[0].astype(float)
    expected = draws.size * np.diff(prior.cdf(edges))
    used = expected > 0
    t = ((edges[1:] + edges[:-1]) / 2 - at) / (edges[-1] - edges[0])
    design = np.vander(t[used], _ORDER + 1, increasing=True)
    counts, offset = counts[used], np.log(expected[used])
    beta = np.linalg.lstsq(design, np.log(np.maximum(counts, 0.5)) - offset, rcond=None)[0]
    for _ in range(50):
        mean = np.exp(np.clip(offset + design @ beta, -50, 50))
        information = (design.T * mean) @ design + 1e-12 * np.eye(_ORDER + 1)
        step = np.linalg.solve(information, design.T @ (counts - mean))
        beta = beta + step * min(1.0, 2.0 / max(float(np.abs(design @ step).max()), 1e-300))
        if float(np.abs(step).max()) < 1e-8:
            break
    return float(beta[0]), float(np.linalg.inv(information)[0, 0])


def _bound(draws: Array, prior: Any, at: float, effective: float) -> float:
    """Return an upper limit of B: posterior over prior mass between the value and the nearest draws.

    If the likelihood does not rise towards the value, it is there at most what it is on average between the two.
    """
    from scipy import stats

    above = np.median(draws) > at
    ends = np.quantile(draws, [0.0, 0.001, 0.003, 0.01, 0.03] if above else [1.0, 0.999, 0.997, 0.99, 0.97])
    limits = []
    for end in ends:
        between = ((draws > at) & (draws <= end)) if above else ((draws < at) & (draws >= end))
        count = between.mean() * effective
        posterior = stats.beta.ppf(_LIMIT, count + 1, max(effective - count, 1e-9))
        mass = abs(float(prior.cdf(end) - prior.cdf(at)))
        limits.append(posterior / mass if mass > 0 else np.inf)
    return float(min(limits))


def _reweighted(chains: Array, prior: Any, effective: float) -> tuple[Array, Array, Array]:
    """Return scales, and for each ln of the mean of new over old prior density over the draws, and its error."""
    shapes, loc, scale = prior.dist._parse_args(*prior.args, **prior.kwds)
    old = prior.pdf(chains)
    mean, error = [], []
    for factor in _FACTORS:
        weight = prior.dist(*shapes, loc=loc, scale=factor * scale).pdf(chains) / old
        if not weight.any():
            # A narrower prior with an edge, beyond which all draws lie: with it the data are next to impossible.
            mean.append(-np.inf)
            error.append(np.nan)
            continue
        mean.append(np.log(weight.mean()))
        error.append(weight.std() / weight.mean() / np.sqrt(effective))
    return scale * _FACTORS, np.array(mean), np.array(error)
