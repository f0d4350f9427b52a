"""Compare process splits: wafers and sites inside splits, and whether the splits differ."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_seed, whole_number
from inverse.inference.derived import SILICA
from inverse.study.splits.comparison import (
    Comparison,
    Interval,
    Pair,
    Question,
    SplitEstimate,
    WaferEstimate,
    interval,
    turned_side,
)
from inverse.study.splits.data import Site, SiteData, collect, open_side
from inverse.study.splits.decisions import decided, pairs_of, tail_probability
from inverse.study.splits.equivalent_layer import equivalent_layer
from inverse.study.splits.hierarchy import HierarchyDraws, Wafer, sample_hierarchy
from inverse.study.splits.scatter import SplitPriors
from inverse.study.splits.wording import verdict, warnings_for

if TYPE_CHECKING:
    from inverse.study.splits.gauge import ReferenceStudy

__all__ = ["compare_splits"]

Array = NDArray[np.float64]


def compare_splits(
    results: Any,
    *,
    quantity: str,
    seed: int,
    labels: Any = None,
    margin: float = 0.0,
    better: str | None = None,
    level: float = 0.05,
    scale: str | None = None,
    priors: SplitPriors | None = None,
    prior: Any = None,
    reference: ReferenceStudy | None = None,
    interlayer: tuple[str, float, float] = SILICA,
    draws: int = 20000,
) -> Comparison:
    r"""Compare process splits by a hierarchical model of sites in wafers in splits.

    Parameters
    ----------
    results : xarray.Dataset or mapping
        What `batch` returned, or a mapping from site to a posterior (DataTree) or to an array of draws.
    quantity : str
        Unknown or derived quantity, such as ``"Al|Si.compliance"`` or ``"Al|Si.stiffness"``.
    seed : int
    labels : table, optional
        Columns ``site``, ``split``, ``wafer`` and, where several tools measured, ``tool``; see `site_rows`. A batch
        brings its own.
    margin : float
        Least difference that matters: relative on the logarithmic scale (0.1 is a ratio of 1.1), else in the unit.
    better : {"higher", "lower"}, optional
        By default lower for a compliance, higher for all else.
    level : float
        Familywise error of the pairs called different.
    scale : {"log", "linear"}, optional
        Variable compared; by default the logarithm of what cannot be negative.
    priors : SplitPriors, optional
        Of centres and scatters.
    prior : frozen distribution or mapping from site to such, optional
        Under which draws given as arrays were sampled; without it they count as the likelihood itself in the variable
        compared.
    reference : ReferenceStudy, optional
        Bias and tool-to-tool scatter to be carried; see `reference_wafer`.
    interlayer : (str, float, float)
        Name, density (g/cm3) and velocity (nm/ps) of an interlayer that could act as a difference of compliance does.
        Its thickness counts the layer's inertia where the results are of stacks and the layer is the default, fused
        silica; otherwise the least possible thickness is stated.
    draws : int

    Returns
    -------
    Comparison

    Raises
    ------
    ValueError
        If there are fewer than two splits, a label is missing, draws will not do, or an argument is out of range.

    Notes
    -----
    With x the (log) quantity, :math:`x_{ij} \sim N(w_i, \sigma_s^2)`, :math:`w_i \sim N(\mu_s, \tau_s^2)`; the splits'
    scatters vary about typical ones. Each site enters by its draws, its own prior and its Jacobian divided
    out, with whatever shape they have; a site that sets no bound keeps its plateau. The centre :math:`\exp \mu_s` is a
    median. Pairs are decided by a step-down rule, see `decisions.levels`.
    """
    _check(level, margin, better, draws)
    seed = checked_seed(seed)
    priors = SplitPriors() if priors is None else priors
    data = collect(results, quantity, labels, scale, prior, ("split", "wafer"))
    names = tuple(dict.fromkeys(site.split for site in data.sites))
    if len(names) < 2:
        raise ValueError(
            f"all sites belong to split '{names[0]}'; a comparison needs two or more splits in the labels "
            "(reference_wafer takes one sample measured repeatedly)."
        )
    sites = data.sites if reference is None else reference.corrected(data.sites, quantity)
    groups = [_wafers(sites, name) for name in names]
    posterior = sample_hierarchy(groups, priors, seed=np.random.SeedSequence(seed), draws=draws)
    if reference is not None:
        posterior = _with_tools(posterior, reference, sites, names, seed)
    way = better or ("lower" if quantity.endswith("compliance") else "higher")
    layer = equivalent_layer(results, quantity, interlayer)
    question = Question(quantity, margin, way, level, data.logarithmic, layer)
    made = _described(question, data, names, groups, posterior, priors)
    said = warnings_for(made, data, reference)
    return replace(made, verdict=verdict(made, reference), warnings=said)


def _check(level: float, margin: float, better: str | None, draws: int) -> None:
    if not 0 < level < 1:
        raise ValueError(f"level={level!r}; give a probability between 0 and 1, such as 0.05.")
    if not (np.isfinite(margin) and margin >= 0):
        raise ValueError(
            f"margin={margin!r}; give zero or a positive number (0.1 is 10 % on the logarithmic scale)."
        )
    if better not in (None, "higher", "lower"):
        raise ValueError(f"better={better!r}; give 'higher' or 'lower'.")
    whole_number("draws", draws, 1000)  # fewer cannot tell tail probabilities


def _wafers(sites: tuple[Site, ...], split: str) -> list[Wafer]:
    own = [site for site in sites if site.split == split]
    names = dict.fromkeys(site.wafer for site in own)
    return [Wafer(name, tuple(s.table for s in own if s.wafer == name)) for name in names]


def _with_tools(
    posterior: HierarchyDraws,
    reference: ReferenceStudy,
    sites: tuple[Site, ...],
    names: tuple[str, ...],
    seed: int,
) -> HierarchyDraws:
    """Move centres and wafers by what is left unknown of the tools that measured them, each tool once a draw."""
    tools = tuple(dict.fromkeys(site.tool for site in sites))
    rng = np.random.default_rng(np.random.SeedSequence([seed, 1]))
    offset = reference.offsets(tools, len(posterior.centre), rng)
    centre = posterior.centre.copy()
    wafers = []
    for s, name in enumerate(names):
        shares = _tool_shares(sites, name, tools)
        centre[:, s] -= offset @ shares.mean(axis=0)
        wafers.append(posterior.wafers[s] - offset[: len(posterior.wafers[s])] @ shares.T)
    return replace(posterior, centre=centre, wafers=tuple(wafers))


def _tool_shares(sites: tuple[Site, ...], split: str, tools: tuple[str, ...]) -> Array:
    """Share of each tool in the sites of each wafer of a split, shape (wafers, tools)."""
    own = [site for site in sites if site.split == split]
    names = list(dict.fromkeys(site.wafer for site in own))
    shares = np.zeros((len(names), len(tools)))
    for site in own:
        shares[names.index(site.wafer), tools.index(site.tool)] += 1
    return shares / shares.sum(axis=1, keepdims=True)


def _described(
    question: Question,
    data: SiteData,
    names: tuple[str, ...],
    groups: list[list[Wafer]],
    posterior: HierarchyDraws,
    priors: SplitPriors,
) -> Comparison:
    value = np.exp(posterior.centre) if question.logarithmic else posterior.centre
    return Comparison(
        question=question,
        unit=data.unit,
        splits=(splits := _split_estimates(names, groups, posterior, question.sign * value, value)),
        pairs=_pairs(splits, posterior, value, question),
        wafers=_wafer_estimates(names, groups, posterior, question.logarithmic),
        sites=data.sites,
        verdict=(),
        warnings=(),
        priors=priors,
        posterior=posterior,
    )


def _split_estimates(
    names: tuple[str, ...], groups: list[list[Wafer]], posterior: HierarchyDraws, merit: Array, value: Array
) -> tuple[SplitEstimate, ...]:
    order = np.argsort(np.argsort(-merit, axis=1), axis=1)
    return tuple(
        SplitEstimate(
            name,
            interval(value[:, s]),
            interval(posterior.between[:, s]),
            interval(posterior.within[:, s]),
            len(groups[s]),
            sum(len(w.sites) for w in groups[s]),
            tuple(float(np.mean(order[:, s] == place)) for place in range(len(names))),
            _open_side(groups[s]),
        )
        for s, name in enumerate(names)
    )


def _wafer_estimates(
    names: tuple[str, ...], groups: list[list[Wafer]], posterior: HierarchyDraws, logarithmic: bool
) -> tuple[WaferEstimate, ...]:
    out = []
    for s, name in enumerate(names):
        for w, wafer in enumerate(groups[s]):
            column = posterior.wafers[s][:, w]
            centre = interval(np.exp(column) if logarithmic else column)
            out.append(WaferEstimate(name, wafer.name, centre, len(wafer.sites), _open_side([wafer])))
    return tuple(out)


def _open_side(wafers: Sequence[Wafer]) -> str:
    """Return the side on which no site of the wafers sets a bound."""
    sides = [open_side(table) for wafer in wafers for table in wafer.sites]
    return next((side for side in "<>" if all(side in own for own in sides)), "")


def _pairs(
    splits: tuple[SplitEstimate, ...], posterior: HierarchyDraws, value: Array, question: Question
) -> tuple[Pair, ...]:
    names = [split.name for split in splits]
    places = pairs_of(len(names))
    apart = [posterior.centre[:, a] - posterior.centre[:, b] for a, b in places]
    tails = [tail_probability(d) for d in apart]
    sure = decided(tails, len(names), question.level)
    return tuple(
        Pair(
            names[a],
            names[b],
            interval(value[:, a] - value[:, b]),
            interval(np.exp(d)) if question.logarithmic else None,
            float(np.mean(question.sign * d > 0)),
            float(np.mean(question.sign * d > question.least)),
            float(np.mean(question.sign * d < -question.least)),
            tail,
            yes,
            _thickness(value[:, a], value[:, b], question),
            "".join(sorted({*splits[a].open_side, *turned_side(splits[b].open_side)})),
        )
        for (a, b), d, tail, yes in zip(places, apart, tails, sure, strict=True)
    )


def _thickness(first: Array, second: Array, question: Question) -> Interval | None:
    """Return the change of the interlayer's thickness."""
    if question.layer is None:
        return None
    compliance = 1 / first - 1 / second if question.quantity.endswith("stiffness") else first - second
    return interval(question.layer.per_compliance * compliance)
