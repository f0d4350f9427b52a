"""Summaries of results: one row of numbers per quantity, with limits where a bound is touched, and flags."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity
from inverse.description.wording import plain
from inverse.inference.checks.prior_view import (
    PriorView,
    quantiles,
    touches,
    view_of_distribution,
    view_of_variable,
)
from inverse.inference.mcmc.convergence import bulk_ess, split_rhat
from inverse.report.rounding import decimal_place, format_limit, format_value
from inverse.report.unit_text import unit_text

__all__ = ["MOST_RHAT", "LEAST_ESS", "Limit", "Row", "least_squares_rows", "posterior_rows"]

Array = NDArray[np.float64]

LEAST_ESS = 400.0
MOST_RHAT = 1.01
_NOT_NARROWED = 1.1
_NOT_MOVED = 0.2
_MONOTONE = 0.999
_FLIPPED = {"<": ">", ">": "<"}
_SIDE_FLAG = {"<": "upper limit", ">": "lower limit"}


@dataclass(frozen=True)
class Limit:
    """A one-sided limit: the quantity lies on `side` of `value` with probability `mass`."""

    side: str
    value: float
    mass: float


@dataclass(frozen=True)
class Row:
    """Summary of one quantity.

    Attributes
    ----------
    name, unit, role : str
        Name, unit and ``unknown``, ``noise`` or ``derived``.
    median : float
        Posterior median, or the estimate of least squares.
    intervals : tuple of (float, float)
        Central interval for each mass asked for.
    limits : tuple of Limit
        One for each mass where the posterior touches a bound; empty otherwise.
    prior_width, narrowed : float or None
        Width of the prior's central interval of the first mass, and that over the posterior's.
    flags : tuple of str
        ``upper limit``, ``lower limit``, ``prior edge``, ``prior only``, ``far from prior``,
        ``not converged``, ``few effective draws``, ``constants ± 4.7 nm``, ...
    ess, rhat : float or None
        Bulk effective sample size and split R-hat; None for least squares.
    """

    name: str
    unit: str
    role: str
    median: float
    intervals: tuple[tuple[float, float], ...]
    limits: tuple[Limit, ...] = ()
    prior_width: float | None = None
    narrowed: float | None = None
    flags: tuple[str, ...] = ()
    ess: float | None = None
    rhat: float | None = None

    @property
    def half_width(self) -> float:
        """Half the width of the first interval."""
        return (self.intervals[0][1] - self.intervals[0][0]) / 2

    @property
    def place(self) -> int:
        """Power of ten to which the numbers of this row are rounded."""
        half = self.half_width
        if math.isfinite(half) and half > 0:
            return decimal_place(half)
        size = abs(self.median)
        return decimal_place(size, 6) if math.isfinite(size) and size > 0 else 0

    def statement(self, style: str = "plain", digits: int = 2) -> str:
        """Return the quantity in one phrase: ``60.03(12) nm``, ``52 +7 -5 GPa/nm`` or ``> 14 GPa/nm (95 %)``.

        Parameters
        ----------
        style : {"plain", "markdown", "latex"}
            As in `inverse.report.rounding.format_value`.
        digits : int
            Significant digits of the uncertainty, 1 or 2.

        Notes
        -----
        The uncertainty is half the first interval; its two sides are stated apart where they differ by more
        than a tenth. A limit is that of the last mass.
        """
        if self.limits:
            last = self.limits[-1]
            return format_limit(
                last.value, last.side, mass=last.mass, style=style, unit=self.unit, width=self.half_width
            )
        low, high = self.intervals[0]
        above, below = high - self.median, self.median - low
        lopsided = abs(above - below) > 0.1 * (above + below) / 2
        uncertainty = (above, below) if lopsided else (above + below) / 2
        return format_value(self.median, uncertainty, digits=digits, style=style, unit=self.unit)


def posterior_rows(tree: Any, mass: Sequence[float]) -> tuple[Row, ...]:
    """Summarise every variable of a posterior.

    Parameters
    ----------
    tree : xarray.DataTree
        With a group ``posterior`` (dims chain, draw); draws in a group ``prior`` are used for derived
        quantities.
    mass : sequence of float
        Masses of the central intervals.

    Returns
    -------
    tuple of Row
        In the order of the group.
    """
    dataset = tree["posterior"].to_dataset()
    draws = {str(n): np.asarray(v.transpose("chain", "draw"), float) for n, v in dataset.data_vars.items()}
    prior = tree["prior"].to_dataset() if "prior" in tree.children else {}
    rows = {}
    for name, values in draws.items():
        attrs = dataset[name].attrs
        known = view_of_variable(attrs, np.asarray(prior[name]) if name in prior else None)
        rows[name] = _posterior_row(name, attrs, values, known, tuple(mass))
    shares = json.loads(tree.attrs.get("inverse", "{}")).get("constant_shares", {})
    bounds = {name: (a.get("low", -math.inf), a.get("high", math.inf)) for name, a in _attrs(dataset)}
    limited = (
        _inherit_limit(row, rows.values(), draws, bounds[row.name], tuple(mass)) for row in rows.values()
    )
    return tuple(_beside_constants(row, shares.get(row.name, 0.0)) for row in limited)


def _attrs(dataset: Any) -> list[tuple[str, dict[str, Any]]]:
    return [(str(name), variable.attrs) for name, variable in dataset.data_vars.items()]


def _beside_constants(row: Row, share: float) -> Row:
    """Flag a quantity to which the constants taken as known would add more than its interval is wide."""
    low, high = row.intervals[0]
    if not share > (high - low) / 2:
        return row
    unit = "" if row.unit == "1" else f" {unit_text(row.unit)}"
    return replace(row, flags=_merge(row.flags, [f"constants ± {plain(share)}{unit}"]))


def least_squares_rows(fit: Any, mass: Sequence[float]) -> tuple[Row, ...]:
    """Summarise a least-squares result by normal intervals, cut at a bound where one is known.

    Parameters
    ----------
    fit : Fit
        With ``names``, ``values``, ``sd``, ``units`` and ``flags`` in one order, a flag being texts joined by
        ``"; "``, and with the ``inversion``, whose ``priors`` and ``fields`` are used.
    mass : sequence of float
        Masses of the intervals.

    Returns
    -------
    tuple of Row
        In the order of ``names``.
    """
    rows = []
    for name, value, spread, unit, flag in zip(
        fit.names, fit.values, fit.sd, fit.units, fit.flags, strict=True
    ):
        known = quantity(fit.inversion.fields[name])
        prior = view_of_distribution(fit.inversion.priors[name], (known.low, known.high))
        role = "noise" if known.name.startswith("noise.") else "unknown"
        row = _normal_row(Row(name, unit, role, float(value), ()), float(spread), prior.natural, tuple(mass))
        row = _within_ends(_against_prior(row, prior, mass[0]), prior, float(spread))
        own = [f for f in flag.split("; ") if f and not (f == "prior only" and "prior edge" in row.flags)]
        rows.append(replace(row, flags=_merge(own, row.flags)))
    return tuple(rows)


def _posterior_row(
    name: str, attrs: dict[str, Any], values: Array, prior: PriorView | None, mass: tuple[float, ...]
) -> Row:
    known = values[~np.isnan(values)]
    unit, role = attrs.get("units", "1"), attrs.get("role", "unknown")
    if known.size == 0:
        nothing = ((math.nan, math.nan),) * len(mass)
        return Row(name, unit, role, math.nan, nothing, flags=("all draws are not a number",))
    median = float(quantiles(known, [0.5])[0])
    ess, rhat = _diagnostics(values)
    row = Row(name, unit, role, median, tuple(_central(known, m) for m in mass), ess=ess, rhat=rhat)
    if prior is not None:
        row = _at_bounds(_against_prior(row, prior, mass[0]), known, prior, mass)
    lost = values.size - known.size
    return replace(
        row, flags=_merge(row.flags, _converged(row), [f"{lost} draws are not a number"] * (lost > 0))
    )


def _diagnostics(values: Array) -> tuple[float, float]:
    return (bulk_ess(values), split_rhat(values)) if np.all(np.isfinite(values)) else (math.nan, math.nan)


def _central(draws: Array, mass: float) -> tuple[float, float]:
    low, high = quantiles(draws, [0.5 - mass / 2, 0.5 + mass / 2])
    return float(low), float(high)


def _against_prior(row: Row, prior: PriorView, mass: float) -> Row:
    """Add the prior's width, the ratio, and what they say."""
    low, high = row.intervals[0]
    width = prior.width(mass)
    narrowed = width / (high - low) if high > low else math.nan
    still = abs(row.median - prior.median) < _NOT_MOVED * width / 2
    flags = ["prior only"] if narrowed < _NOT_NARROWED and still else []
    flags += ["far from prior"] if prior.is_surprised_by(row.median) else []
    return replace(row, prior_width=width, narrowed=narrowed, flags=_merge(row.flags, flags))


