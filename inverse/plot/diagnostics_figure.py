"""Pictures of what the data added, of what a model leaves over, and of a profile likelihood."""

from __future__ import annotations

import json
import math
import textwrap
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.inference.checks.diagnostics import DataAdded, Learned, what_data_added
from inverse.inference.checks.model_checks import ChannelCheck, ModelCheck, check_model
from inverse.inference.checks.posterior_draws import sampled_values
from inverse.inference.minima.least_squares import Fit
from inverse.inference.minima.profile import LEVELS
from inverse.plot.style import COLUMN, MILLIMETRE, decade, new_figure, power_label, style
from inverse.report.unit_text import axis_label, unit_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["learned", "profile", "residuals"]

Array = NDArray[np.float64]

_SHARES = (("data", "0.25", ""), ("own prior", "white", ""), ("other priors", "0.85", "////"))
_CHARACTERS = 68


def learned(result: Any) -> Figure:
    """Draw what the data added: how far each unknown was narrowed, and whether data or priors make its width.

    Parameters
    ----------
    result : DataAdded, xarray.DataTree or Fit
        What `what_data_added` gave, or what it takes.

    Returns
    -------
    matplotlib.figure.Figure
        One column (85 mm) wide; a row for each unknown. Left: prior width over posterior width, with the
        information in bits. Right: shares of the posterior variance. Below: what the data cannot separate.

    Raises
    ------
    ValueError
        As `what_data_added`.
    """
    added = result if isinstance(result, DataAdded) else what_data_added(result)
    lines = [line for s in added.sentences for line in textwrap.wrap(s, _CHARACTERS)]
    rows = added.unknowns[::-1]
    with style():
        height = 22 + 5.5 * len(rows) + 3 * len(lines)
        figure = new_figure(COLUMN, height * MILLIMETRE)
        left, right = figure.subplots(1, 2, sharey=True)
        _draw_narrowing(left, rows)
        _draw_shares(right, rows)
        left.set_yticks(range(len(rows)), [_broken(u.name) for u in rows], fontsize=6)
        handles, labels = right.get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside upper center", ncols=3, handlelength=1.2)
        if lines:
            figure.supxlabel("\n".join(lines), x=0.01, ha="left", fontsize=6)
    return figure


def residuals(result: Any) -> Figure:
    """Draw what a model leaves over: residuals with predictive bands, and the autocorrelation of what is left.

    Parameters
    ----------
    result : ModelCheck, xarray.DataTree or Fit
        What `check_model` gave, or what it takes.

    Returns
    -------
    matplotlib.figure.Figure
        One column wide, two panels per channel; the verdict stands above.

    Raises
    ------
    ValueError
        As `check_model`.
    """
    check = result if isinstance(result, ModelCheck) else check_model(result)
    lines = textwrap.wrap(check.verdict, _CHARACTERS)
    with style():
        height = 6 + 3 * len(lines) + 70 * len(check.channels)
        figure = new_figure(COLUMN, height * MILLIMETRE)
        axes = figure.subplots(2 * len(check.channels), 1, squeeze=False)[:, 0]
        for channel, above, below in zip(check.channels, axes[::2], axes[1::2], strict=True):
            _draw_residual(above, channel)
            _draw_autocorrelation(below, channel)
        axes[0].legend(loc="lower left", bbox_to_anchor=(0, 1), ncols=3, handlelength=1.4, borderaxespad=0.1)
        figure.suptitle("\n".join(lines), fontsize=6.5, x=0.01, ha="left")
        figure.align_ylabels(axes)
    return figure


def profile(profiled: Any, result: Any = None) -> Figure:
    """Draw a profile likelihood beside the posterior.

    Parameters
    ----------
    profiled : xarray.Dataset
        From `inverse.profile`.
    result : xarray.DataTree or Fit, optional
        Its posterior density is drawn too, normal for a `Fit`.

    Returns
    -------
    matplotlib.figure.Figure
        One column wide. Likelihood relative to its maximum; dashed where the 68 % and 95 % likelihood-ratio
        intervals end.

    Raises
    ------
    ValueError
        If `profiled` is not a profile, or `result` has no such unknown.
    """
    if "deviance" not in getattr(profiled, "data_vars", ()):
        raise ValueError(f"plot.profile takes what inverse.profile gave, not {type(profiled).__name__}.")
    name = profiled.attrs["name"]
    value = np.asarray(profiled["value"], dtype=float)
    with style():
        figure = new_figure(COLUMN, 58 * MILLIMETRE)
        ax = figure.subplots()
        exponent = decade(value)
        factor = 10.0**-exponent
        if result is not None:
            x, density = _density(result, name, value)
            ax.fill_between(
                x * factor, density / density.max(), color="0.85", linewidth=0, label="posterior density"
            )
        ax.plot(
            value * factor, np.exp(-profiled["deviance"] / 2), ".-", color="black", label="profile likelihood"
        )
        for mass, level in LEVELS.items():
            height = math.exp(-level / 2)
            for low, high in json.loads(profiled.attrs[f"interval_{100 * mass:.0f}"]):
                ends = np.clip([low, high], value[0], value[-1]) * factor
                ax.plot(ends, [height, height], "--", color="black", linewidth=0.7)
            ax.annotate(
                f"{100 * mass:.0f} %",
                (1, height),
                xycoords=("axes fraction", "data"),
                ha="right",
                va="bottom",
            )
        ax.set_xlim(value[0] * factor, value[-1] * factor)
        ax.set_ylim(0, 1.08)
        ax.set_xlabel(power_label(name, unit_text(profiled.attrs["units"]), exponent))
        ax.set_ylabel("relative to maximum")
        figure.legend(loc="outside upper center", ncols=2)
    return figure


