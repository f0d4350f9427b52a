"""Picture of a fit: data, prediction with bands, residuals."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.plot.style import COLUMN, MILLIMETRE, decade, new_figure, power_label, style
from inverse.report.unit_text import axis_label, unit_text

if TYPE_CHECKING:
    from matplotlib.artist import Artist
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["ChannelView", "channel_views", "fit"]

Array = NDArray[np.float64]

_BANDS = ((0.95, "0.85"), (0.68, "0.68"))
_LINE = "#123a6b"


@dataclass(frozen=True)
class ChannelView:
    """What is drawn of one channel.

    Attributes
    ----------
    name, unit, delay_unit : str
        Channel and units.
    delay, data : numpy.ndarray
        Shape (delays,).
    fitted : numpy.ndarray of bool
        True where a delay was fitted.
    predicted : numpy.ndarray
        Draws of the posterior predictive, shape (draws, delays); one row for a least-squares result.
    white : float or None
        White noise, standard deviation per point, in `unit`.
    discrepancy : numpy.ndarray or None
        The correlated part of the residuals, shape (delays,).
    """

    name: str
    unit: str
    delay_unit: str
    delay: Array
    data: Array
    fitted: NDArray[np.bool_]
    predicted: Array
    white: float | None
    discrepancy: Array | None

    @property
    def median(self) -> Array:
        """Median prediction, shape (delays,)."""
        return np.asarray(np.median(self.predicted, axis=0))

    @property
    def residual(self) -> Array:
        """Data minus median prediction, shape (delays,)."""
        return self.data - self.median

    def band(self, mass: float) -> Array:
        """Central predictive band, shape (2, delays)."""
        return np.quantile(self.predicted, [0.5 - mass / 2, 0.5 + mass / 2], axis=0)


def fit(result: Any, *, axes: Sequence[Axes] | None = None) -> Figure:
    """Draw data, prediction with 68 % and 95 % bands, and residuals; channels below each other.

    Parameters
    ----------
    result : xarray.DataTree or least-squares result
        A posterior with the groups ``observed_data`` and ``posterior_predictive`` (and ``constant_data`` with
        ``used``, not zero where a delay is fitted), or what `Inversion.least_squares` gave, which has no
        bands.
    axes : sequence of matplotlib Axes, optional
        Two per channel: signal, residuals. Without them a figure one column (85 mm) wide is made.

    Returns
    -------
    matplotlib.figure.Figure
        The figure the axes belong to.

    Raises
    ------
    ValueError
        If the result lacks a group or is not of traces, or the number of axes is not two per channel.
    """
    views = channel_views(result)
    with style():
        pairs = _pairs(views, axes)
        for view, (signal, residual) in zip(views, pairs, strict=True):
            _draw_signal(signal, view)
            _draw_residual(residual, view)
        _legend(pairs[0], own=axes is None)
        pairs[-1][1].set_xlabel(axis_label("delay", views[-1].delay_unit))
    figure = pairs[0][0].get_figure(root=True)
    assert figure is not None
    figure.align_ylabels([ax for pair in pairs for ax in pair])
    return figure


def channel_views(result: Any) -> tuple[ChannelView, ...]:
    """Collect what `fit` draws from either kind of result.

    Parameters
    ----------
    result : xarray.DataTree or least-squares result
        As for `fit`.

    Returns
    -------
    tuple of ChannelView
        One per channel.

    Raises
    ------
    ValueError
        If a group is missing.
    """
    if hasattr(result, "inversion"):
        return _views_of_fit(result)
    missing = [
        g for g in ("observed_data", "posterior_predictive") if g not in getattr(result, "children", ())
    ]
    if missing:
        raise ValueError(
            f"plot.fit got a {type(result).__name__} without {' and '.join(missing)}; give the result of "
            "sample_posterior, least_squares or load."
        )
    return _views_of_tree(result)


def _views_of_tree(tree: Any) -> tuple[ChannelView, ...]:
    observed = tree["observed_data"].to_dataset()
    if "delay" not in observed.coords:
        raise ValueError(
            "plot.fit draws traces; a result without delays shows itself by table and plot.corner."
        )
    predictive = tree["posterior_predictive"].to_dataset()
    posterior = tree["posterior"].to_dataset() if "posterior" in tree.children else {}
    constant = tree["constant_data"].to_dataset() if "constant_data" in tree.children else {}
    delay = np.asarray(observed["delay"], dtype=float)
    fitted = (
        np.asarray(constant["used"], dtype=bool) if "used" in constant else np.ones(delay.size, dtype=bool)
    )
    views = []
    names = [str(n) for n in observed.data_vars if n in predictive]
    for name in names:
        noise = next((posterior[n] for n in _white_names(name, len(names)) if n in posterior), None)
        hidden = f"{name}_discrepancy"
        views.append(
            ChannelView(
                name,
                observed[name].attrs.get("units", "1"),
                observed["delay"].attrs.get("units", "ps"),
                delay,
                np.asarray(observed[name], dtype=float),
                fitted,
                _rows(predictive[name]),
                None if noise is None else float(np.median(noise)),
                np.median(_rows(predictive[hidden]), axis=0) if hidden in predictive else None,
            )
        )
    return tuple(views)


def _views_of_fit(found: Any) -> tuple[ChannelView, ...]:
    """Adapt a least-squares result: its inversion holds the trace and predicts."""
    if len(found.inversion.parts) > 1:
        raise ValueError("plot.fit draws one trace; fit and draw each of joint.parts.")
    trace = found.inversion.trace
    predicted = found.inversion.predict(np.asarray(found.values)[None])
    values = dict(zip(found.names, found.values, strict=True))
    fitted = np.asarray(found.inversion.posterior.members[0].model.used, dtype=bool)
    return tuple(
        ChannelView(
            str(name),
            trace[name].attrs.get("units", "1"),
            trace["delay"].attrs.get("units", "ps"),
            np.asarray(trace["delay"], dtype=float),
            np.asarray(trace[name], dtype=float),
            fitted,
            _rows(predicted[name]),
            next(
                (float(values[n]) for n in _white_names(str(name), len(predicted.data_vars)) if n in values),
                None,
            ),
            None,
        )
        for name in predicted.data_vars
    )


def _white_names(channel: str, channels: int) -> tuple[str, ...]:
    return ("noise.white",) if channels == 1 else (f"noise.{channel}.white",)


def _rows(variable: Any) -> Array:
    """Draws in rows, whatever the sample dimensions are called."""
    ordered = variable.transpose(..., "delay")
    return np.asarray(ordered, dtype=float).reshape(-1, ordered.sizes["delay"])


def _pairs(views: Sequence[ChannelView], axes: Sequence[Axes] | None) -> list[tuple[Axes, Axes]]:
    count = 2 * len(views)
    if axes is None:
        figure = new_figure(COLUMN, (12 + 68 * len(views)) * MILLIMETRE)
        made = figure.subplots(count, 1, sharex=True, gridspec_kw={"height_ratios": [5, 3] * len(views)})
        axes = list(made)
    given = list(np.ravel(np.asarray(axes, dtype=object)))
    if len(given) != count:
        raise ValueError(
            f"plot.fit got {len(given)} axes; give {count}: signal and residuals for each channel."
        )
    return list(zip(given[::2], given[1::2], strict=True))


def _draw_signal(ax: Axes, view: ChannelView) -> None:
    exponent = decade(view.data[view.fitted])
    factor = 10.0**-exponent
    _shade_masked(ax, view)
    for mass, grey in _BANDS if len(view.predicted) > 1 else ():
        low, high = view.band(mass) * factor
        ax.fill_between(view.delay, low, high, color=grey, linewidth=0, label=f"{100 * mass:.0f} % band")
    ax.plot(view.delay, view.data * factor, ".", color="black", markersize=1.6, label="data")
    ax.plot(
        view.delay,
        view.median * factor,
        color=_LINE,
        label="median" if len(view.predicted) > 1 else "best fit",
    )
    low, high = view.data[view.fitted].min() * factor, view.data[view.fitted].max() * factor
    # Scaled to what was fitted: the peak at time zero would squeeze the echoes.
    ax.set_ylim(low - 0.1 * (high - low), high + 0.1 * (high - low))
    ax.set_ylabel(power_label(view.name.replace("_", " "), unit_text(view.unit), exponent))


def _draw_residual(ax: Axes, view: ChannelView) -> None:
    shown = view.residual[view.fitted]
    exponent = decade(shown)
    factor = 10.0**-exponent
    _shade_masked(ax, view)
    for mass, grey in _BANDS if len(view.predicted) > 1 else ():
        low, high = (view.band(mass) - view.median) * factor
        ax.fill_between(view.delay, low, high, color=grey, linewidth=0)
    ax.axhline(0, color=_LINE, linewidth=0.8)
    ax.plot(view.delay, view.residual * factor, ".", color="black", markersize=1.6)
    if view.white is not None:
        for side in (-1, 1):
            label = "± white noise" if side == 1 else None
            ax.axhline(
                side * view.white * factor, color="black", linestyle=(0, (4, 2)), linewidth=0.7, label=label
            )
    if view.discrepancy is not None:
        ax.plot(view.delay, view.discrepancy * factor, color=_LINE, linestyle="-.", label="discrepancy")
    limit = 1.15 * max(float(np.nanmax(np.abs(shown))), view.white or 0.0) * factor
    if limit > 0:
        ax.set_ylim(-limit, limit)
    ax.set_ylabel(power_label("residual", unit_text(view.unit), exponent))


def _shade_masked(ax: Axes, view: ChannelView) -> None:
    """Hatch the runs of delays that were left out, out to half-way to the nearest fitted delay."""
    edges = np.concatenate([view.delay[:1], (view.delay[1:] + view.delay[:-1]) / 2, view.delay[-1:]])
    change = np.flatnonzero(np.diff(np.concatenate([[0], ~view.fitted, [0]]).astype(int)))
    for first, (start, stop) in enumerate(change.reshape(-1, 2)):
        ax.axvspan(
            edges[start],
            edges[stop],
            facecolor="none",
            edgecolor="0.55",
            hatch="////",
            linewidth=0,
            label=None if first else "not fitted",
        )


def _legend(axes: tuple[Axes, Axes], own: bool) -> None:
    """Put the legend of both axes above a figure of ours, or into the axes given."""
    entries: dict[str, Artist] = {}
    for ax in axes:
        entries.update({text: handle for handle, text in zip(*ax.get_legend_handles_labels(), strict=True)})
    handles, labels = list(entries.values()), list(entries)
    figure = axes[0].get_figure(root=True)
    if own and figure is not None:
        figure.legend(
            handles, labels, loc="outside upper center", ncols=3, columnspacing=1.2, handlelength=1.6
        )
    else:
        axes[0].legend(handles, labels, ncols=3, columnspacing=1.2, handlelength=1.6)
