"""Figures of a comparison of process splits, and the map of a wafer."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.plot.style import COLUMN, MILLIMETRE, new_figure, style
from inverse.report.unit_text import axis_label
from inverse.study.splits.comparison import Comparison, Interval, Pair
from inverse.study.splits.data import Site
from inverse.study.splits.wording import chance, margin_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["splits", "split_differences", "wafer_map"]

Array = NDArray[np.float64]

_ROW = 3.4 * MILLIMETRE
_SITE, _WAFER, _SPLIT = "0.6", "0.35", "black"
_MAP = "cividis"
_DECADES = 30.0  # ratios that differ by more are drawn on a logarithmic axis
_TITLE = 52  # letters that fit over a column


def splits(comparison: Comparison) -> Figure:
    """Draw sites, wafers and splits with their 95 % intervals, one below the other.

    Parameters
    ----------
    comparison : Comparison

    Returns
    -------
    matplotlib.figure.Figure
        Splits black and thick, wafers dark with open circles (drawn towards their split), sites light, each by itself;
        an arrow where a site sets only a limit.

    Raises
    ------
    ValueError
        If `comparison` is not what `compare_splits` returned.
    """
    _check(comparison)
    rows = _rows(comparison)
    with style():
        figure = new_figure(COLUMN, 14 * MILLIMETRE + _ROW * len(rows))
        ax = figure.add_subplot()
        if comparison.question.logarithmic:
            ax.set_xscale("log")
        _limits(ax, comparison, [given for _, given, site in rows if site is None or not site.open_side])
        for y, (kind, given, site) in enumerate(rows):
            _row(ax, y, kind, given, site)
        ax.set_yticks(range(len(rows)), _names(comparison), fontsize=6)
        for label, (kind, _, _) in zip(ax.get_yticklabels(), rows, strict=True):
            label.set_fontweight("bold" if kind == "split" else "normal")
        ax.set_ylim(len(rows) - 0.4, -0.6)
        ax.tick_params(axis="y", length=0)
        ax.set_xlabel(axis_label(comparison.question.quantity, comparison.unit))
        _plain_ticks(ax)
    return figure


def split_differences(comparison: Comparison) -> Figure:
    """Draw the posterior density of each pair's ratio (or difference), with the margin marked.

    Parameters
    ----------
    comparison : Comparison

    Returns
    -------
    matplotlib.figure.Figure
        One panel a pair, the probably better split over the other. The vertical line is no difference, the grey band
        what lies within the margin, the filled part the 95 % interval.

    Raises
    ------
    ValueError
        If `comparison` is not what `compare_splits` returned.
    """
    _check(comparison)
    pairs = [p if p.better >= 0.5 else comparison.pair(p.second, p.first) for p in comparison.pairs]
    with style():
        figure = new_figure(COLUMN, 8 * MILLIMETRE + 23 * MILLIMETRE * len(pairs))
        axes = np.atleast_1d(figure.subplots(len(pairs), 1))
        for ax, pair in zip(axes, pairs, strict=True):
            _difference(ax, comparison, pair)
        axes[-1].set_xlabel(_difference_label(comparison))
    return figure


def wafer_map(
    results: Any, quantity: str, *, wafer: str | None = None, radius: float | None = None
) -> Figure:
    """Draw a quantity over a wafer: its median, and beside it its uncertainty.

    Parameters
    ----------
    results : xarray.Dataset
        Of `batch`, with columns ``x`` and ``y`` (mm) of the table.
    quantity : str
    wafer : str, optional
        Which wafer, if the results hold several.
    radius : float, optional
        Of the wafer's rim, mm.

    Returns
    -------
    matplotlib.figure.Figure
        The colour scale grows in lightness throughout, so that it reads in grey and by colour-blind eyes. A cross marks
        a site without a result.

    Raises
    ------
    ValueError
        If there are no coordinates, no such quantity or wafer, or several wafers to choose from.
    """
    chosen = _one_wafer(results, quantity, wafer)
    x, y = (np.asarray(chosen[c].values, dtype=float) for c in ("x", "y"))
    low, median, high = np.quantile(
        np.asarray(chosen[quantity].values, dtype=float), (0.16, 0.5, 0.84), axis=1
    )
    unit = str(chosen[quantity].attrs.get("units", "1"))
    with style():
        figure = new_figure(2 * COLUMN, 0.85 * COLUMN)
        axes = figure.subplots(1, 2, sharex=True, sharey=True)
        for ax, values, text in zip(
            axes, (median, (high - low) / 2), (quantity, "half the 68 % interval"), strict=True
        ):
            _map(figure, ax, x, y, values, axis_label(text, unit), radius)
        axes[0].set_ylabel("y (mm)")
    return figure


def _check(comparison: Any) -> None:
    if not isinstance(comparison, Comparison):
        raise ValueError(f"give what compare_splits returned, not a {type(comparison).__name__}.")


def _rows(made: Comparison) -> list[tuple[str, Interval, Site | None]]:
    out: list[tuple[str, Interval, Site | None]] = []
    for split in made.splits:
        out.append(("split", split.centre, None))
        for wafer in (w for w in made.wafers if w.split == split.name):
            out.append(("wafer", wafer.centre, None))
            own = [s for s in made.sites if (s.split, s.wafer) == (split.name, wafer.wafer)]
            out.extend(("site", _of_site(site), site) for site in own)
    return out


def _names(made: Comparison) -> list[str]:
    out: list[str] = []
    for split in made.splits:
        out.append(split.name)
        for wafer in (w for w in made.wafers if w.split == split.name):
            out.append(f"wafer {wafer.wafer}")
            out.extend(s.name for s in made.sites if (s.split, s.wafer) == (split.name, wafer.wafer))
    return out


def _of_site(site: Site) -> Interval:
    low, median, high = np.quantile(site.draws, (0.025, 0.5, 0.975))
    return Interval(float(median), float(low), float(high))


def _limits(ax: Axes, made: Comparison, rows: list[Interval]) -> None:
    """Show all splits and wafers, and of the sites what does not squeeze them; leave room for arrows."""
    low, high = min(r.low for r in rows), max(r.high for r in rows)
    medians = [r.median for r in rows]
    if made.question.logarithmic:
        low, high = max(low, min(medians) / 4), min(high, max(medians) * 4)
        room = [2.0 if any(side in s.open_side for s in made.sites) else 1.05 for side in "<>"]
        ax.set_xlim(low / room[0], high * room[1])
    else:
        pad = 0.03 * (high - low)
        ax.set_xlim(low - pad, high + pad)


def _row(ax: Axes, y: int, kind: str, given: Interval, site: Site | None) -> None:
    colour, width, marker, size = {
        "split": (_SPLIT, 2.2, "D", 4.0),
        "wafer": (_WAFER, 1.0, "o", 3.0),
        "site": (_SITE, 0.8, "|", 4.0),
    }[kind]
    if site is not None and site.open_side:
        _limit(ax, y, given, site.open_side, colour)
        return
    ax.plot([given.low, given.high], [y, y], color=colour, linewidth=width, solid_capstyle="butt")
    face = "white" if kind == "wafer" else colour
    ax.plot(
        given.median, y, marker=marker, color=colour, markerfacecolor=face, markersize=size, linestyle="none"
    )


def _limit(ax: Axes, y: int, given: Interval, open_side: str, colour: str) -> None:
    """Draw an arrow from the limit of a site to where it sets none; its median is the prior's."""
    arrow = {"arrowstyle": "->", "color": colour, "linewidth": 0.8, "shrinkA": 0, "shrinkB": 0}
    left, right = ax.get_xlim()
    for side in open_side:
        end, start = (left, given.high) if side == "<" else (right, given.low)
        start = float(np.clip(start, left, right))
        ax.plot(start, y, marker="|", color=colour, markersize=4.0, linestyle="none")
        ax.annotate("", (end, y), (start, y), arrowprops=arrow)


