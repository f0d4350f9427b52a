"""The hierarchy in closed form where every site's likelihood is normal."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["NormalWafer", "SplitNodes", "normal_nodes"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class NormalWafer:
    """Sites of one wafer.

    Attributes
    ----------
    mean, sd : array, shape (sites,)
        Centre and standard deviation of each site's likelihood.
    """

    mean: Array
    sd: Array


@dataclass(frozen=True)
class SplitNodes:
    """A split seen at each pair of scatters.

    Attributes
    ----------
    log_evidence : array, shape (between, within)
        Log probability density of the split's data.
    mean, sd : array, shape (between, within)
        Of the split's centre.
    """

    log_evidence: Array
    mean: Array
    sd: Array


def normal_nodes(
    wafers: Sequence[NormalWafer], between: Array, within: Array, centre: float, centre_sd: float
) -> SplitNodes:
    r"""Integrate sites, wafers and the split's centre out.

    Parameters
    ----------
    wafers : sequence of NormalWafer
    between, within : array
        Standard deviations between wafers and within a wafer at which to evaluate.
    centre, centre_sd : float
        Normal prior of the split's centre.

    Notes
    -----
    With :math:`P = \sum_j 1/(s_j^2 + \sigma^2)` a wafer's sites act as one normal likelihood of variance
    :math:`1/P` about their weighted mean; with :math:`V = 1/P + \tau^2` its wafers act likewise on the centre.
    """
    log = np.zeros((between.size, within.size))
    top, bottom = np.full_like(log, centre / centre_sd**2), np.full_like(log, 1 / centre_sd**2)
    squares = np.full_like(log, centre**2 / centre_sd**2)
    logs = np.full_like(log, np.log(centre_sd))
    for wafer in wafers:
        weight = 1 / (wafer.sd[:, None] ** 2 + within**2)
        total = weight.sum(axis=0)
        mean = (weight * wafer.mean[:, None]).sum(axis=0) / total
        spread = (weight * (wafer.mean[:, None] - mean) ** 2).sum(axis=0)
        log = log + 0.5 * (np.log(weight).sum(axis=0) - np.log(total) - spread)
        variance = 1 / total + between[:, None] ** 2
        top, bottom = top + mean / variance, bottom + 1 / variance
        squares, logs = squares + mean**2 / variance, logs + 0.5 * np.log(variance)
    middle = top / bottom
    log = log - logs - 0.5 * np.log(bottom) - 0.5 * (squares - middle * top)
    return SplitNodes(log, middle, 1 / np.sqrt(bottom))
