"""Summaries of results: one row of numbers per quantity, with limits where a bound is touched, and flags."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.inference.convergence import bulk_ess, split_rhat
from inverse.quantities import quantity
from inverse.rounding import decimal_place, format_limit, format_value
from inverse.unknowns import rebuild_prior

__all__ = ["MOST_RHAT", "LEAST_ESS", "Limit", "Row", "is_noise", "least_squares_rows", "posterior_rows"]

Array = NDArray[np.float64]

LEAST_ESS = 400.0
MOST_RHAT = 1.01
# A bound is touched where the density there, relative to its peak, is above that of a normal 1.96 deviations
# away: then the bound belongs to the interval of highest density that holds 95 %.
_TOUCHED = math.exp(-0.5 * 1.96**2)
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
        Name, unit and ``unknown`` or ``derived``.
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
        ``not converged``, ...
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
    def place(self) -> int:
        """Power of ten to which the numbers of this row are rounded."""
        half = (self.intervals[0][1] - self.intervals[0][0]) / 2
        if math.isfinite(half) and half > 0:
            return decimal_place(half)
        size = abs(self.median)
        return decimal_place(size, 6) if math.isfinite(size) and size > 0 else 0

    def statement(self, style: str = "plain", digits: int = 2) -> str:
        """Return the quantity in one phrase: ``60.03(12) nm``, ``52 +7 -5 GPa/nm`` or ``> 14 GPa/nm (95 %)``.

        Parameters
        ----------
        style : {"plain", "markdown", "latex"}
            As in `inverse.rounding.format_value`.
        digits : int
            Significant digits of the uncertainty, 1 or 2.

        Notes
        -----
        The uncertainty is half the first interval; its two sides are stated apart where they differ by more
        than a tenth. A limit is that of the last mass.
        """
        if self.limits:
            last = self.limits[-1]
            return format_limit(last.value, last.side, mass=last.mass, style=style, unit=self.unit)
        low, high = self.intervals[0]
        above, below = high - self.median, self.median - low
        lopsided = abs(above - below) > 0.1 * (above + below) / 2
        uncertainty = (above, below) if lopsided else (above + below) / 2
        return format_value(self.median, uncertainty, digits=digits, style=style, unit=self.unit)


def is_noise(name: str) -> bool:
    """Tell whether a quantity belongs to the noise model."""
    return name.startswith("noise.")


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
        known = _prior_quantiles(
            name, attrs.get("prior", ""), np.asarray(prior[name]) if name in prior else None
        )
        rows[name] = _posterior_row(name, attrs, values, known, tuple(mass))
    return tuple(_inherit_limit(row, rows.values(), draws, tuple(mass)) for row in rows.values())


def least_squares_rows(fit: Any, mass: Sequence[float]) -> tuple[Row, ...]:
    """Summarise a least-squares result by normal intervals, cut at a bound where one is known.

    Parameters
    ----------
    fit : Fit
        With ``names``, ``values``, ``sd``, ``units`` and ``flags`` in one order, a flag being texts joined by
        ``"; "``; the priors of its ``inversion`` are used where it has one.
    mass : sequence of float
        Masses of the intervals.

    Returns
    -------
    tuple of Row
        In the order of ``names``.
    """
    priors = fit.inversion.priors if hasattr(fit, "inversion") else {}
    rows = []
    for name, value, spread, unit, flag in zip(
        fit.names, fit.values, fit.sd, fit.units, fit.flags, strict=True
    ):
        allowed = _allowed(name)
        row = _normal_row(name, unit, float(value), float(spread), allowed, tuple(mass))
        if name in priors:
            row = _against_prior(row, _central_width(priors[name], allowed, mass[0]))
        rows.append(replace(row, flags=_merge(row.flags, filter(None, flag.split("; ")))))
    return tuple(rows)


@dataclass(frozen=True)
class _Prior:
    """What a row needs of a prior: bounds, quantiles, and which bounds nature sets."""

    low: float
    high: float
    natural: tuple[float, float]
    quantiles: Any


def _prior_quantiles(name: str, description: str, draws: Array | None) -> _Prior | None:
    natural = _allowed(name)
    if description:
        prior = rebuild_prior(json.loads(description))
        low, high = (float(x) for x in prior.support())
        low, high = max(low, natural[0]), min(high, natural[1])
        return _Prior(low, high, natural, _cut_quantiles(prior, (low, high)))
    if draws is not None:
        return _Prior(-math.inf, math.inf, natural, lambda p: quantiles(draws.ravel(), p))
    return None


def _cut_quantiles(prior: Any, allowed: tuple[float, float]) -> Any:
    start, stop = prior.cdf(allowed[0]), prior.cdf(allowed[1])
    return lambda p: prior.ppf(start + np.asarray(p) * (stop - start))


def _central_width(prior: Any, allowed: tuple[float, float], mass: float) -> float:
    low, high = _cut_quantiles(prior, allowed)([0.5 - mass / 2, 0.5 + mass / 2])
    return float(high - low)


def _allowed(name: str) -> tuple[float, float]:
    try:
        known = quantity(name)
    except ValueError:  # a shared unknown goes by a name of the user's
        return -math.inf, math.inf
    return known.low, known.high


def quantiles(draws: Array, probabilities: Sequence[float]) -> Array:
    """Quantiles of draws that may hold infinities (a perfect bond has infinite stiffness)."""
    at = np.asarray(probabilities, dtype=float)
    if np.all(np.isfinite(draws)):
        return np.quantile(draws, at)
    return np.quantile(draws, at, method="nearest")


def _posterior_row(
    name: str, attrs: dict[str, Any], values: Array, prior: _Prior | None, mass: tuple[float, ...]
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
        low, high = prior.quantiles([0.5 - mass[0] / 2, 0.5 + mass[0] / 2])
        row = _against_prior(row, float(high - low), float(prior.quantiles([0.5])[0]))
        row = _at_bounds(row, known, prior, mass)
    lost = values.size - known.size
    return replace(
        row, flags=_merge(row.flags, _converged(row), [f"{lost} draws are not a number"] * (lost > 0))
    )


def _diagnostics(values: Array) -> tuple[float, float]:
    return (bulk_ess(values), split_rhat(values)) if np.all(np.isfinite(values)) else (math.nan, math.nan)


def _central(draws: Array, mass: float) -> tuple[float, float]:
    low, high = quantiles(draws, [0.5 - mass / 2, 0.5 + mass / 2])
    return float(low), float(high)


def _against_prior(row: Row, width: float | None, centre: float | None = None) -> Row:
    """Add the prior's width, the ratio, and what they say."""
    if width is None:
        return row
    low, high = row.intervals[0]
    narrowed = width / (high - low) if high > low else math.nan
    flags: tuple[str, ...] = ()
    if centre is not None and math.isfinite(width) and width > 0:
        moved = abs(row.median - centre) / (width / 2)
        flags = ("prior only",) if narrowed < _NOT_NARROWED and moved < _NOT_MOVED else ()
        flags = ("far from prior",) if moved > 2.0 and math.isfinite(moved) else flags
    return replace(row, prior_width=width, narrowed=narrowed, flags=_merge(row.flags, flags))


