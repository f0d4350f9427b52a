"""Picture of a coverage check: how far the ranks of the truths are from uniform, and how far they may be."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from inverse.plot.style import COLUMN, new_figure, style
from inverse.study.coverage.outcome import Coverage
from inverse.study.coverage.ranks import CELLS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["coverage"]

_ROW = 0.78
_LINE = "#123a6b"


def coverage(result: Coverage) -> Figure:
    """Draw, per quantity, the share of ranks below each level less the level, with the simultaneous bands.

    A curve that rises above zero early and falls below late belongs to intervals that are too narrow; the reverse,
    too wide; one that stays on one side, too high (above) or too low. A quantity that leaves the bands has a thick
    curve and says so.

    Parameters
    ----------
    result : Coverage
        From `check_coverage`.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    ValueError
        If no replicate has draws.
    """
    if not result.names:
        raise ValueError("No replicate of this check has draws; there is nothing to draw.")
    rows = -(-len(result.names) // 2)
    with style():
        figure = new_figure(COLUMN, _ROW * rows + 0.55)
        columns = min(2, len(result.names))
        axes = figure.subplots(rows, columns, sharex=True, sharey=True, squeeze=False)
        for ax, name in zip(axes.flat, result.names, strict=False):
            _panel(ax, result, name)
        limit = 1.5 * max(abs(y) for y in axes[0, 0].get_ylim())
        axes[0, 0].set_ylim(-limit, limit)
        for ax in axes.flat[len(result.names) :]:
            ax.set_axis_off()
            axes[-2, -1].xaxis.set_tick_params(labelbottom=True)
        figure.supxlabel("rank of the truth / 199", fontsize=7.5)
        figure.supylabel("share of ranks below, less expected", fontsize=7.5)
    return figure


def _panel(ax: Axes, result: Coverage, name: str) -> None:
    count = len(result.ranked)
    place = np.arange(1, CELLS) / CELLS
    low, high = result.bands.below.T / count - place
    below = np.searchsorted(np.sort(result.ranks[name]), np.arange(1, CELLS), side="left") / count
    fault = result.outside.get(name)
    ax.fill_between(place, low, high, step="mid", color="0.85", linewidth=0)
    ax.axhline(0, color="0.5", linewidth=0.5)
    ax.step(place, below - place, where="mid", color=_LINE, linewidth=1.8 if fault else 0.9)
    ax.text(0.03, 0.95, name, transform=ax.transAxes, va="top", fontsize=6)
    ax.text(0.97, 0.05, fault or "inside", transform=ax.transAxes, ha="right", fontsize=6,
            fontweight="bold" if fault else "normal")  # fmt: skip
    ax.set_xlim(0, 1)
