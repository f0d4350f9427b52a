"""What the figures share: column width, grey-proof lines, and a figure that shows itself in a notebook."""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["COLUMN", "decade", "new_figure", "power_label", "style"]

MILLIMETRE = 1 / 25.4
COLUMN = 85 * MILLIMETRE
"""Width of a printed column in inches."""

_STYLE: dict[Any, Any] = {
    "font.size": 7.5,
    "axes.labelsize": 7.5,
    "xtick.labelsize": 7,
    "ytick.labelsize": 7,
    "legend.fontsize": 6.5,
    "axes.linewidth": 0.6,
    "lines.linewidth": 1.0,
    "hatch.linewidth": 0.4,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "legend.frameon": False,
}
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@contextmanager
def style() -> Iterator[None]:
    """Draw in the library's style; matplotlib's own settings are as before afterwards."""
    import matplotlib

    with matplotlib.rc_context(_STYLE):
        yield


def new_figure(width: float, height: float, layout: Literal["constrained"] | None = "constrained") -> Figure:
    """Return a figure outside pyplot's list of open figures.

    Parameters
    ----------
    width, height : float
        Inches.
    layout : "constrained" or None
        Layout engine.

    Returns
    -------
    matplotlib.figure.Figure
        Displays itself once in a notebook, whether or not pyplot is in use, and need not be closed.
    """
    from matplotlib.figure import Figure

    class _NotebookFigure(Figure):
        def _repr_png_(self) -> bytes:
            buffer = io.BytesIO()
            self.savefig(buffer, format="png")
            return buffer.getvalue()

    return _NotebookFigure(figsize=(width, height), dpi=160, layout=layout)


def decade(values: NDArray[np.float64]) -> int:
    """Return the power of ten to take out of an axis; 0 where plain figures are readable."""
    finite = np.abs(values[np.isfinite(values)])
    largest = float(finite.max()) if finite.size else 0.0
    if largest == 0 or 0.1 <= largest < 1e3:
        return 0
    return int(np.floor(np.log10(largest)))


def power_label(name: str, unit: str, exponent: int) -> str:
    """Return an axis label with the power of ten that was taken out: ``optical phase (10⁻⁵ rad)``."""
    power = f"10{str(exponent).translate(_SUPERSCRIPT)}" if exponent else ""
    inside = " ".join(part for part in (power, unit) if part)
    return f"{name} ({inside})" if inside else name
