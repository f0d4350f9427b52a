r"""A hierarchy of splits, wafers and sites, sampled by integrating sites and wafers out on grids.

Site j of wafer i of split s has :math:`x_{ij} \sim N(w_i, \sigma_s^2)`, wafer i has
:math:`w_i \sim N(\mu_s, \tau_s^2)`; :math:`\log \tau_s` and :math:`\log \sigma_s` scatter normally about the
logarithms of the typical scatters. The data enter by the likelihood of each x as a table of any shape. Given the
scatters, splits are independent, so their densities are products of one-dimensional integrals, and the draws are
independent ones, not a chain's.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from inverse.study.splits.normal_sites import NormalWafer, SplitNodes, normal_nodes
from inverse.study.splits.scatter import Cells, SplitPriors, cells
from inverse.study.stiffness.tabulated import Tabulated, product

__all__ = ["HierarchyDraws", "Wafer", "sample_hierarchy", "sample_normal_hierarchy"]

Array = NDArray[np.float64]
Whole = NDArray[np.int_]

_WIDE, _FINE = 48, 16
_NEGLIGIBLE = 1e-6
_REACH = 6.0
_PER_SD = 3.0


@dataclass(frozen=True)
class Wafer:
    """A wafer and the likelihoods of its sites.

    Attributes
    ----------
    name : str
    sites : tuple of Tabulated
    """

    name: str
    sites: tuple[Tabulated, ...]


@dataclass(frozen=True)
class HierarchyDraws:
    """Independent draws from the posterior of a hierarchy.

    Attributes
    ----------
    centre : array, shape (draws, splits)
    between, within : array, shape (draws, splits)
        Scatter between wafers and between sites of a wafer.
    typical_between, typical_within : array, shape (draws,)
        What the splits' scatters vary about.
    wafers : tuple of array, shape (draws, wafers of the split)
        Wafer centres, one array a split; of fewer draws, the first ones.
    """

    centre: Array
    between: Array
    within: Array
    typical_between: Array
    typical_within: Array
    wafers: tuple[Array, ...] = ()


class _Split(Protocol):
    """A split whose evidence and centre are known at every pair of scatters."""

    log_evidence: Array

    def centres(self, i: int, j: int, count: int, rng: np.random.Generator) -> Array:
        """Draw the split's centre given a pair of scatters."""
        ...


class _NormalSplit:
    """A split with normal sites at every pair of scatters."""

    def __init__(self, nodes: SplitNodes) -> None:
        self.nodes = nodes
        self.log_evidence = nodes.log_evidence

    def centres(self, i: int, j: int, count: int, rng: np.random.Generator) -> Array:
        """Draw the split's centre given a pair of scatters."""
        return np.asarray(self.nodes.mean[i, j] + self.nodes.sd[i, j] * rng.standard_normal(count))


class _TabulatedSplit:
    """A split with sites of any shape at every pair of scatters."""

    def __init__(
        self, wafers: Sequence[Wafer], between: Cells, within: Cells, centre: float, centre_sd: float
    ) -> None:
        self.between = between
        self.wafers = [[product(w.sites, s) for w in wafers] for s in within.nodes]
        self.grids = [
            [_centre_grid(tables, t, centre, centre_sd) for tables in self.wafers] for t in between.nodes
        ]
        self.log_evidence = np.array([[log for _, _, log in row] for row in self.grids])

    def centres(self, i: int, j: int, count: int, rng: np.random.Generator) -> Array:
        """Draw the split's centre given a pair of scatters."""
        grid, mass, _ = self.grids[i][j]
        place = np.searchsorted(np.cumsum(mass)[:-1], rng.random(count))
        step = grid[1] - grid[0]
        return np.asarray(grid[place] + step * (rng.random(count) - 0.5))

    def wafer_centres(self, i: int, j: int, centres: Array, rng: np.random.Generator) -> Array:
        """Draw the wafers' centres given scatters and the split's centre, shape (draws, wafers)."""
        scatter = float(self.between.nodes[i])
        columns = [_given_centre(table, scatter, centres, rng) for table in self.wafers[j]]
        return np.stack(columns, axis=1)


def sample_hierarchy(
    splits: Sequence[Sequence[Wafer]],
    priors: SplitPriors,
    *,
    seed: int | np.random.SeedSequence,
    draws: int = 20000,
    wafer_draws: int = 4000,
) -> HierarchyDraws:
    """Draw from the posterior of a hierarchy whose site likelihoods have any shape.

    Parameters
    ----------
    splits : sequence of sequence of Wafer
        Wafers of each split.
    priors : SplitPriors
        With a centre.
    seed : int or SeedSequence
    draws : int
        Draws of centres and scatters.
    wafer_draws : int
        Draws of the wafers' centres among them; 0 for none.

    Returns
    -------
    HierarchyDraws
    """
    centre, between, within = _grids(splits, priors)
    made = [_TabulatedSplit(wafers, between, within, centre, priors.centre_sd) for wafers in splits]
    rng = np.random.default_rng(seed)
    drawn, pairs = _draw(made, between, within, priors.difference, draws, rng)
    if wafer_draws == 0:
        return drawn
    count = min(wafer_draws, draws)
    wafers = [
        _wafers(split, pair[:count], drawn.centre[:count, s], rng)
        for s, (split, pair) in enumerate(zip(made, pairs, strict=True))
    ]
    return HierarchyDraws(**{**vars(drawn), "wafers": tuple(wafers)})