def _at_bounds(row: Row, draws: Array, prior: PriorView, mass: tuple[float, ...]) -> Row:
    touched = [
        (side, bound == natural)
        for side, bound, natural in (
            ("<", prior.low, prior.natural[0]),
            (">", prior.high, prior.natural[1]),
        )
        if touches(draws, bound, side)
    ]
    edge = ["prior edge"] if any(not natural for _, natural in touched) else []
    if len(touched) != 1:
        return replace(row, flags=_merge(row.flags, edge))
    return _limited(replace(row, flags=_merge(row.flags, edge)), draws, touched[0][0], mass)


def _limited(row: Row, draws: Array, side: str, mass: tuple[float, ...]) -> Row:
    limits = tuple(Limit(side, float(quantiles(draws, [m if side == "<" else 1 - m])[0]), m) for m in mass)
    return replace(row, limits=limits, flags=_merge([_SIDE_FLAG[side]], row.flags))


def _inherit_limit(
    row: Row,
    rows: Iterable[Row],
    draws: dict[str, Array],
    bounds: tuple[float, float],
    mass: tuple[float, ...],
) -> Row:
    """Give a derived quantity the limit of an unknown of which it is a monotone function.

    Not where it ends before its own bound, as a reflection coefficient does at that of a perfect bond: a limit on one
    side would hide the other.
    """
    if row.role != "derived" or row.limits:
        return row
    for other in rows:
        if other.limits and other.role != "derived":
            agreement = _rank_correlation(draws[row.name].ravel(), draws[other.name].ravel())
            if abs(agreement) > _MONOTONE:
                side = other.limits[0].side
                side = side if agreement > 0 else _FLIPPED[side]
                known = draws[row.name][~np.isnan(draws[row.name])]
                bound = bounds[0] if side == "<" else bounds[1]
                if math.isinf(bound) or touches(known, bound, side):
                    return _limited(row, known, side, mass)
    return row


