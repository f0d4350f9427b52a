"""Cross-section of a stack, drawn top to bottom."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from inverse.description.sample.parts import Graded, Interface, Layer, Substrate
from inverse.description.unknowns import Unknown, is_distribution
from inverse.plot.style import COLUMN, MILLIMETRE, new_figure, style
from inverse.report.rounding import decimal_place, format_range
from inverse.report.unit_text import unit_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["section"]

_HATCHES = ("", "///", "...", "\\\\\\", "xx", "---", "ooo", "|||")
_GREYS = ("0.95", "0.80", "0.90", "0.75")
_WIDTH = 0.47
_NOTE = "not to scale; priors as central 68 % intervals"


@dataclass(frozen=True)
class _Slab:
    """A medium of the drawing and the lines of text beside its lower face."""

    name: str
    thickness: str
    bond: tuple[str, ...] = ()


def section(stack: Any) -> Figure:
    """Draw the cross-section of a stack: layers with thicknesses, interfaces with their coupling.

    Parameters
    ----------
    stack : Stack
        Its parts, top to bottom.

    Returns
    -------
    matplotlib.figure.Figure
        One column (85 mm) wide; not to scale. Media are told apart by name and hatching, not by colour.

    Raises
    ------
    ValueError
        If `stack` has no parts.
    """
    slabs = _slabs(stack)
    ambient = getattr(getattr(stack, "ambient", None), "name", None) or "air or vacuum"
    with style():
        figure = new_figure(COLUMN, (14 + 15 * len(slabs)) * MILLIMETRE, layout=None)
        ax = figure.add_axes((0.02, 0.0, 0.96, 1.0))
        ax.set_axis_off()
        # The outermost line is drawn on both sides of 0.
        ax.set_xlim(-0.01, 1)
        ax.set_ylim(len(slabs) + 0.45, -0.5)
        ax.text(_WIDTH / 2, -0.2, ambient, ha="center", va="center", style="italic")
        looks = _looks([slab.name for slab in slabs])
        for row, slab in enumerate(slabs):
            _draw_slab(ax, row, slab, looks[row], last=row == len(slabs) - 1)
        ax.text(0.0, len(slabs) + 0.3, _NOTE, fontsize=6, va="center")
    return figure


def _slabs(stack: Any) -> list[_Slab]:
    if not hasattr(stack, "written"):
        raise ValueError(f"plot.section got a {type(stack).__name__}, which has no parts; give a Stack.")
    slabs: list[_Slab] = []
    for part, name, count in stack.written():
        if isinstance(part, Interface):
            slabs[-1] = _Slab(slabs[-1].name, slabs[-1].thickness, _bond(part))
        else:
            slabs.append(_Slab(name, _thickness(part, count)))
    return slabs


def _thickness(part: Any, count: int) -> str:
    if isinstance(part, Substrate):
        return "free below" if part.is_empty else "substrate"
    text = _value(part.thickness, "nm")
    if isinstance(part, Layer) and part.thickness_spread != 0.0:
        text += f"\nuneven, rms {_value(part.thickness_spread, 'nm')}"
    if isinstance(part, Graded):
        text += f"\nin {part.slices} slices"
    return text if count == 1 else f"{text}\n{count} times"


def _bond(interface: Any) -> tuple[str, ...]:
    lines = [_named("compliance", interface.compliance, "nm/GPa", {0.0: "perfect bond", np.inf: "open gap"})]
    heat = {np.inf: "ideal thermal contact"}
    lines.append(_named("conductance", interface.boundary_conductance, "MW/m2/K", heat))
    lines.append(_named("roughness", interface.roughness, "nm", {0.0: ""}))
    lines.append(_named("mass", interface.areal_mass, "mg/m2", {0.0: ""}))
    return tuple(line for line in lines if line)


def _named(name: str, value: Any, unit: str, special: dict[float, str]) -> str:
    if isinstance(value, int | float) and float(value) in special:
        return special[float(value)]
    text = _value(value, unit)
    return f"{name}\n{text}" if "prior" in text else f"{name} {text}"


def _value(value: Any, unit: str) -> str:
    """Write a number, or the central 68 % interval of a prior."""
    if isinstance(value, Unknown):
        return f"{value.name}\n{_value(value.prior, unit)}"
    if is_distribution(value):
        low, high = (float(value.ppf(p)) for p in (0.16, 0.84))
        return f"prior {format_range(low, high, _place(low, high))} {unit_text(unit)}"
    return f"{float(value):g} {unit_text(unit)}"


def _place(low: float, high: float) -> int:
    """Two digits of the width, but never less than two of the lower end."""
    places = [decimal_place((high - low) / 2)]
    if low > 0:
        places.append(decimal_place(low))
    return min(places)


def _looks(names: Sequence[str]) -> list[tuple[str, str]]:
    """Grey and hatch per medium; equal materials look equal."""
    kinds = list(dict.fromkeys(name.split("#")[0] for name in names))
    order = [kinds.index(name.split("#")[0]) for name in names]
    looks = [(_GREYS[i % len(_GREYS)], _HATCHES[i % len(_HATCHES)]) for i in order]
    return [("1.0", "") if name == "vacuum" else look for name, look in zip(names, looks, strict=True)]


def _draw_slab(ax: Axes, row: int, slab: _Slab, look: tuple[str, str], last: bool) -> None:
    from matplotlib.patches import Rectangle

    grey, hatch = look
    ax.add_patch(
        Rectangle(
            (0, row), _WIDTH, 1, facecolor=grey, edgecolor="0.45", hatch=hatch, linewidth=0, label=slab.name
        )
    )
    for x in (0, _WIDTH):
        ax.plot([x, x], [row, row + 1], color="black", linewidth=0.8, linestyle="--" if last else "-")
    ax.plot([0, _WIDTH], [row, row], color="black", linewidth=0.8)
    ax.text(
        _WIDTH / 2,
        row + 0.5,
        f"{slab.name}\n{slab.thickness}",
        ha="center",
        va="center",
        bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.5},
    )
    if slab.bond:
        ax.annotate(
            "\n".join(slab.bond),
            xy=(_WIDTH, row + 1),
            xytext=(_WIDTH + 0.05, row + 1),
            va="center",
            fontsize=6.5,
            arrowprops={"arrowstyle": "-", "linewidth": 0.6},
        )
