"""Tables for people: results, constants with their sources, and uncertainty budgets.

Every table shows itself at the prompt and in a notebook, and gives Markdown, LaTeX and plain data on request.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

from inverse.description.quantities import quantity
from inverse.report.header import header_lines
from inverse.report.rounding import fixed, format_limit, format_range, format_value, format_width
from inverse.report.sheet import Rendered, Sheet
from inverse.report.summary import Row, least_squares_rows, posterior_rows

__all__ = [
    "BudgetTable",
    "Constant",
    "ConstantsTable",
    "Table",
    "budget_table",
    "constants_table",
    "format_limit",
    "format_value",
    "table",
]

_ROLES = ("all", "unknown", "noise", "derived")
_SMALL_SHARE = 1e-3
_FORMATS = ("plain", "markdown", "latex", "html", "dict")


@dataclass(frozen=True, repr=False)
class Table(Rendered):
    """Quantities with intervals, and what the data added to their priors.

    Attributes
    ----------
    rows : tuple of Row
        One per quantity.
    mass : tuple of float
        Masses of the central intervals.
    header : tuple of str
        What was fitted and how well it converged.
    """

    rows: tuple[Row, ...]
    mass: tuple[float, ...]
    header: tuple[str, ...]

    def __getitem__(self, name: str) -> Row:
        """Return the row of one quantity.

        Raises
        ------
        ValueError
            If the table has no such quantity.
        """
        for row in self.rows:
            if row.name == name:
                return row
        raise ValueError(f"The table has no '{name}'; it holds {', '.join(row.name for row in self.rows)}.")

    def sheet(self) -> Sheet:
        """Return the texts in rows and columns."""
        intervals = tuple(f"{_percent(m)} interval" for m in self.mass)
        prior = f"prior {_percent(self.mass[0])} width"
        columns = ("quantity", "unit", "median", *intervals, prior, "narrowed", "flags")
        return Sheet(columns, tuple(_cells(row) for row in self.rows), self.header)

    def to_dict(self) -> dict[str, Any]:
        """Return plain data: ``mass``, ``header`` and ``rows`` (a list of mappings)."""
        return {
            "mass": list(self.mass),
            "header": list(self.header),
            "rows": [asdict(row) for row in self.rows],
        }


def table(
    result: Any,
    *,
    mass: Sequence[float] = (0.68, 0.95),
    format: str | None = None,
    include: str | Sequence[str] = "all",
) -> Any:
    """Summarise a posterior or a least-squares result.

    Parameters
    ----------
    result : xarray.DataTree or least-squares result
        What `Inversion.sample_posterior`, `Inversion.least_squares` or `load` gave.
    mass : sequence of float
        Masses of the central (equal-tailed) intervals. Where a posterior touches a bound, one-sided limits of
        the same masses stand in their place.
    format : {None, "plain", "markdown", "latex", "html", "dict"}
        None gives the `Table`, the others what it would write.
    include : {"all", "unknown", "noise", "derived"} or sequence of str
        Which quantities: a role, or names.

    Returns
    -------
    Table or str or dict
        The table, or its text or data.

    Raises
    ------
    ValueError
        If `result` is neither kind, or `mass`, `format` or `include` is not understood.

    Notes
    -----
    "narrowed" is the width of the prior's central interval over the posterior's. Flags:
    ``prior only``, the posterior is less than a tenth narrower than its prior and has not moved;
    ``prior edge``, it leans on a bound of the prior that nature does not set;
    ``far from prior``, its median lies in the outer 5 % of the prior, where the prior's density is low;
    ``not converged``, its split R-hat is above 1.01 (Vehtari et al. 2021);
    ``few effective draws``, its bulk effective sample size is under 400 (the same, from memory);
    ``constants ± 4.7 nm``, what is not known of the constants taken as known would add this, more than half of the
    first interval, which does not hold it (`budget` says which constants; those without a stated spread count with
    this project's default).
    """
    masses = _check_mass(mass)
    if format is not None and format not in _FORMATS:
        raise ValueError(f"format = {format!r}; expected None or one of {', '.join(_FORMATS)}.")
    rows = posterior_rows(result, masses) if _is_tree(result) else _fit_rows(result, masses)
    made = Table(_chosen(rows, include), masses, header_lines(result, rows))
    return made if format is None else _written(made, format)


@dataclass(frozen=True)
class Constant:
    """A number that was taken as known.

    Attributes
    ----------
    place, field : str
        Where it stands, such as ``Al`` and ``heat_capacity``.
    value : float
        In `unit`.
    unit, source : str
        Unit, and where the number comes from.
    spread : float
        Standard uncertainty in `unit`; 0 where none is stated.
    """

    place: str
    field: str
    value: float
    unit: str
    source: str
    spread: float = 0.0


@dataclass(frozen=True, repr=False)
class ConstantsTable(Rendered):
    """The constants a result rests on.

    Attributes
    ----------
    rows : tuple of Constant
        One per constant.
    """

    rows: tuple[Constant, ...]

    def sheet(self) -> Sheet:
        """Return the texts in rows and columns."""
        cells = tuple((c.place, c.field, _constant_value(c), c.unit, c.source) for c in self.rows)
        return Sheet(("place", "constant", "value", "unit", "source"), cells, ("Constants taken as known",))

    def to_dict(self) -> dict[str, Any]:
        """Return plain data: ``rows``, a list of mappings."""
        return {"rows": [asdict(row) for row in self.rows]}


def constants_table(result: Any) -> ConstantsTable:
    """List the constants a result was computed with, each with its source.

    Parameters
    ----------
    result : xarray.DataTree
        With the JSON attribute ``inverse``, whose ``constants`` holds mappings with place, field, value,
        unit, source and spread.

    Returns
    -------
    ConstantsTable
        In the order of the stack.

    Raises
    ------
    ValueError
        If the result carries no list of constants.
    """
    listed = json.loads(getattr(result, "attrs", {}).get("inverse", "{}")).get("constants")
    if listed is None:
        raise ValueError(
            f"The {type(result).__name__} carries no list of constants; give what sample_posterior or load returned."
        )
    return ConstantsTable(tuple(Constant(**entry) for entry in listed))


@dataclass(frozen=True, repr=False)
class BudgetTable(Rendered):
    """Uncertainty budgets.

    Attributes
    ----------
    budget : dict
        Quantity -> {source: standard uncertainty}.
    units : dict
        Quantity -> unit.
    stated : dict
        Quantity -> standard uncertainty of the result itself, where it is known.
    """

    budget: dict[str, dict[str, float]]
    units: dict[str, str]
    stated: dict[str, float]

    def total(self, name: str) -> float:
        """Return the root sum of squares of a quantity's contributions."""
        return math.hypot(*self.budget[name].values())

    def sheet(self) -> Sheet:
        """Return the texts in rows and columns."""
        cells = [row for name in self.budget for row in self._block(name)]
        columns = ("quantity", "source", "standard uncertainty", "unit", "share of variance")
        notes = ("Uncertainty budget: the combined value is the root sum of squares (JCGM 100, 5.1.2).",)
        return Sheet(columns, tuple(cells), notes)

    def to_dict(self) -> dict[str, Any]:
        """Return plain data: ``budget``, ``units``, ``stated`` and ``total``."""
        return {**asdict(self), "total": {name: self.total(name) for name in self.budget}}

    def _block(self, name: str) -> list[tuple[str, ...]]:
        unit, total = self.units.get(name, ""), self.total(name)
        ordered = sorted(self.budget[name].items(), key=lambda item: -item[1])
        small = [u for _, u in ordered if u**2 < _SMALL_SHARE * total**2]
        if len(small) > 1:
            together = f"{len(small)} others, each under {_percent(_SMALL_SHARE)}"
            ordered = [*ordered[: -len(small)], (together, math.hypot(*small))]
        rows: list[tuple[str, ...]]
        rows = [(name, source, format_width(u), unit, _share(u, total)) for source, u in ordered]
        rows.append((name, "combined", format_width(total), unit, _share(total, total)))
        if name in self.stated:
            rows.append((name, "of the result itself", format_width(self.stated[name]), unit, ""))
        return rows


def budget_table(
    budget: Mapping[str, Mapping[str, float]],
    *,
    units: Mapping[str, str] | None = None,
    stated: Mapping[str, float] | None = None,
) -> BudgetTable:
    """Present uncertainty budgets: each source's standard uncertainty, their combination and shares.

    Parameters
    ----------
    budget : mapping
        Quantity -> {source: standard uncertainty}, every number not negative, in the quantity's unit.
    units : mapping, optional
        Quantity -> unit. By default that of the quantity a name ends in, none for other names.
    stated : mapping, optional
        Quantity -> standard uncertainty of the result itself, shown below the combination: the two differ
        where the sources are not independent or the model is not linear.

    Returns
    -------
    BudgetTable
        Sources in falling order; those under 0.1 % of the variance stand in one row together.

    Raises
    ------
    ValueError
        If a budget is empty or a standard uncertainty is negative or not a number.
    """
    if not isinstance(budget, Mapping) or not all(
        isinstance(sources, Mapping) for sources in budget.values()
    ):
        raise ValueError(
            f"budget_table got a {type(budget).__name__}; give a mapping of quantities to mappings of sources, as "
            "budget returns it."
        )
    for name, sources in budget.items():
        if not sources:
            raise ValueError(f"The budget of '{name}' is empty; give at least one source.")
        for source, u in sources.items():
            if not u >= 0:
                raise ValueError(
                    f"The budget of '{name}' has {source} = {u!r}; give a standard uncertainty, >= 0."
                )
    plain = {name: {str(s): float(u) for s, u in sources.items()} for name, sources in budget.items()}
    known = {name: _unit(name) for name in plain} | dict(units or {})
    return BudgetTable(plain, known, {k: float(v) for k, v in (stated or {}).items()})


def _unit(name: str) -> str:
    try:
        unit = quantity(name).unit
    except ValueError:
        return ""
    return "" if unit == "1" else unit


def _is_tree(result: Any) -> bool:
    return hasattr(result, "children") and "posterior" in result.children


def _fit_rows(result: Any, mass: tuple[float, ...]) -> tuple[Row, ...]:
    if not all(hasattr(result, field) for field in ("values", "sd", "flags", "minima", "inversion")):
        raise ValueError(
            f"table got {type(result).__name__}; expected a DataTree with a group 'posterior' "
            "or the result of Inversion.least_squares."
        )
    return least_squares_rows(result, mass)


def _check_mass(mass: Sequence[float]) -> tuple[float, ...]:
    masses = tuple(map(float, mass)) if isinstance(mass, Sequence) else ()
    if not masses or not all(0 < m < 1 for m in masses):
        raise ValueError(f"mass = {mass!r}; expected probabilities between 0 and 1, such as (0.68, 0.95).")
    return masses


def _chosen(rows: tuple[Row, ...], include: str | Sequence[str]) -> tuple[Row, ...]:
    if isinstance(include, str):
        if include not in _ROLES:
            raise ValueError(
                f"include = {include!r}; expected one of {', '.join(_ROLES)}, or a list of names."
            )
        return tuple(row for row in rows if include in ("all", row.role))
    by_name = {row.name: row for row in rows}
    strange = [name for name in include if name not in by_name]
    if strange:
        raise ValueError(f"include names {', '.join(strange)}; the result holds {', '.join(by_name)}.")
    return tuple(by_name[name] for name in include)


def _written(made: Table, format: str) -> str | dict[str, Any]:
    if format == "dict":
        return made.to_dict()
    writers = {
        "plain": made.sheet().plain,
        "markdown": made.markdown,
        "latex": made.latex,
        "html": made.sheet().html,
    }
    return writers[format]()


def _percent(mass: float) -> str:
    return f"{mass * 100:.4g} %"


def _cells(row: Row) -> tuple[str, ...]:
    place = row.place
    if row.limits:
        intervals = tuple(
            format_limit(x.value, x.side, mass=x.mass, width=row.half_width) for x in row.limits
        )
    else:
        intervals = tuple(_interval(low, high, place) for low, high in row.intervals)
    prior = "" if row.prior_width is None else format_width(row.prior_width)
    narrowed = "" if row.narrowed is None else format_width(row.narrowed)
    return (row.name, row.unit, fixed(row.median, place), *intervals, prior, narrowed, ", ".join(row.flags))


def _interval(low: float, high: float, place: int) -> str:
    return "not determined" if math.isnan(low) else format_range(low, high, place)


def _constant_value(constant: Constant) -> str:
    return format_value(constant.value, constant.spread) if constant.spread > 0 else f"{constant.value:.6g}"


def _share(part: float, total: float) -> str:
    return f"{100 * (part / total) ** 2:.1f} %" if total > 0 else ""
