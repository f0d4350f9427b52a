"""Draws of one site's posterior, and of what follows from them."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.unknowns import describe_prior
from inverse.inference.mcmc.draws import PosteriorSample, weighted_sample
from inverse.inference.result import named_variables, prior_draws
from inverse.study.splits.data import prior_of_derived

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion
    from inverse.inference.minima.least_squares import Fit
    from inverse.study.batches.site import Effort

__all__ = ["SiteDraws", "site_draws"]

Array = NDArray[np.float64]

_ATTRIBUTES = ("units", "long_name", "symbol", "role")


@dataclass(frozen=True)
class SiteDraws:
    """Draws of a site.

    Attributes
    ----------
    variables : dict
        Quantity -> units, long_name, symbol, role, prior (as JSON).
    values : array, shape (quantities, draws)
    method : str
        How they came about.
    converged : bool
    message : str
        Of the sampler.
    """

    variables: dict[str, dict[str, str]]
    values: Array
    method: str
    converged: bool
    message: str

    def of(self, names: tuple[str, ...]) -> Array:
        """Return draws of some quantities, shape (draws, names)."""
        return self.values[[list(self.variables).index(name) for name in names]].T


def site_draws(
    inversion: Inversion, fit: Fit, effort: Effort, seed: int, check: Callable[[], None]
) -> SiteDraws:
    """Sample the posterior of a site.

    Parameters
    ----------
    inversion : Inversion
    fit : Fit
        Its minima.
    effort : Effort
    seed : int
    check : callable
        Called now and then; may raise to end the work.
    """
    if effort.method == "importance":
        found = weighted_sample(inversion, fit, seed=seed, ess=effort.ess, check=check)
        if found is not None:
            return _named(inversion, found, seed)
    return _walked(inversion, fit, effort, seed, check)


def _named(inversion: Inversion, found: PosteriorSample, seed: int) -> SiteDraws:
    rng = np.random.default_rng(np.random.SeedSequence(seed).spawn(1)[0])
    prior = named_variables(inversion, prior_draws(inversion.posterior.parameters, rng, None), ("draw",))
    made = named_variables(inversion, found.values, ("draw",))
    variables = {name: _described(attrs, prior[name][1]) for name, (_, _, attrs) in made.items()}
    values = np.stack([array for _, array, _ in made.values()])
    return SiteDraws(variables, values, found.method, found.converged, found.message)


def _walked(
    inversion: Inversion, fit: Fit, effort: Effort, seed: int, check: Callable[[], None]
) -> SiteDraws:
    tree: Any = inversion.sample_posterior(
        seed=seed,
        fit=fit,
        ess=effort.ess,
        ensembles=effort.ensembles,
        max_steps=effort.max_steps,
        checks=False,
        progress=lambda news: check(),
    )
    posterior, prior = tree["posterior"], tree["prior"]
    convergence = json.loads(tree.attrs["inverse"])["convergence"]
    variables = {
        str(name): _described(posterior[name].attrs, prior[name].values.ravel())
        for name in posterior.data_vars
    }
    values = np.stack([posterior[name].values.ravel() for name in variables])
    return SiteDraws(variables, values, "mcmc", bool(convergence["converged"]), str(convergence["message"]))


def _described(attrs: Mapping[str, Any], prior: Array) -> dict[str, str]:
    """Keep what the results say of a quantity; the prior of a derived one is approximated from draws."""
    known = attrs.get("prior", "") or _approximate(prior)
    return {**{field: str(attrs.get(field, "")) for field in _ATTRIBUTES}, "prior": known}


def _approximate(draws: Array) -> str:
    prior = prior_of_derived(draws)
    return "" if prior is None else json.dumps(describe_prior(prior))