def _draw_narrowing(ax: Axes, rows: Sequence[Learned]) -> None:
    narrowed = [u.narrowed for u in rows]
    ax.barh(range(len(rows)), [max(n, 1.0) for n in narrowed], height=0.6, color="0.6", left=0)
    for i, (u, n) in enumerate(zip(rows, narrowed, strict=True)):
        ax.annotate(
            f"{u.bits:.1f} bits",
            (max(n, 1.0), i),
            (2, 0),
            textcoords="offset points",
            va="center",
            fontsize=6,
        )
    ax.set_xscale("log")
    ax.set_xlim(0.8, 30 * max(*narrowed, 1.0))
    ax.set_xlabel("prior / posterior width", fontsize=6.5)
    ax.tick_params(axis="y", length=0)


def _draw_shares(ax: Axes, rows: Sequence[Learned]) -> None:
    known = [(i, u) for i, u in enumerate(rows) if not math.isnan(u.data_share)]
    at = [i for i, _ in known]
    data = np.array([u.data_share for _, u in known])
    own = np.array([dict(u.prior_shares).get(u.name, 0.0) for _, u in known])
    start = np.zeros(len(known))
    for (label, colour, hatch), width in zip(_SHARES, (data, own, 1 - data - own), strict=True):
        ax.barh(
            at, 100 * width, left=100 * start, height=0.6, color=colour, hatch=hatch, edgecolor="black",
            linewidth=0.5, label=label,
        )  # fmt: skip
        start = start + width
    ax.set_xlim(0, 100)
    ax.set_xlabel("share of variance (%)", fontsize=6.5)
    ax.tick_params(axis="y", length=0)


def _broken(name: str) -> str:
    place, dot, field = name.partition(".")
    return f"{place}\n.{field.replace('_', ' ')}" if dot and len(name) > 14 else name


def _draw_residual(ax: Axes, c: ChannelCheck) -> None:
    middle = c.bands[2]
    data = c.residual
    exponent = decade(np.concatenate([data, c.bands[4] - middle]))
    factor = 10.0**-exponent
    for low, high, grey, label in ((0, 4, "0.85", "95 % band"), (1, 3, "0.68", "68 % band")):
        ax.fill_between(
            c.delay, (c.bands[low] - middle) * factor, (c.bands[high] - middle) * factor, color=grey, linewidth=0,
            label=label,
        )  # fmt: skip
    ax.plot(c.delay, data * factor, ".", color="black", markersize=1.8, label="residual")
    ax.axhline(0, color="black", linewidth=0.5)
    ax.set_xlabel(axis_label("delay", "ps"))
    ax.set_ylabel(power_label("residual", unit_text(c.unit), exponent))


def _draw_autocorrelation(ax: Axes, c: ChannelCheck) -> None:
    lags = np.arange(1, c.autocorrelation.size + 1)
    ax.bar(lags, c.autocorrelation, width=0.5, color="0.3")
    limit = 1.96 / np.sqrt(c.delay.size)
    for side in (-limit, limit):
        ax.axhline(side, color="black", linestyle=(0, (4, 2)), linewidth=0.7)
    ax.axhline(0, color="black", linewidth=0.5)
    largest = max(0.3, 1.2 * float(np.abs(c.autocorrelation).max()))
    ax.set_ylim(-largest, largest)
    ax.set_xlabel("lag (points)")
    ax.set_ylabel("autocorrelation")


def _density(result: Any, name: str, value: Array) -> tuple[Array, Array]:
    """Return a grid over the profile's range and the posterior density there, to a factor."""
    x = np.linspace(value[0], value[-1], 400)
    if isinstance(result, Fit):
        if name not in result.names:
            raise ValueError(f"The fit has no unknown '{name}'; it has {', '.join(result.names)}.")
        i = result.names.index(name)
        return x, np.exp(-0.5 * ((x - result.values[i]) / result.sd[i]) ** 2)
    posterior = result["posterior"].to_dataset()
    if name not in posterior:
        raise ValueError(f"The posterior has no '{name}'; it has {', '.join(map(str, posterior.data_vars))}.")
    counts, edges = np.histogram(sampled_values(result, (name,)), bins=40, range=(value[0], value[-1]))
    return np.repeat(edges, 2)[1:-1], np.repeat(counts, 2).astype(float)