def _at_bounds(row: Row, draws: Array, prior: _Prior, mass: tuple[float, ...]) -> Row:
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


def touches(draws: Array, bound: float, side: str) -> bool:
    """Tell whether a sample's density at a bound is not small against its peak.

    Parameters
    ----------
    draws : numpy.ndarray
        Shape (n,), finite or infinite.
    bound : float
        An end of the allowed range; an infinite one is never touched.
    side : {"<", ">"}
        ``<`` where the draws lie above the bound (an upper limit results), ``>`` where they lie below.

    Returns
    -------
    bool
        True above exp(-1.96^2 / 2) of the peak, both counted in bins an eighth of the central 68 % wide.
    """
    low, high = quantiles(draws, [0.16, 0.84])
    width = (high - low) / 8
    if not (math.isfinite(bound) and math.isfinite(width) and width > 0):
        return False
    distance = draws - bound if side == "<" else bound - draws
    counts = np.bincount((distance[distance < 64 * width] / width).astype(int).clip(0), minlength=1)
    # The bins between the quantiles hold 0.68 / 8 of the draws each on average, also where they are far away.
    peak = max(counts.max(), 0.68 / 8 * draws.size)
    return bool(counts[0] > _TOUCHED * peak)


def _limited(row: Row, draws: Array, side: str, mass: tuple[float, ...]) -> Row:
    limits = tuple(Limit(side, float(quantiles(draws, [m if side == "<" else 1 - m])[0]), m) for m in mass)
    return replace(row, limits=limits, flags=_merge([_SIDE_FLAG[side]], row.flags))


def _inherit_limit(row: Row, rows: Iterable[Row], draws: dict[str, Array], mass: tuple[float, ...]) -> Row:
    """Give a derived quantity the limit of an unknown of which it is a monotone function."""
    if row.role != "derived" or row.limits:
        return row
    for other in rows:
        if other.limits and other.role != "derived":
            agreement = _rank_correlation(draws[row.name].ravel(), draws[other.name].ravel())
            if abs(agreement) > _MONOTONE:
                side = other.limits[0].side
                known = draws[row.name][~np.isnan(draws[row.name])]
                return _limited(row, known, side if agreement > 0 else _FLIPPED[side], mass)
    return row


def _rank_correlation(a: Array, b: Array) -> float:
    rank_a, rank_b = (np.argsort(np.argsort(x, kind="stable"), kind="stable").astype(float) for x in (a, b))
    return float(np.corrcoef(rank_a, rank_b)[0, 1])


def _converged(row: Row) -> list[str]:
    if row.ess is None or row.rhat is None:
        return []
    unknown = math.isnan(row.ess) or math.isnan(row.rhat)
    if unknown:
        return ["not converged"] if row.role != "derived" else []
    return ["not converged"] if row.ess < LEAST_ESS or row.rhat > MOST_RHAT else []


def _normal_row(
    name: str, unit: str, value: float, spread: float, allowed: tuple[float, float], mass: tuple[float, ...]
) -> Row:
    from scipy import stats

    if not (math.isfinite(spread) and spread > 0):
        return Row(
            name, unit, "unknown", value, ((math.nan, math.nan),) * len(mass), flags=("not determined",)
        )
    normal = stats.norm(value, spread)
    intervals = tuple((float(a), float(b)) for a, b in (normal.interval(m) for m in mass))
    row = Row(name, unit, "unknown", value, intervals)
    low, high = value - allowed[0] < 1.96 * spread, allowed[1] - value < 1.96 * spread
    if low == high:
        return row
    side = "<" if low else ">"
    cut = _cut_quantiles(normal, allowed)
    limits = tuple(Limit(side, float(cut(m if side == "<" else 1 - m)), m) for m in mass)
    return replace(row, limits=limits, flags=(_SIDE_FLAG[side],))


def _merge(*groups: Iterable[str]) -> tuple[str, ...]:
    """Join flags, each once, in order."""
    return tuple(dict.fromkeys(flag for group in groups for flag in group))