def _rank_correlation(a: Array, b: Array) -> float:
    rank_a, rank_b = (np.argsort(np.argsort(x, kind="stable"), kind="stable").astype(float) for x in (a, b))
    return float(np.corrcoef(rank_a, rank_b)[0, 1])


def _converged(row: Row) -> list[str]:
    if row.ess is None or row.rhat is None:
        return []
    if math.isnan(row.ess) or math.isnan(row.rhat):
        return ["not converged"] if row.role != "derived" else []
    return ["not converged"] * (row.rhat > MOST_RHAT) + ["few effective draws"] * (row.ess < LEAST_ESS)


def _normal_row(row: Row, spread: float, allowed: tuple[float, float], mass: tuple[float, ...]) -> Row:
    from scipy import stats

    if not (math.isfinite(spread) and spread > 0):
        return replace(row, intervals=((math.nan, math.nan),) * len(mass), flags=("not determined",))
    normal = stats.norm(row.median, spread)
    row = replace(row, intervals=tuple((float(a), float(b)) for a, b in (normal.interval(m) for m in mass)))
    low, high = (abs(row.median - bound) < 1.96 * spread for bound in allowed)
    if low == high:
        return row
    side = "<" if low else ">"
    cut = view_of_distribution(normal, allowed).quantiles
    limits = tuple(Limit(side, float(cut([m if side == "<" else 1 - m])[0]), m) for m in mass)
    return replace(row, limits=limits, flags=(_SIDE_FLAG[side],))


def _within_ends(row: Row, prior: PriorView, spread: float) -> Row:
    """Cut normal intervals at the prior's ends, and flag an end that nature does not set and that is near."""
    ends = ((prior.low, prior.natural[0]), (prior.high, prior.natural[1]))
    near = any(end != natural and abs(row.median - end) < 1.96 * spread for end, natural in ends)
    cut = tuple((max(low, prior.low), min(high, prior.high)) for low, high in row.intervals)
    return replace(row, intervals=cut, flags=_merge(row.flags, ["prior edge"] * near))


def _merge(*groups: Iterable[str]) -> tuple[str, ...]:
    """Join flags, each once, in order."""
    return tuple(dict.fromkeys(flag for group in groups for flag in group))