def _plain_ticks(ax: Axes) -> None:
    """Write a short logarithmic axis in plain numbers."""
    if ax.get_xscale() != "log":
        return
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    low, high = ax.get_xlim()
    wide = high / low
    subs = (1, 1.5, 2, 3, 4, 5, 7) if wide < 6 else (1, 2, 5) if wide < 100 else (1,)
    ax.xaxis.set_major_locator(LogLocator(subs=subs))
    ax.xaxis.set_major_formatter(FuncFormatter(lambda value, place: f"{value:g}"))
    ax.xaxis.set_minor_formatter(NullFormatter())


def _difference(ax: Axes, made: Comparison, pair: Pair) -> None:
    a, b = (made.names.index(n) for n in (pair.first, pair.second))
    apart = made.posterior.centre[:, a] - made.posterior.centre[:, b]
    x, density = _density(apart)
    logarithmic, least = made.question.logarithmic, made.question.least
    shown = np.exp(x) if logarithmic else x
    none, band = (1.0, np.exp([-least, least])) if logarithmic else (0.0, np.array([-least, least]))
    if least > 0:
        ax.axvspan(*band, color="0.85", linewidth=0)
    ax.axvline(none, color="black", linewidth=0.8, linestyle="--")
    ax.plot(shown, density, color="black")
    given = pair.ratio or pair.difference
    inside = (shown >= given.low) & (shown <= given.high)
    ax.fill_between(shown[inside], density[inside], color="0.55", linewidth=0)
    ax.set_title(_title(made, pair), fontsize=7, loc="left")
    ax.set_yticks([])
    ax.set_ylim(0, None)
    low, high = min(shown[0], band[0], none), max(shown[-1], band[1], none)
    pad = 0.03 * (high - low)
    ax.set_xlim(low - pad * (low == none and low > pad), high + pad * (high == none))
    if logarithmic and high > _DECADES * low:
        ax.set_xscale("log")
        _plain_ticks(ax)


