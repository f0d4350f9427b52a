"""The stack: parts in the order of its cross-section, top to bottom."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from typing import Any

from inverse.description.material.properties import Material, material
from inverse.description.sample.parts import (
    EMPTY,
    Graded,
    Interface,
    Layer,
    Medium,
    Part,
    Repeat,
    Slice,
    Substrate,
    unroll,
)
from inverse.description.unknowns import checked

__all__ = ["Graded", "Interface", "Layer", "Repeat", "Slice", "Stack", "Substrate"]

WELDED = Interface(boundary_conductance=float("inf"))


@dataclass(frozen=True, init=False, eq=False)
class Stack:
    """A film stack, top to bottom, as its cross-section is drawn.

    Parameters
    ----------
    *parts : Layer, Interface, Graded, Repeat or Substrate
        Layers from the surface down, the substrate last; an `Interface` may stand between two of them.
        Two parts in a row without one are welded and thermally ideal. ``Substrate("vacuum")`` is none.
    ambient : str or Material
        ``"air"``, ``"vacuum"``, or a liquid by reference name or `Material`.
    surface_roughness : float, frozen scipy.stats distribution or Unknown
        Rms roughness of the free surface in nm, ``surface.roughness`` as an unknown: it spreads the phase of the
        sound that comes back from there. (That of an `Interface` is its own.)

    Raises
    ------
    ValueError
        If the order makes no sense, or the roughness is out of range.

    Examples
    --------
    >>> import inverse as inv
    >>> stack = inv.Stack(
    ...     inv.Layer("Al", thickness=60.0),
    ...     inv.Interface(compliance=0.02, boundary_conductance=100.0),
    ...     inv.Substrate("Si", orientation="100"),
    ... )
    >>> stack.names
    ('Al', 'Si')

    Attributes
    ----------
    media, names : tuple
        Every medium as it lies in the sample, and the name of the place whose unknowns it has; periods of a `Repeat`
        and slices of a `Graded` layer share theirs.
    interfaces, interface_names : tuple
        What lies below each medium but the last, and the name of its unknowns, ``Al|Si``.
    """

    parts: tuple[Part, ...]
    ambient: Material | None
    surface_roughness: Any
    media: tuple[Medium, ...] = field(repr=False)
    interfaces: tuple[Interface, ...] = field(repr=False)
    names: tuple[str, ...] = field(repr=False)
    interface_names: tuple[str, ...] = field(repr=False)

    def __init__(self, *parts: Part, ambient: str | Material = "air", surface_roughness: Any = 0.0) -> None:
        media, bonds = _split(parts)
        names = _place_names(media)
        for name, value in (
            ("parts", tuple(parts)),
            ("media", tuple(part for part, _ in media)),
            ("interfaces", tuple(bond for bond, _ in bonds)),
            ("ambient", _ambient(ambient)),
            ("surface_roughness", checked("roughness", surface_roughness, "surface")),
            ("names", names),
            ("interface_names", _bond_names(names, bonds)),
        ):
            object.__setattr__(self, name, value)

    def of(self, *parts: Part) -> Stack:
        """Return a stack of other parts under the same surface and ambient."""
        above = "air" if self.ambient is None else self.ambient
        return Stack(*parts, ambient=above, surface_roughness=self.surface_roughness)

    def __repr__(self) -> str:
        """Write the parts, one a line."""
        ambient = [] if self.ambient is None else [f"ambient={self.ambient.name!r}"]
        if not isinstance(self.surface_roughness, float | int) or self.surface_roughness:
            ambient.append(f"surface_roughness={self.surface_roughness!r}")
        lines = "".join(f"    {text},\n" for text in [*map(repr, self.parts), *ambient])
        return f"Stack(\n{lines})"

    def __str__(self) -> str:
        """Say the stack in one line, surface first."""
        above = "air" if self.ambient is None else self.ambient.name
        places = (place for part, place in unroll(self.parts) if not isinstance(part, Interface))
        return " / ".join([above, *_said(self.parts, dict(zip(places, self.names, strict=True)))])

    def written(self) -> list[tuple[Any, str, int]]:
        """Return every part once, with its name (none for an interface) and how often it lies in the sample."""
        placed = list(unroll(self.parts))
        count = Counter(place for _, place in placed)
        names = iter(self.names)
        out: dict[tuple[int, ...], tuple[Any, str, int]] = {}
        for part, place in placed:
            name = "" if isinstance(part, Interface) else next(names)
            whole = part.whole if isinstance(part, Slice) else part
            slices = whole.slices if isinstance(whole, Graded) else 1
            out.setdefault(place, (whole, name, count[place] // slices))
        return list(out.values())


_Placed = tuple[Any, tuple[int, ...] | None]
"""A part and the place it is written at; None for a weld that is not written."""


def _split(parts: tuple[Part, ...]) -> tuple[list[_Placed], list[_Placed]]:
    """Separate media from interfaces, filling welded ones in."""
    media: list[_Placed] = []
    bonds: list[_Placed] = []
    pending: _Placed | None = None
    for part, place in unroll(parts):
        where = f"Part {place[0] + 1} of the Stack"
        if isinstance(part, Interface):
            if not media or pending is not None:
                raise ValueError(
                    f"{where} is an Interface that has no layer above it; an Interface stands between two layers."
                )
            pending = (part, place)
        elif isinstance(part, Layer | Substrate | Slice):
            _add(media, bonds, (part, place), pending)
            pending = None
        else:
            raise ValueError(
                f"{where} is {_shown(part)}; give Layer, Interface, Graded, Repeat or Substrate."
            )
    if pending is not None or not media or not isinstance(media[-1][0], Substrate):
        raise ValueError(
            "A Stack must end with a Substrate (the half-space below everything; Substrate('vacuum') if there is none)."
        )
    return media, bonds


def _shown(part: Any) -> str:
    if isinstance(part, list | tuple):
        return f"a {type(part).__name__}, but parts are given one by one: Stack(layer, substrate) or Stack(*parts)"
    return repr(part) if isinstance(part, str | int | float) else f"a {type(part).__name__}"


def _add(media: list[_Placed], bonds: list[_Placed], medium: _Placed, bond: _Placed | None) -> None:
    """Put a medium below the others."""
    is_empty = isinstance(medium[0], Substrate) and medium[0].is_empty
    if is_empty and (bond is not None or not media):
        raise ValueError(
            "Vacuum below must follow a layer, with no Interface between: there is nothing to bond to."
        )
    if media:
        if isinstance(media[-1][0], Substrate):
            raise ValueError("The Stack goes on below its Substrate; the Substrate must be the last part.")
        bonds.append(bond or (WELDED, None))
    media.append(medium)


def _place_names(media: list[_Placed]) -> tuple[str, ...]:
    """Name the places; those of the same material are numbered from the top."""
    seen: Counter[str] = Counter()
    names: dict[Any, str] = {}
    for part, place in media:
        if place not in names:
            name = part.whole.name if isinstance(part, Slice) else part.material.name
            seen[name] += 1
            names[place] = name if seen[name] == 1 else f"{name}#{seen[name]}"
    return tuple(names[place] for _, place in media)


def _bond_names(names: tuple[str, ...], bonds: list[_Placed]) -> tuple[str, ...]:
    """Name an interface by the first pair of media it stands between; others of the same pair are numbered."""
    seen: Counter[str] = Counter()
    known: dict[Any, str] = {}
    out = []
    for above, below, (_, place) in zip(names, names[1:], bonds, strict=False):
        pair = f"{above}|{below}"
        if place is not None and place not in known:
            seen[pair] += 1
            known[place] = pair if seen[pair] == 1 else f"{pair}#{seen[pair]}"
        out.append(pair if place is None else known[place])
    return tuple(out)


def _said(
    parts: tuple[Any, ...], names: dict[tuple[int, ...], str], place: tuple[int, ...] = ()
) -> list[str]:
    """Say the parts as they are written, periods once."""
    said = []
    for position, part in enumerate(parts):
        here = (*place, position)
        if isinstance(part, Repeat):
            said.append(f"{part.count} x [{' / '.join(_said(part.parts, names, here))}]")
        elif here in names:
            said.append(names[here])
    return said


def _ambient(given: str | Material) -> Material | None:
    """Return the liquid above the stack, or None where it carries neither sound nor heat."""
    if isinstance(given, Material):
        return given
    if not isinstance(given, str):
        raise ValueError(f"ambient = {given!r}; give 'air', 'vacuum', or a liquid by name or as a Material.")
    return None if given.lower() in EMPTY else material(given)
