"""A table of texts with notes above it, written as plain text, Markdown, HTML or LaTeX."""

from __future__ import annotations

import html
import itertools
import re
import textwrap
from collections.abc import Callable
from dataclasses import dataclass

from inverse.report.unit_text import siunitx_unit, unit_text

__all__ = ["Rendered", "Sheet"]

_UNIT = "unit"
_WIDEST = 60
_NUMBER = re.compile(r"(?<![\w.#])[+-]?\d+(?:\.\d+)?(?:\(\d+\))?(?:e-?\d+)?(?![\w.])")
_LATEX = {
    "\\": r"\textbackslash{}", "&": r"\&", "%": r"\%", "#": r"\#", "_": r"\_", "$": r"\$",
    "{": r"\{", "}": r"\}",
    "|": r"\textbar{}", "<": r"$<$", ">": r"$>$", "~": r"\textasciitilde{}", "^": r"\textasciicircum{}",
}  # fmt: skip


@dataclass(frozen=True)
class Sheet:
    """Texts in rows and columns.

    Attributes
    ----------
    columns : tuple of str
        Headings. A column headed ``unit`` holds units as results carry them and is typeset as such.
    cells : tuple of tuple of str
        One tuple per row.
    notes : tuple of str
        Lines above the table.
    """

    columns: tuple[str, ...]
    cells: tuple[tuple[str, ...], ...]
    notes: tuple[str, ...] = ()

    def plain(self) -> str:
        """Return fixed-width text; long texts are broken into lines."""
        rows = [line for row in self._with_units(unit_text) for line in _wrapped(row)]
        widths = [max(map(len, column)) for column in zip(self.columns, *rows, strict=True)]
        rows = [self.columns, tuple("-" * width for width in widths), *rows]
        lines = ["  ".join(c.ljust(w) for c, w in zip(row, widths, strict=True)).rstrip() for row in rows]
        return "\n".join([*self.notes, *([""] if self.notes else []), *lines])

    def markdown(self) -> str:
        """Return a Markdown table, the notes as paragraphs before it."""
        rows = [self.columns, ("---",) * len(self.columns), *self._with_units(unit_text)]
        lines = ["| " + " | ".join(cell.replace("|", r"\|") for cell in row) + " |" for row in rows]
        return "\n".join([*(f"{note}\n" for note in self.notes), *lines])

    def html(self) -> str:
        """Return an HTML table with the notes above it."""
        notes = "".join(f"<p>{html.escape(note)}</p>" for note in self.notes)
        head = _html_row("th", self.columns)
        body = "".join(_html_row("td", row) for row in self._with_units(unit_text))
        return f"<div>{notes}<table><thead>{head}</thead><tbody>{body}</tbody></table></div>"

    def latex(self) -> str:
        r"""Return a LaTeX tabular that needs booktabs and siunitx; the notes are comments before it."""
        body = []
        for row in self.cells:
            cells = [
                _latex_unit(c) if h == _UNIT else _latex_cell(c)
                for h, c in zip(self.columns, row, strict=True)
            ]
            body.append(" & ".join(cells) + r" \\")
        lines = [rf"\begin{{tabular}}{{{'l' * len(self.columns)}}}", r"\toprule"]
        lines += [" & ".join(map(_escape, self.columns)) + r" \\", r"\midrule", *body]
        return "\n".join([*(f"% {note}" for note in self.notes), *lines, r"\bottomrule", r"\end{tabular}"])

    def _with_units(self, write: Callable[[str], str]) -> list[tuple[str, ...]]:
        return [
            tuple(write(c) if h == _UNIT else c for h, c in zip(self.columns, row, strict=True))
            for row in self.cells
        ]


class Rendered:
    """What can be shown as a sheet: text at the prompt, HTML in a notebook, Markdown and LaTeX on request."""

    def sheet(self) -> Sheet:
        """Return the texts in rows and columns."""
        raise NotImplementedError

    def __repr__(self) -> str:
        return self.sheet().plain()

    def _repr_html_(self) -> str:
        return self.sheet().html()

    def markdown(self) -> str:
        """Return the table in Markdown."""
        return self.sheet().markdown()

    def latex(self) -> str:
        """Return the table in LaTeX (booktabs and siunitx)."""
        return self.sheet().latex()


def _wrapped(row: tuple[str, ...]) -> list[tuple[str, ...]]:
    """Break the long texts of a row; what follows stands below in its column."""
    parts = [textwrap.wrap(cell, _WIDEST) or [""] for cell in row]
    return list(itertools.zip_longest(*parts, fillvalue=""))


def _html_row(tag: str, cells: tuple[str, ...]) -> str:
    return "<tr>" + "".join(f"<{tag}>{html.escape(cell)}</{tag}>" for cell in cells) + "</tr>"


def _latex_unit(unit: str) -> str:
    return "" if unit in ("", "1") else rf"\unit{{{siunitx_unit(unit)}}}"


def _latex_cell(cell: str) -> str:
    """Escape a text and hand its numbers to siunitx."""
    parts, start = [], 0
    for found in _NUMBER.finditer(cell):
        parts += [_escape(cell[start : found.start()]), rf"\num{{{found.group()}}}"]
        start = found.end()
    return "".join([*parts, _escape(cell[start:])])


def _escape(text: str) -> str:
    return "".join(_LATEX.get(character, character) for character in text)
