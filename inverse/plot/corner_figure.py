"""Corner plot of a posterior, with its priors."""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.unknowns import rebuild_prior
from inverse.plot.style import COLUMN, MILLIMETRE, decade, new_figure, power_label, style
from inverse.report.unit_text import unit_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["LEVELS", "corner"]

Array = NDArray[np.float64]

LEVELS = (0.68, 0.95)
_QUANTILES = (0.16, 0.5, 0.84)
_BINS = 30
_LONG = 14
_PANEL = 22 * MILLIMETRE
_MARGIN = 19 * MILLIMETRE
_FILLS = ("white", "0.85", "0.6")


def corner(result: Any, *, names: Sequence[str] | None = None) -> Figure:
    """Draw the marginal distributions of a posterior, one by one and in pairs.

    Parameters
    ----------
    result : xarray.DataTree
        With a group ``posterior`` (dims chain, draw).
    names : sequence of str, optional
        Unknowns or derived quantities; by default every unknown that does not describe the noise.

    Returns
    -------
    matplotlib.figure.Figure
        85 mm wide for up to three quantities, 22 mm more for each further one. The contours hold 68 % and
        95 % of the draws of a pair, counted in bins and smoothed by one bin; dashed lines are the 16, 50 and
        84 % quantiles, dotted lines the priors.

    Raises
    ------
    ValueError
        If there is no posterior, a name is not in it, or a quantity does not vary or is not finite.
    """
    import corner as corner_package

    dataset = _posterior(result)
    chosen = _names(dataset, names)
    samples = np.column_stack([np.asarray(dataset[name], dtype=float).ravel() for name in chosen])
    _check_samples(samples, chosen)
    exponents = [decade(np.quantile(column, [0.16, 0.84])) for column in samples.T]
    samples = samples * 10.0 ** -np.array(exponents)
    ranges = [_range(column) for column in samples.T]
    with style():
        size = max(COLUMN, _PANEL * len(chosen) + _MARGIN)
        figure = new_figure(size, size, layout=None)
        corner_package.corner(
            samples,
            fig=figure,
            bins=_BINS,
            range=ranges,
            levels=LEVELS,
            quantiles=_QUANTILES,
            plot_datapoints=False,
            fill_contours=True,
            color="black",
            hist_kwargs={"linewidth": 0.8},
            smooth=1.0,
            contour_kwargs={"linewidths": [0.7, 0.7]},
            contourf_kwargs={"colors": _FILLS},
            max_n_ticks=3,
        )
        grid = np.array(figure.axes, dtype=object).reshape(len(chosen), -1)
        for i, name in enumerate(chosen):
            scale = 10.0 ** exponents[i]
            _draw_prior(grid[i, i], dataset[name].attrs.get("prior", ""), ranges[i], scale, len(samples))
        texts = [_text(dataset, name, e) for name, e in zip(chosen, exponents, strict=True)]
        _label(grid, texts, 8 * MILLIMETRE * len(chosen) / (size - _MARGIN))
        _arrange(figure, size, len(chosen))
        _caption(figure, len(chosen))
    return figure


def _posterior(result: Any) -> Any:
    if "posterior" not in getattr(result, "children", ()):
        raise ValueError(
            f"plot.corner got a {type(result).__name__} without a group 'posterior'; "
            "give the result of sample_posterior or load."
        )
    return result["posterior"].to_dataset()


def _names(dataset: Any, names: Sequence[str] | None) -> list[str]:
    present = [str(name) for name in dataset.data_vars]
    if names is None:
        return [n for n in present if dataset[n].attrs.get("role", "unknown") == "unknown"] or present
    strange = [name for name in names if name not in present]
    if strange:
        raise ValueError(f"names holds {', '.join(strange)}; the posterior has {', '.join(present)}.")
    return list(names)


def _check_samples(samples: Array, names: Sequence[str]) -> None:
    for name, column in zip(names, samples.T, strict=True):
        if not np.all(np.isfinite(column)):
            raise ValueError(f"{name} has draws that are not finite; leave it out, or draw its inverse.")
        if np.ptp(column) == 0:
            raise ValueError(f"{name} is {column[0]:g} in every draw; leave it out of names.")


def _range(column: Array) -> tuple[float, float]:
    """Central 99.8 % of the draws, cut where a heavy tail would squeeze the rest."""
    low, left, median, right, high = np.quantile(column, [0.001, 0.16, 0.5, 0.84, 0.999])
    return float(max(low, median - 5 * (median - left))), float(min(high, median + 5 * (right - median)))


def _text(dataset: Any, name: str, exponent: int) -> str:
    """Break a label after the place and before the unit: panels are narrow."""
    unit = unit_text(dataset[name].attrs.get("units", "1"))
    place, dot, field = name.partition(".")
    if len(field) > _LONG:
        field = field.replace("_", "_\n", 1)
    return power_label(f"{place}\n.{field}" if dot else name, unit, exponent).replace(" (", "\n(")


def _draw_prior(ax: Axes, description: str, shown: tuple[float, float], scale: float, draws: int) -> None:
    """Draw the prior as the counts that as many draws from it would give."""
    if not description:
        return
    prior = rebuild_prior(json.loads(description))
    x = np.linspace(*shown, 200)
    width = (shown[1] - shown[0]) / _BINS
    top = ax.get_ylim()[1]
    ax.plot(
        x,
        prior.pdf(x * scale) * scale * width * draws,
        color="black",
        linestyle=":",
        linewidth=1.2,
        label="prior",
    )
    ax.set_ylim(0, top)


def _label(grid: NDArray[np.object_], texts: Sequence[str], offset: float) -> None:
    """Label the outer panels, `offset` panel widths away from them."""
    last = len(texts) - 1
    for i, text in enumerate(texts):
        grid[last, i].set_xlabel(text, fontsize=6.5)
        if i:
            grid[i, 0].set_ylabel(text, fontsize=6.5)
        for ax in grid[i, : i + 1]:
            ax.tick_params(labelsize=6, length=2)
            # Upright enough that the last number of a panel and the first of the next do not touch.
            ax.tick_params(axis="x", labelrotation=48)
            ax.tick_params(axis="y", labelrotation=35)
            ax.xaxis.set_label_coords(0.5, -offset)
            ax.yaxis.set_label_coords(-offset, 0.5)


def _arrange(figure: Figure, size: float, count: int) -> None:
    margin = _MARGIN / size
    figure.subplots_adjust(
        left=margin,
        bottom=margin,
        right=1 - 0.02,
        top=1 - (0.02 if count > 1 else 0.12),
        wspace=0.08,
        hspace=0.08,
    )


def _caption(figure: Figure, count: int) -> None:
    masses = " and ".join(f"{100 * level:.0f} %" for level in LEVELS)
    lines = ["dashed: 16, 50, 84 % quantiles", "dotted: prior"]
    if count > 1:
        lines = [f"contours hold {masses}", "of the draws of a pair", *lines]
    figure.text(0.98, 0.98, "\n".join(lines), ha="right", va="top", fontsize=6.5)