def sample_normal_hierarchy(
    splits: Sequence[Sequence[NormalWafer]],
    priors: SplitPriors,
    *,
    seed: int | np.random.SeedSequence,
    draws: int = 20000,
) -> HierarchyDraws:
    """Draw centres and scatters as `sample_hierarchy` does, in closed form for normal site likelihoods.

    Parameters
    ----------
    splits : sequence of sequence of NormalWafer
    priors : SplitPriors
    seed : int or SeedSequence
    draws : int

    Returns
    -------
    HierarchyDraws
        Without wafers.
    """
    centre = _middle(splits, priors)
    between, within = _normal_grids(splits, priors, centre, _FINE)
    made = [
        _NormalSplit(normal_nodes(wafers, between.nodes, within.nodes, centre, priors.centre_sd))
        for wafers in splits
    ]
    return _draw(made, between, within, priors.difference, draws, np.random.default_rng(seed))[0]


def _grids(splits: Sequence[Sequence[Wafer]], priors: SplitPriors) -> tuple[float, Cells, Cells]:
    """Find the centre of the prior, and grids that hold what the normal approximation deems possible."""
    wide = 10 * priors.centre_sd
    tables = [t for wafers in splits for w in wafers for t in w.sites]
    # Of a site that sets only a limit, the table's own range counts, where its likelihood changes.
    middles = [t.moments(t.start, t.end)[0] for t in tables]
    centre = float(np.median(middles)) if priors.centre is None else priors.centre
    normal = [[_as_normal(w, centre - wide, centre + wide) for w in wafers] for wafers in splits]
    return centre, *_normal_grids(normal, priors, centre, _FINE)


def _as_normal(wafer: Wafer, low: float, high: float) -> NormalWafer:
    moments = np.array([t.moments(min(low, t.start), max(high, t.end)) for t in wafer.sites])
    return NormalWafer(moments[:, 0], moments[:, 1])


def _middle(splits: Sequence[Sequence[NormalWafer]], priors: SplitPriors) -> float:
    if priors.centre is not None:
        return priors.centre
    return float(np.median(np.concatenate([w.mean for wafers in splits for w in wafers])))


def _normal_grids(
    splits: Sequence[Sequence[NormalWafer]], priors: SplitPriors, centre: float, count: int
) -> tuple[Cells, Cells]:
    means = np.concatenate([w.mean for wafers in splits for w in wafers])
    finest = 0.3 * min(float(w.sd.min()) / np.sqrt(w.sd.size) for wafers in splits for w in wafers)
    scales = (priors.between, priors.within)
    wide = [cells(s, finest, 0.0, max(30 * s, 3 * float(np.ptp(means))), _WIDE) for s in scales]
    evidence = [
        normal_nodes(wafers, wide[0].nodes, wide[1].nodes, centre, priors.centre_sd).log_evidence
        for wafers in splits
    ]
    weight, shares = _typical(evidence, wide[0], wide[1], priors.difference)
    out = []
    for axis, found in enumerate(wide):
        mass = np.max([a.sum(axis=1 - axis) for a in (weight, *shares)], axis=0)
        likely = np.flatnonzero(mass > _NEGLIGIBLE)
        first, last = max(likely[0] - 1, 0), min(likely[-1] + 1, mass.size - 1)
        out.append(cells(found.scale, finest, float(found.edges[first]), float(found.edges[last + 1]), count))
    return out[0], out[1]


def _typical(
    evidence: Sequence[Array], between: Cells, within: Cells, difference: float
) -> tuple[Array, list[Array]]:
    """Return the posterior of the typical scatters' cells, and of each split's."""
    rows, columns = between.transition(difference), within.transition(difference)
    scaled = [np.exp(e - e.max()) for e in evidence]
    with np.errstate(divide="ignore"):
        log = np.log(np.outer(between.prior, within.prior))
        given = [rows @ e @ columns.T for e in scaled]
        log = log + sum(np.log(g) for g in given)
    weight = np.exp(log - log.max())
    weight /= weight.sum()
    shares = [
        e * (rows.T @ np.divide(weight, g, out=np.zeros_like(g), where=g > 0) @ columns)
        for e, g in zip(scaled, given, strict=True)
    ]
    return weight, shares


