"""From results of any form to the draws of one quantity, site by site, with the prior of each."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity as quantity_of
from inverse.description.unknowns import is_distribution, rebuild_prior
from inverse.study.batches.site_table import labels_of, site_rows, some
from inverse.study.splits.site_likelihood import site_likelihood
from inverse.study.stiffness.tabulated import Tabulated

__all__ = ["Site", "SiteData", "collect", "open_side", "prior_of_derived"]

Array = NDArray[np.float64]

_MOST_DRAWS = 4000
PLATEAU = -4.0
"""A likelihood that falls by less than this towards one side sets no bound there."""


@dataclass(frozen=True)
class Site:
    """One site of a comparison.

    Attributes
    ----------
    name, split, wafer : str
    tool : str
        Empty where no tool is named.
    draws : array
        Of the quantity compared, as sampled under the site's own prior.
    table : Tabulated
        Likelihood of the variable compared.
    """

    name: str
    split: str
    wafer: str
    tool: str
    draws: Array
    table: Tabulated

    @property
    def open_side(self) -> str:
        """``"<"`` (``">"``) where the site only bounds the quantity from above (below), else empty."""
        return open_side(self.table)


def open_side(table: Tabulated) -> str:
    """Return ``"<"`` (``">"``) where a likelihood sets no bound towards the left (right), ``"<>"`` for both."""
    return "<" * (table.left > PLATEAU) + ">" * (table.right > PLATEAU)


@dataclass(frozen=True)
class SiteData:
    """All sites of a comparison.

    Attributes
    ----------
    sites : tuple of Site
    unit : str
    logarithmic : bool
        The variable compared is the quantity's natural logarithm.
    left_out : tuple of str
        Why sites are missing, one text each.
    doubts : tuple of str
        What is to be said against sites that count all the same.
    flat : tuple of str
        Sites whose prior is not known and was taken as flat in the variable compared.
    """

    sites: tuple[Site, ...]
    unit: str
    logarithmic: bool
    left_out: tuple[str, ...]
    doubts: tuple[str, ...]
    flat: tuple[str, ...]


def collect(
    results: Any, quantity: str, labels: Any, scale: str | None, prior: Any, columns: tuple[str, ...]
) -> SiteData:
    """Gather the draws of a quantity and their labels.

    Parameters
    ----------
    results : xarray.Dataset or mapping
        Of `batch`, or site -> DataTree of `sample_posterior`, or site -> array of draws.
    quantity : str
        Name of an unknown or derived quantity.
    labels : table or None
        See `site_rows`; None takes the coordinates of a batch.
    scale : {"log", "linear"} or None
        None takes the logarithm of what cannot be negative.
    prior : frozen distribution, mapping from site to such, or None
        Of draws given as arrays.
    columns : tuple of str
        Labels that every site needs.

    Raises
    ------
    ValueError
        If a site has no label, no draws of the quantity, or draws that will not do.
    """
    raw = _from_batch(results, quantity) if _is_batch(results) else _from_mapping(results, quantity, prior)
    kept = {name: draws for name, draws in raw.items() if isinstance(draws, _Draws)}
    left_out = tuple(text for text in raw.values() if isinstance(text, str))
    if not kept:
        raise ValueError(
            f"no site has draws of '{quantity}': {'; '.join(left_out[:3]) or 'there is no site'}."
        )
    rows = _batch_rows(results) if labels is None else site_rows(labels)
    named = labels_of(kept, rows, columns)
    known = quantity_of(quantity)
    logarithmic = _scale(scale, known.low)
    sites = tuple(
        Site(
            name,
            named[name].get("split", ""),
            named[name].get("wafer", ""),
            str(rows[name].get("tool", "")),
            draws.shown,
            _table(name, draws, logarithmic),
        )
        for name, draws in kept.items()
    )
    flat = tuple(name for name, draws in kept.items() if draws.prior is None)
    return SiteData(sites, known.unit, logarithmic, left_out, _doubts(results, tuple(kept)), flat)


@dataclass(frozen=True)
class _Draws:
    """Draws as they were sampled; `turned` where the quantity asked for is their inverse."""

    values: Array
    prior: Any
    turned: bool = False

    @property
    def shown(self) -> Array:
        return 1 / self.values if self.turned else self.values


Raw = dict[str, _Draws | str]
"""Draws by site, or why there are none."""


def _scale(scale: str | None, low: float) -> bool:
    if scale not in (None, "log", "linear"):
        raise ValueError(f"scale={scale!r}; give 'log', 'linear', or None for the quantity's own.")
    return low >= 0 if scale is None else scale == "log"


def _turned(quantity: str) -> bool:
    return quantity.endswith(".stiffness")


def _sampled(quantity: str) -> str:
    """Name what is drawn: for a stiffness the compliance, which has a prior and is finite for a perfect bond."""
    return quantity.removesuffix("stiffness") + "compliance" if _turned(quantity) else quantity


def _table(name: str, draws: _Draws, logarithmic: bool) -> Tabulated:
    if draws.turned and not logarithmic:
        raise ValueError(
            "a stiffness is compared on the logarithmic scale: a bond without bound has no mean."
        )
    try:
        table = site_likelihood(draws.values, draws.prior, logarithmic=logarithmic)
    except ValueError as error:
        raise ValueError(f"site '{name}': {error}") from error
    return table.mirrored() if draws.turned else table


def _is_batch(results: Any) -> bool:
    return hasattr(results, "data_vars") and "site" in results.dims


def _from_batch(results: Any, quantity: str) -> Raw:
    name = _sampled(quantity)
    if name not in results.data_vars:
        here = [str(v) for v in results.data_vars if results[v].dims == ("site", "draw")]
        raise ValueError(f"the results hold no '{name}'; they hold {', '.join(here)}.")
    out: Raw = {}
    for i, site in enumerate(map(str, results["site"].values)):
        draws = np.asarray(results[name].values[i], dtype=float)
        text = str(results["prior"].sel(quantity=name).values[i]) if "prior" in results else ""
        if np.isnan(draws).all():
            out[site] = f"site '{site}' was left out: {results['reason'].values[i] or 'no draws'}"
        else:
            out[site] = _Draws(draws, rebuild_prior(json.loads(text)) if text else None, _turned(quantity))
    return out


_DOUBTS = {
    "not converged": "did not converge and count all the same; raise max_steps, or drop them",
    "nothing learnt": "taught nothing, as their draws follow the prior, and count as such",
}
_UNLIKE = (
    "have residuals unlike the noise, so that their intervals may be wrong; see 'warning' in the results"
)


def _doubts(results: Any, kept: tuple[str, ...]) -> tuple[str, ...]:
    """Say which sites of a batch are not as they should be."""
    if not _is_batch(results) or "status" not in results:
        return ()
    chosen = results.sel(site=list(kept))
    found = {text: chosen["status"].values == status for status, text in _DOUBTS.items()}
    if "warning" in chosen:
        found[_UNLIKE] = chosen["warning"].values != ""
    names = np.array(kept)
    return tuple(
        f"{mark.sum()} of {names.size} sites ({some(names[mark])}) {text}."
        for text, mark in found.items()
        if mark.any()
    )


def _batch_rows(results: Any) -> dict[str, dict[str, Any]]:
    if not _is_batch(results):
        raise ValueError("labels are missing; give a table with the columns site, split and wafer.")
    names = [str(n) for n, c in results.coords.items() if c.dims == ("site",) and n != "site"]
    sites = [str(s) for s in results["site"].values]
    return {s: {n: results[n].values[i] for n in names} for i, s in enumerate(sites)}


def _from_mapping(results: Any, quantity: str, prior: Any) -> Raw:
    if not isinstance(results, Mapping) or not results:
        raise ValueError(
            f"results is a {type(results).__name__}; give what batch returned, or a mapping from site to a posterior "
            "or to an array of draws."
        )
    out: Raw = {}
    for name, result in results.items():
        site = str(name)
        if "posterior" in getattr(result, "children", ()):
            out[site] = _from_tree(site, result, quantity)
        else:
            draws = np.asarray(result, dtype=float).ravel()
            own = prior.get(name) if isinstance(prior, Mapping) else prior
            if own is not None and not is_distribution(own):
                raise ValueError(
                    f"the prior of site '{site}' is {own!r}; give a frozen scipy.stats distribution."
                )
            out[site] = _Draws(draws, own)
    return out


def _from_tree(site: str, tree: Any, quantity: str) -> _Draws:
    name = _sampled(quantity)
    group = tree["posterior"]
    if name not in group.data_vars:
        here = ", ".join(str(v) for v in group.data_vars)
        raise ValueError(f"the posterior of site '{site}' holds no '{name}'; it holds {here}.")
    draws = group[name].values.ravel()
    draws = draws[:: max(1, draws.size // _MOST_DRAWS)]
    text = group[name].attrs.get("prior", "")
    if text:
        return _Draws(draws, rebuild_prior(json.loads(text)), _turned(quantity))
    has_prior = "prior" in tree.children and name in tree["prior"].data_vars
    prior = prior_of_derived(tree["prior"][name].values.ravel()) if has_prior else None
    return _Draws(draws, prior, _turned(quantity))


def prior_of_derived(draws: Array) -> Any:
    """Approximate the prior of a derived quantity from draws: lognormal where they are positive, else normal."""
    from scipy import stats

    known = draws[np.isfinite(draws)]
    if known.size < 2:
        return None
    if (known > 0).all():
        return stats.lognorm(float(np.std(np.log(known))), scale=float(np.exp(np.mean(np.log(known)))))
    return stats.norm(float(known.mean()), float(known.std()))
