"""Likelihoods of one real variable as tables, with the two operations a hierarchy needs: smearing and products."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

__all__ = ["Tabulated", "normal_table", "product"]

Array = NDArray[np.float64]

PER_WIDTH = 5.0
"""Nodes per standard deviation of the finest structure."""

DEPTH = 35.0
"""Tables end where the log likelihood lies this far below its maximum."""

_MOST_NODES = 4000
_FLOOR, _IMPOSSIBLE = 700.0, -1e9  # keep differences of neighbouring nodes finite
_RULE = np.linspace(-5.0, 5.0, 21)
_RULE_WEIGHTS = np.exp(-0.5 * _RULE**2) / np.exp(-0.5 * _RULE**2).sum()


@dataclass(frozen=True)
class Tabulated:
    """The logarithm of a likelihood, up to a constant, on a uniform grid.

    Attributes
    ----------
    start, step : float
        First node and spacing.
    log : array, shape (nodes,)
    left, right : float
        Log likelihood everywhere beyond the ends; -inf, or a plateau where the data set no bound.
    width : float
        Standard deviation of the finest structure.
    """

    start: float
    step: float
    log: Array
    left: float = -np.inf
    right: float = -np.inf
    width: float = 1.0

    @property
    def nodes(self) -> Array:
        """Places of the table, shape (nodes,)."""
        return np.asarray(self.start + self.step * np.arange(self.log.size), dtype=np.float64)

    @property
    def end(self) -> float:
        """Last node."""
        return self.start + self.step * (self.log.size - 1)

    @property
    def bounded(self) -> tuple[bool, bool]:
        """Whether the likelihood falls to nothing on the left and on the right."""
        return self.left == -np.inf, self.right == -np.inf

    def interpolate(self, at: Array) -> Array:
        """Return the log likelihood at any places, quadratic between nodes and so exact for a normal one."""
        place = (at - self.start) / self.step
        cell = np.clip(place.astype(int), 0, max(self.log.size - 2, 0))
        part = np.clip(place - cell, 0.0, 1.0)
        bend = np.zeros(self.log.size + 1)
        bend[1:-2] = 0.5 * np.diff(self.log, 2)
        curve = 0.5 * (bend[cell] + bend[cell + 1])
        ahead = self.log[np.minimum(cell + 1, self.log.size - 1)]
        inside = self.log[cell] + part * (ahead - self.log[cell]) - curve * part * (1 - part)
        return np.where(place < 0, self.left, np.where(place > self.log.size - 1, self.right, inside))

    def smeared(self, scatter: float, at: Array) -> Array:
        r"""Return :math:`\log \int l(x) N(x; m, \mathrm{scatter}^2) dx` at places m, shape (n,)."""
        if scatter == 0:
            return self.interpolate(at)
        with np.errstate(divide="ignore"):
            if scatter < self.step:
                values = self.interpolate(at[:, None] + scatter * _RULE)
                top = float(np.max(self.log))
                return np.asarray(np.log(np.exp(values - top) @ _RULE_WEIGHTS) + top)
            return self._summed(scatter, at)

    def _summed(self, scatter: float, at: Array) -> Array:
        top = max(float(np.max(self.log)), self.left, self.right)
        if top == -np.inf:
            return np.full(at.size, -np.inf)
        kernel = np.exp(-0.5 * ((at[:, None] - self.nodes) / scatter) ** 2)
        total = kernel @ np.exp(self.log - top) * (self.step / (scatter * np.sqrt(2 * np.pi)))
        half = self.step / 2
        if self.left > -np.inf:
            total = total + np.exp(self.left - top) * ndtr((self.start - half - at) / scatter)
        if self.right > -np.inf:
            total = total + np.exp(self.right - top) * ndtr((at - self.end - half) / scatter)
        return np.asarray(np.log(total) + top)

    def shifted(self, by: float) -> Tabulated:
        """Return the same likelihood moved to the right."""
        return Tabulated(self.start + by, self.step, self.log, self.left, self.right, self.width)

    def mirrored(self) -> Tabulated:
        """Return the likelihood of minus the variable."""
        return Tabulated(-self.end, self.step, self.log[::-1].copy(), self.right, self.left, self.width)

    def moments(self, low: float, high: float) -> tuple[float, float]:
        """Return mean and standard deviation of the likelihood as a density over [low, high]."""
        x = self._dense(low, high)
        log = self.interpolate(x)
        weight = np.exp(log - log.max()) * np.gradient(x)
        mean = float((weight * x).sum() / weight.sum())
        return mean, float(np.sqrt((weight * (x - mean) ** 2).sum() / weight.sum()))

    def quantiles(self, probabilities: Sequence[float], low: float, high: float) -> Array:
        """Return quantiles of the likelihood as a density over [low, high]."""
        x = self._dense(low, high)
        log = self.interpolate(x)
        weight = np.exp(log - log.max())
        below = np.concatenate([[0.0], np.cumsum((weight[1:] + weight[:-1]) / 2 * np.diff(x))])
        return np.asarray(np.interp(np.asarray(probabilities) * below[-1], below, x))

    def _dense(self, low: float, high: float) -> Array:
        inside = self.nodes[(self.nodes > low) & (self.nodes < high)]
        first = max(low, self.start - self.step) if self.bounded[0] else low
        last = min(high, self.end + self.step) if self.bounded[1] else high
        return np.unique(np.concatenate([[first], inside, [last]]))


def normal_table(mean: float, sd: float) -> Tabulated:
    """Tabulate a normal likelihood."""
    reach = np.sqrt(2 * DEPTH)
    t = np.arange(-np.ceil(reach * PER_WIDTH), np.ceil(reach * PER_WIDTH) + 1) / PER_WIDTH
    return Tabulated(mean + sd * t[0], sd / PER_WIDTH, -0.5 * t**2, width=sd)


def product(tables: Sequence[Tabulated], scatter: float) -> Tabulated:
    """Return the likelihood of a common centre about which the tables' variables scatter normally."""
    width = float(np.sqrt(min(t.width for t in tables) ** 2 + scatter**2) / np.sqrt(len(tables)))
    low = min(t.start for t in tables) - 6 * scatter
    high = max(t.end for t in tables) + 6 * scatter
    step = max(width / PER_WIDTH, (high - low) / _MOST_NODES)
    grid = np.linspace(low, high + step, int((high - low) / step) + 2)
    step = float(grid[1] - grid[0])
    log = np.sum([t.smeared(scatter, grid) for t in tables], axis=0)
    left, right = float(sum(t.left for t in tables)), float(sum(t.right for t in tables))
    return trimmed(Tabulated(low, step, log, left, right, width))


def trimmed(table: Tabulated, depth: float = DEPTH) -> Tabulated:
    """Cut what lies so far below the maximum that it does not count."""
    top = max(float(np.max(table.log)), table.left, table.right)
    left = table.left if table.left > top - depth else -np.inf
    right = table.right if table.right > top - depth else -np.inf
    kept = np.flatnonzero(table.log > top - depth) if top > -np.inf else np.zeros(1, dtype=int)
    first, last = (int(kept[0]), int(kept[-1])) if kept.size else (0, table.log.size - 1)
    first, last = (0 if left > -np.inf else first), (table.log.size - 1 if right > -np.inf else last)
    log = np.maximum(table.log[first : last + 1], top - _FLOOR if top > -np.inf else _IMPOSSIBLE)
    return Tabulated(table.start + first * table.step, table.step, log, left, right, table.width)