def _title(made: Comparison, pair: Pair) -> str:
    """Name the pair and its verdict, on two lines if the names are long."""
    sign = "/" if made.question.logarithmic else "−"
    names = f"{pair.first} {sign} {pair.second}:"
    said = "decided" if pair.decided else "undecided"
    odds = f"P({made.question.better}) {chance(pair.better)}, {said}"
    return f"{names}{' ' if len(names) + len(odds) < _TITLE else chr(10)}{odds}"


def _difference_label(made: Comparison) -> str:
    name, question = made.question.quantity, made.question
    text = f"ratio of {name}" if question.logarithmic else axis_label(f"difference of {name}", made.unit)
    return f"{text}; light band: within {margin_text(made)}" if question.margin > 0 else text


def _density(draws: Array) -> tuple[Array, Array]:
    """Smooth draws by Silverman's rule (from memory), counted on a fine grid first."""
    low, high = np.quantile(draws, (0.001, 0.999))
    pad = 0.1 * (high - low)
    edges = np.linspace(low - pad, high + pad, 401)
    counts = np.histogram(draws, edges)[0].astype(float)
    middle = (edges[1:] + edges[:-1]) / 2
    spread = min(draws.std(), float(np.subtract(*np.quantile(draws, (0.75, 0.25)))) / 1.349)
    width = 0.9 * spread * draws.size**-0.2
    kernel = np.exp(-0.5 * ((middle[:, None] - middle) / width) ** 2)
    density = kernel @ counts
    return middle, density / density.max()


def _one_wafer(results: Any, quantity: str, wafer: str | None) -> Any:
    missing = [c for c in ("x", "y") if c not in results.coords]
    if missing:
        raise ValueError(
            f"the results have no coordinate {' and '.join(missing)}; give batch a table with columns x and y."
        )
    if quantity not in results.data_vars:
        raise ValueError(
            f"the results hold no '{quantity}'; they hold {', '.join(map(str, results.data_vars))}."
        )
    if "wafer" not in results.coords:
        return results
    names = list(dict.fromkeys(map(str, results["wafer"].values)))
    if wafer is None and len(names) > 1:
        raise ValueError(
            f"the results hold {len(names)} wafers ({', '.join(names[:8])}); give wafer= one of them."
        )
    chosen = names[0] if wafer is None else wafer
    if chosen not in names:
        raise ValueError(f"there is no wafer '{chosen}'; the results hold {', '.join(names[:8])}.")
    return results.isel(site=np.flatnonzero(results["wafer"].values.astype(str) == chosen))


def _map(
    figure: Figure, ax: Axes, x: Array, y: Array, values: Array, text: str, radius: float | None
) -> None:
    known = np.isfinite(values)
    drawn = ax.scatter(
        x[known], y[known], c=values[known], cmap=_MAP, s=42, edgecolors="black", linewidths=0.4
    )
    ax.scatter(x[~known], y[~known], marker="x", color="black", s=22, linewidths=0.9, label="no result")
    if not known.all():
        ax.legend(loc="lower left", fontsize=6, frameon=False, handletextpad=0.1, borderaxespad=0.1)
    figure.colorbar(drawn, ax=ax, label=text, shrink=0.85)
    if radius is not None:
        from matplotlib.patches import Circle

        ax.add_patch(Circle((0, 0), radius, fill=False, linewidth=0.8, edgecolor="0.4"))
        ax.set_xlim(-1.05 * radius, 1.05 * radius)
        ax.set_ylim(-1.05 * radius, 1.05 * radius)
    else:
        ax.margins(0.1)
    ax.set_aspect("equal")
    ax.set_xlabel("x (mm)")