def _draw(
    splits: Sequence[_Split],
    between: Cells,
    within: Cells,
    difference: float,
    draws: int,
    rng: np.random.Generator,
) -> tuple[HierarchyDraws, list[Whole]]:
    weight, _ = _typical([s.log_evidence for s in splits], between, within, difference)
    typical = rng.choice(weight.size, draws, p=weight.ravel())
    rows, columns = between.transition(difference), within.transition(difference)
    centre, pairs = np.empty((draws, len(splits))), []
    for s, split in enumerate(splits):
        pair = _split_pairs(split.log_evidence, rows, columns, typical, rng)
        for value, places in _groups(pair):
            i, j = divmod(value, within.nodes.size)
            centre[places, s] = split.centres(i, j, places.size, rng)
        pairs.append(pair)
    own = [np.divmod(pair, within.nodes.size) for pair in pairs]
    a, b = np.divmod(typical, within.nodes.size)
    made = HierarchyDraws(
        centre,
        np.stack([between.inside(i, rng) for i, _ in own], axis=1),
        np.stack([within.inside(j, rng) for _, j in own], axis=1),
        between.inside(a, rng),
        within.inside(b, rng),
    )
    return made, pairs


def _split_pairs(
    log_evidence: Array, rows: Array, columns: Array, typical: Whole, rng: np.random.Generator
) -> Whole:
    """Draw a split's pair of cells given the typical pair of each draw."""
    evidence = np.exp(log_evidence - log_evidence.max())
    out = np.empty(typical.size, dtype=int)
    for value, places in _groups(typical):
        a, b = divmod(value, columns.shape[0])
        chance = (rows[a][:, None] * evidence * columns[b]).ravel()
        out[places] = np.searchsorted(
            np.cumsum(chance)[:-1], rng.random(places.size) * chance.sum(), side="right"
        )
    return out


def _groups(labels: Whole) -> list[tuple[int, Whole]]:
    """Return each label with the places where it stands."""
    order = np.argsort(labels, kind="stable")
    values, first = np.unique(labels[order], return_index=True)
    return [(int(v), p) for v, p in zip(values, np.split(order, first[1:]), strict=True)]


def _centre_grid(
    wafers: Sequence[Tabulated], scatter: float, centre: float, centre_sd: float
) -> tuple[Array, Array, float]:
    """Return a grid of the split's centre, its posterior mass there, and the log evidence."""
    low, high = centre - _REACH * centre_sd, centre + _REACH * centre_sd
    firm = [[t for t in wafers if t.bounded[side]] for side in (0, 1)]
    low = max(low, min((t.start for t in firm[0]), default=low) - _REACH * scatter)
    high = min(high, max((t.end for t in firm[1]), default=high) + _REACH * scatter)
    width = np.sqrt(min(t.width for t in wafers) ** 2 + scatter**2)
    step = float(1 / np.sqrt(len(wafers) / width**2 + 1 / centre_sd**2)) / _PER_SD
    grid = np.linspace(low, max(high, low + step), int(min(max((high - low) / step, 2), 4000)) + 1)
    log = -0.5 * ((grid - centre) / centre_sd) ** 2 - np.log(centre_sd * np.sqrt(2 * np.pi))
    log = log + sum(t.smeared(scatter, grid) for t in wafers)
    top = float(log.max())
    if top == -np.inf:
        return grid, np.full(grid.size, 1 / grid.size), -np.inf
    mass = np.exp(log - top)
    return grid, mass / mass.sum(), top + float(np.log(mass.sum() * (grid[1] - grid[0])))


def _wafers(split: _TabulatedSplit, pairs: Whole, centres: Array, rng: np.random.Generator) -> Array:
    out = np.empty((pairs.size, len(split.wafers[0])))
    for value, places in _groups(pairs):
        i, j = divmod(value, len(split.wafers))
        out[places] = split.wafer_centres(i, j, centres[places], rng)
    return out


def _given_centre(table: Tabulated, scatter: float, centres: Array, rng: np.random.Generator) -> Array:
    """Draw one value a centre from the table times a normal about the centre."""
    t = np.linspace(-_REACH, _REACH, 61)
    step = scatter * (t[1] - t[0])
    near = centres[:, None] + scatter * t
    if all(table.bounded) and step > table.step:
        near = np.broadcast_to(table.nodes, (centres.size, table.log.size))
        step = table.step
    with np.errstate(divide="ignore", over="ignore"):
        log = table.interpolate(near) - 0.5 * ((near - centres[:, None]) / max(scatter, 1e-300)) ** 2
    mass = np.cumsum(np.exp(log - log.max(axis=1, keepdims=True)), axis=1)
    place = (mass < rng.random((centres.size, 1)) * mass[:, -1:]).sum(axis=1)
    return np.asarray(near[np.arange(centres.size), place] + step * (rng.random(centres.size) - 0.5))
