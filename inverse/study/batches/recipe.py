"""One description for many traces: the stack, the measurement, and what a table changes for each site."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from inverse.description.pumpprobe import PumpProbe
from inverse.description.records import encode
from inverse.description.sample.parts import Interface, Layer, Slice, unroll
from inverse.description.sample.stack import Stack
from inverse.inference.inversion import Inversion

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["Recipe"]


@dataclass(frozen=True, eq=False)
class Recipe:
    """How to make the problem of each site.

    Parameters
    ----------
    stack : Stack
    setup : PumpProbe
    time_zero, mask, noise
        As for `Inversion`.

    Notes
    -----
    A column of the table of sites that is named after a place, such as ``Al.thickness`` or ``Al|Si.compliance``,
    or ``time_zero``, replaces what stands there: by a number (then it is known) or by a frozen distribution (then it
    is unknown with that prior). Other columns are labels.
    """

    stack: Stack
    setup: PumpProbe
    time_zero: Any = None
    mask: Any = "overlap"
    noise: Any = "correlated"

    def __call__(self, trace: xr.Dataset, row: Mapping[str, Any]) -> Inversion:
        """Make the problem of a site.

        Parameters
        ----------
        trace : xarray.Dataset
        row : mapping
            The site's row of the table.

        Raises
        ------
        ValueError
            If a column names a place or a property that the stack does not have.
        """
        stack = self.stack
        for column, value in row.items():
            if is_override(column) and column != "time_zero":
                stack = _with(stack, column, value)
        zero = row.get("time_zero", self.time_zero)
        return Inversion(stack, self.setup, trace, time_zero=zero, mask=self.mask, noise=self.noise)

    def record(self) -> dict[str, Any]:
        """Describe the recipe as plain JSON data."""
        fields = ("stack", "setup", "time_zero", "mask", "noise")
        return {name: encode(getattr(self, name)) for name in fields}


def is_override(column: str) -> bool:
    """Tell whether a column of the table replaces something in the description."""
    return column == "time_zero" or "." in column


def _with(stack: Stack, column: str, value: Any) -> Stack:
    place, field = column.rsplit(".", 1)
    parts = list(stack.parts)
    names = _part_names(stack)
    if place not in names:
        raise ValueError(
            f"the table's column '{column}' names no part of the stack; it has {', '.join(filter(None, names))}."
        )
    at = names.index(place)
    parts[at] = _replaced(parts[at], field, value, column)
    return stack.of(*parts)


def _part_names(stack: Stack) -> list[str]:
    """Name every part as unknowns name it; one that is made of several, or stands inside such, has no name."""
    out, seen = [""] * len(stack.parts), 0
    for part, place in unroll(stack.parts):
        name = stack.interface_names[seen - 1] if isinstance(part, Interface) else stack.names[seen]
        seen += not isinstance(part, Interface)
        if len(place) == 1 and not isinstance(part, Slice):
            out[place[0]] = name
    return out


def _replaced(part: Any, field: str, value: Any, column: str) -> Any:
    if isinstance(part, Interface):
        if not hasattr(part, field):
            raise ValueError(f"the table's column '{column}': an Interface has no '{field}'.")
        return replace(part, **{field: value})
    given = {"thickness": part.thickness} if isinstance(part, Layer) else {}
    if part.density_ratio is not None and field != "density":
        given["density_ratio"] = part.density_ratio
    return type(part)(part.material, **{**given, field: value})
