"""Grids of scatters and the priors on them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

__all__ = ["Cells", "SplitPriors", "cells"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class SplitPriors:
    """SplitPriors of a comparison, in the variable compared (a logarithm unless the scale is linear).

    Parameters
    ----------
    centre : float, optional
        Middle of the normal prior of every split's centre; the median of the sites if left out.
    centre_sd : float
        Its standard deviation; 2 is a factor of seven either way.
    between : float
        Scale of the half-Cauchy prior of the typical scatter between wafers.
    within : float
        Likewise of the scatter between the sites of a wafer.
    difference : float
        Standard deviation of the logarithm of a split's scatter over the typical one: 0 for one scatter in
        all splits, large for scatters that know nothing of each other.

    Raises
    ------
    ValueError
        If a number is negative or not finite, or `centre_sd` is not positive.

    Notes
    -----
    A scale of 0 says that there is no such scatter. Half-Cauchy priors of scatters: Gelman, Bayesian
    Analysis 1 (2006) 515 (from memory).
    """

    centre: float | None = None
    centre_sd: float = 2.0
    between: float = 0.2
    within: float = 0.1
    difference: float = 0.3

    def __post_init__(self) -> None:
        for name in ("centre_sd", "between", "within", "difference"):
            value = getattr(self, name)
            if not (np.isfinite(value) and value >= 0) or (name == "centre_sd" and value == 0):
                kind = "positive" if name == "centre_sd" else "zero or positive"
                raise ValueError(f"SplitPriors got {name}={value!r}; give a finite number, {kind}.")

    def text(self) -> str:
        """State the priors in one sentence."""
        return (
            f"split centres normal with sd {self.centre_sd:g}; typical scatter half-Cauchy with scale "
            f"{self.between:g} between wafers and {self.within:g} within a wafer; a split's scatter over the "
            f"typical one lognormal with sd {self.difference:g}"
        )


@dataclass(frozen=True)
class Cells:
    """A range of scatters cut into cells.

    Attributes
    ----------
    edges : array, shape (cells + 1,)
        The first is 0 unless lower scatters were left out.
    nodes : array, shape (cells,)
        One scatter inside each cell.
    prior : array, shape (cells,)
        Prior probability of each cell for the typical scatter.
    scale : float
        Of the half-Cauchy prior.
    """

    edges: Array
    nodes: Array
    prior: Array
    scale: float

    def transition(self, difference: float) -> Array:
        """Return the probability of each cell (columns) for a split, given the typical scatter's cell (rows)."""
        if difference == 0 or self.nodes.size == 1:
            return np.eye(self.nodes.size)
        with np.errstate(divide="ignore"):
            inner = np.log(self.edges[1:-1])
        below = ndtr((inner - np.log(self.nodes)[:, None]) / difference)
        ends = np.zeros((self.nodes.size, 1)), np.ones((self.nodes.size, 1))
        return np.diff(np.concatenate([ends[0], below, ends[1]], axis=1), axis=1)

    def inside(self, cell: NDArray[np.int_], rng: np.random.Generator) -> Array:
        """Draw a scatter within each given cell from the prior."""
        if self.scale == 0:
            return np.zeros(cell.size)
        low, high = np.arctan(self.edges[cell] / self.scale), np.arctan(self.edges[cell + 1] / self.scale)
        return np.asarray(self.scale * np.tan(low + rng.random(cell.size) * (high - low)))


def cells(scale: float, finest: float, low: float, high: float, count: int) -> Cells:
    """Cut a range of scatters into cells, wide in the logarithm, with few of them below `finest`.

    Parameters
    ----------
    scale : float
        Of the half-Cauchy prior; 0 gives the one scatter 0.
    finest : float
        Scatter below which the data cannot tell one from another.
    low, high : float
        Range; everything above falls into the last cell.
    count : int
        Number of cells.
    """
    if scale == 0:
        return Cells(np.zeros(2), np.zeros(1), np.ones(1), 0.0)
    corners = finest * np.expm1(np.linspace(np.log1p(low / finest), np.log1p(high / finest), 2 * count + 1))
    edges = corners[::2]
    below = 2 / np.pi * np.arctan(edges / scale)
    below[-1] = 1.0
    return Cells(edges, corners[1::2], np.diff(below), scale)
