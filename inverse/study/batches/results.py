"""The results of a batch as one Dataset: draws, quantiles, status and labels by site."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.unknowns import describe_prior, is_distribution
from inverse.study.batches.site import PROBABILITIES
from inverse.study.batches.store import SiteRecord

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["results_dataset"]

Array = NDArray[np.float64]


def results_dataset(
    sites: Sequence[str],
    rows: Mapping[str, Mapping[str, Any]],
    records: Mapping[str, SiteRecord],
    draws: int,
    identity: Mapping[str, Any],
) -> xr.Dataset:
    """Put finished sites into a Dataset, in the order of `sites`.

    Parameters
    ----------
    sites : sequence of str
    rows : mapping
        Site -> column -> entry.
    records : mapping
        Site -> record.
    draws : int
        Draws a site.
    identity : mapping
        Becomes the JSON attribute ``inverse``.
    """
    import xarray as xr

    found = [records[s] for s in sites]
    attributes = _attributes(found)
    names = list(attributes)
    data: dict[str, Any] = {
        name: (("site", "draw"), _gathered(found, name, draws), _kept(attributes[name])) for name in names
    }
    quantiles = np.full((len(sites), len(names), len(PROBABILITIES)), np.nan)
    priors = np.full((len(sites), len(names)), "", dtype=object)
    for i, record in enumerate(found):
        for k, (name, described) in enumerate(record.variables.items()):
            quantiles[i, names.index(name)] = record.quantiles[k]
            priors[i, names.index(name)] = described["prior"]
    data["quantile"] = (("site", "quantity", "probability"), quantiles)
    data["prior"] = (
        ("site", "quantity"),
        priors,
        {"long_name": "prior, as JSON; of a derived quantity approximate"},
    )
    for field in ("status", "reason", "method", "warning"):
        data[field] = ("site", np.array([getattr(r, field) for r in found], dtype=object))
    data["minima"] = ("site", np.array([r.numbers.get("minima", np.nan) for r in found]))
    coords: dict[str, Any] = {
        "site": np.array(sites, dtype=object),
        "quantity": np.array(names, dtype=object),
    }
    coords |= {"probability": list(PROBABILITIES), **_labels(sites, rows)}
    return xr.Dataset(data, coords=coords, attrs={"inverse": json.dumps(identity, sort_keys=True)})


def _attributes(found: Sequence[SiteRecord]) -> dict[str, dict[str, str]]:
    out: dict[str, dict[str, str]] = {}
    for record in found:
        for name, described in record.variables.items():
            out.setdefault(name, described)
    return out


def _kept(described: Mapping[str, str]) -> dict[str, str]:
    return {key: value for key, value in described.items() if key != "prior"}


def _gathered(found: Sequence[SiteRecord], name: str, draws: int) -> Array:
    out = np.full((len(found), draws), np.nan)
    for i, record in enumerate(found):
        if name in record.variables:
            out[i] = record.draws[list(record.variables).index(name)]
    return out


def _labels(sites: Sequence[str], rows: Mapping[str, Mapping[str, Any]]) -> dict[str, Any]:
    columns = dict.fromkeys(c for s in sites for c in rows.get(s, {}))
    out = {}
    for column in columns:
        entries = [rows.get(s, {}).get(column) for s in sites]
        numbers = all(isinstance(e, int | float | np.number) and not isinstance(e, bool) for e in entries)
        made = (
            np.array(entries, dtype=float) if numbers else np.array([_text(e) for e in entries], dtype=object)
        )
        out[column] = ("site", made)
    return out


def _text(entry: Any) -> str:
    if is_distribution(entry):
        return json.dumps(describe_prior(entry))
    return "" if entry is None else str(entry)
