"""Picture of a crystal's slowness, velocity or ray curves in a plane."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from inverse.elastic.sections import Section
from inverse.elastic.voigt import FloatArray

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["elastic_section"]

_UNITS = {"slowness": "ps/nm", "phase velocity": "nm/ps", "group velocity": "nm/ps"}
# Colour, dashes, width: told apart by the dashes alone where the page is grey.
_STYLES = (("black", "-", 1.4), ("tab:blue", "--", 1.2), ("tab:orange", ":", 1.8))


def elastic_section(section: Section, quantity: str = "slowness", ax: Axes | None = None) -> Axes:
    """Draw the curves of the three waves in a plane of a crystal.

    Parameters
    ----------
    section : Section
        From `elastic.plane_section`.
    quantity : str
        "slowness" (ps/nm), "phase velocity" or "group velocity" (nm/ps). The normal of a slowness curve is
        the direction of the energy; group velocities draw the wave front of a point source in the plane.
    ax : matplotlib Axes, optional
        Where to draw; left out, a figure one column (90 mm) wide is made.

    Returns
    -------
    matplotlib Axes
        With equal scales; one line per branch.

    Raises
    ------
    ValueError
        If the quantity is not one of the three.
    """
    curves = section.curve(quantity)
    if ax is None:
        from matplotlib.figure import Figure

        ax = Figure(figsize=(3.54, 3.9), layout="constrained").subplots()
    for branch, (colour, dashes, width) in enumerate(_STYLES):
        x, y = curves[:, branch].T
        ax.plot(x, y, color=colour, linestyle=dashes, linewidth=width, label=section.labels[branch])
    unit = _UNITS[quantity]
    ax.set_xlabel(f"{quantity} along {_direction_text(section.first)} ({unit})")
    ax.set_ylabel(f"{quantity} along {_direction_text(section.second)} ({unit})")
    ax.set_aspect("equal")
    ax.legend(loc="lower center", bbox_to_anchor=(0.5, 1.0), frameon=False, fontsize="small")
    return ax


def _direction_text(direction: FloatArray) -> str:
    """Write a unit vector as the smallest whole numbers along it, or as components if none are small."""
    for size in range(1, 20):
        scaled = direction / np.abs(direction).max() * size
        if np.allclose(scaled, np.round(scaled), atol=1e-6):
            return "[" + " ".join(f"{component:.0f}" for component in np.round(scaled) + 0.0) + "]"
    return "[" + " ".join(f"{component:.3f}" for component in direction) + "]"
