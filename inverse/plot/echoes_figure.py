"""Sound in the sample as depth against time with its arrivals, and the trace split by layer and mechanism."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_delay
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.stack import Stack
from inverse.plot.style import COLUMN, MILLIMETRE, decade, new_figure, power_label, style
from inverse.response.media import layers
from inverse.response.rays import Arrival, arrivals
from inverse.response.simulate import simulate
from inverse.response.strain_map import known_sample, strain_map

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["echoes", "shares"]

Array = NDArray[np.float64]

_ROWS, _COLUMNS = 260, 420
_LABELS = {
    "reflectance_change": ("ΔR/R", ""),
    "optical_phase": ("optical phase", "rad"),
    "beam_deflection": ("beam deflection", "rad"),
}


def echoes(
    stack: Stack,
    setup: PumpProbe,
    delay: Any,
    *,
    depth: float | None = None,
    smallest: float = 0.02,
    values: Mapping[str, float] | None = None,
) -> Figure:
    """Draw the sound in the sample, depth against time, over the trace it makes.

    Parameters
    ----------
    stack : Stack
        Distributions stand for their median unless `values` says otherwise.
    setup : PumpProbe
    delay : array
        ps after time zero; its span is drawn.
    depth : float, optional
        Depth drawn, nm; by default one and a half times that of the layers.
    smallest : float
        Amplitude of the faintest arrival that is marked, relative to the pulse that is launched.
    values : mapping, optional
        Unknown name -> value.

    Returns
    -------
    matplotlib.figure.Figure
        One column wide. Above: the strain less the thermal expansion at rest, that is stress over modulus; dark is
        compression, light is tension. Dashed: the ways of the rays that reach the surface, from where the pump stresses
        the sample most, each with the round trips it made (a half is one crossing). Below: the reflectance change.

    Raises
    ------
    ValueError
        If a constant is missing, or `values` names no unknown.
    """
    delay = checked_delay(delay)
    first, last = float(delay.min()), float(delay.max())
    tops = _interfaces(stack, setup, values)
    deepest = depth if depth is not None else 1.5 * tops[-1] if tops.size > 1 else 8.0 * last
    times, depths = np.linspace(first, last, _COLUMNS), (np.arange(_ROWS) + 0.5) * deepest / _ROWS
    strain = strain_map(stack, setup, times, depths, values=values)["elastic_strain"].values
    back = _strongest(arrivals(stack, setup, last, smallest=smallest, values=values))
    trace = simulate(stack, setup, times, values=values)["reflectance_change"].values
    with style():
        figure = new_figure(COLUMN, 95 * MILLIMETRE)
        above, below = figure.subplots(2, 1, sharex=True, height_ratios=(2.2, 1))
        _draw_map(figure, above, (first, last, deepest, 0.0), strain)
        _draw_layers(above, stack.names, tops, deepest)
        _draw_rays(above, back, last)
        _draw_trace(below, times, trace, back)
    return figure


def _strongest(back: Sequence[Arrival], most: int = 10) -> list[Arrival]:
    return sorted(back, key=lambda a: -abs(a.amplitude))[:most]


def _interfaces(stack: Stack, setup: PumpProbe, values: Mapping[str, float] | None) -> Array:
    """Depth of the top of every medium, nm."""
    below = layers(known_sample(stack, setup, values or {}).media)
    return np.concatenate([[0.0], np.cumsum([m.thickness.item() for m in below])])


def _draw_map(figure: Figure, ax: Axes, extent: tuple[float, float, float, float], strain: Array) -> None:
    # The pulse that leaves the surface is the measure; what is stronger for a moment is drawn as black or white.
    largest = float(np.quantile(np.abs(strain).max(axis=0), 0.6))
    power = decade(np.array([largest]))
    scaled = strain / 10.0**power
    image = ax.imshow(
        scaled,
        cmap="gray",
        vmin=-largest / 10.0**power,
        vmax=largest / 10.0**power,
        extent=extent,
        aspect="auto",
        interpolation="bilinear",
    )
    bar = figure.colorbar(image, ax=ax, pad=0.02, extend="both")
    bar.set_label(power_label("elastic strain", "", power))
    ax.set_ylabel("depth (nm)")
    ax.set_ylim(extent[2], extent[3])


def _draw_layers(ax: Axes, names: Sequence[str], tops: Array, deepest: float) -> None:
    """Draw interfaces, and name the media that are thick enough on the page."""
    for top in tops[1:]:
        ax.axhline(top, color="black", linewidth=0.6)
    ends = np.append(tops[1:], deepest)
    for name, top, bottom in zip(names, tops, np.minimum(ends, deepest), strict=True):
        if bottom - top > 0.06 * deepest:
            ax.text(
                0.985,
                (top + bottom) / 2,
                name,
                transform=ax.get_yaxis_transform(),
                ha="right",
                va="center",
                fontsize=6.5,
                bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.0, "alpha": 0.85},
            )


def _draw_rays(ax: Axes, back: Sequence[Arrival], last: float) -> None:
    """Draw the ways, and label arrivals above the surface, only the stronger where two would overlap."""
    for arrival in back:
        for colour, width in (("white", 1.0), ("black", 0.5)):
            ax.plot(arrival.times, arrival.depths, color=colour, linewidth=width, linestyle=(0, (4, 3)))
    taken: list[float] = []
    for arrival in back:
        if all(abs(arrival.time - other) > 0.045 * last for other in taken):
            taken.append(arrival.time)
            ax.annotate(
                arrival.label,
                xy=(arrival.time, 0),
                xytext=(0, 3),
                textcoords="offset points",
                rotation=90,
                ha="center",
                va="bottom",
                fontsize=6,
                annotation_clip=False,
            )


def _draw_trace(ax: Axes, times: Array, trace: Array, back: Sequence[Arrival]) -> None:
    power = decade(trace)
    ax.plot(times, trace / 10.0**power, color="black")
    for arrival in back:
        ax.axvline(arrival.time, color="0.6", linewidth=0.5, linestyle=(0, (4, 3)), zorder=0)
    ax.set_xlabel("delay (ps)")
    ax.set_ylabel(power_label(*_LABELS["reflectance_change"], power))
    ax.set_xlim(float(times[0]), float(times[-1]))


def shares(
    stack: Stack,
    setup: PumpProbe,
    delay: Any,
    *,
    channel: str = "reflectance_change",
    most: int = 6,
    values: Mapping[str, float] | None = None,
) -> Figure:
    """Draw what each layer and mechanism contributes to a trace.

    Parameters
    ----------
    stack : Stack
        Distributions stand for their median unless `values` says otherwise. Coefficients that a material does not
        give have their default, an order of magnitude only.
    setup : PumpProbe
    delay : array
        ps, strictly increasing.
    channel : str
        A channel of `simulate`.
    most : int
        Contributions drawn on their own: the largest, down to a thousandth of them. The others are drawn as one.
    values : mapping, optional
        Unknown name -> value.

    Returns
    -------
    matplotlib.figure.Figure
        One column wide: the trace, then its contributions, largest first, all in the unit of the top panel; each has
        its own scale, which its axis says.

    Raises
    ------
    ValueError
        If the channel is unknown, a constant is missing, or `values` names no unknown.
    """
    trace = simulate(stack, setup, delay, values=values, shares=True)
    if f"{channel}_share" not in trace:
        known = [name.removesuffix("_share") for name in map(str, trace) if name.endswith("_share")]
        raise ValueError(f"plot.shares got channel={channel!r}; give one of {', '.join(known)}.")
    total = trace[channel].values
    rows = _largest(trace[f"{channel}_share"].values, [str(p) for p in trace["part"].values], most)
    times = trace["delay"].values
    with style():
        figure = new_figure(COLUMN, (18 + 15 * len(rows)) * MILLIMETRE)
        panels = figure.subplots(len(rows) + 1, 1, sharex=True, squeeze=False)[:, 0]
        power = decade(total)
        for ax, (name, values_) in zip(panels, [("all together", total), *rows], strict=True):
            ax.axhline(0, color="0.7", linewidth=0.5)
            ax.plot(times, values_ / 10.0**power, color="black", linewidth=1.2 if ax is panels[0] else 0.9)
            ax.ticklabel_format(style="plain", useOffset=False)
            ax.locator_params(axis="y", nbins=3)
            ax.set_title(name, loc="left", fontsize=6.5, pad=2)
        panels[-1].set_xlabel("delay (ps)")
        panels[-1].set_xlim(float(times[0]), float(times[-1]))
        name, unit = _LABELS.get(channel, (channel.replace("_", " "), ""))
        figure.supylabel(power_label(name, unit, power), fontsize=7.5)
    return figure


def _largest(rows: Array, names: list[str], most: int) -> list[tuple[str, Array]]:
    """Sort contributions, the largest first; the rest becomes one."""
    sizes = np.abs(rows).max(axis=1)
    order = [i for i in np.argsort(-sizes) if sizes[i] > 0]
    kept = [i for i in order[:most] if sizes[i] > 1e-3 * sizes[order[0]]]
    rest = order[len(kept) :]
    out = [(names[i], rows[i]) for i in kept]
    return [*out, (f"{len(rest)} others", rows[rest].sum(axis=0))] if rest else out
