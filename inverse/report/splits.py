"""Tables of a comparison of process splits: the splits, the pairs, the wafers."""

from __future__ import annotations

from dataclasses import dataclass

from inverse.report.rounding import decimal_place, fixed, format_range
from inverse.report.sheet import Rendered, Sheet
from inverse.study.splits.comparison import Comparison, Interval, Pair, SplitEstimate
from inverse.study.splits.wording import chance, number

__all__ = ["SplitsTable", "splits_table"]

_KINDS = ("pairs", "splits", "wafers")
_WIDE = 10.0  # a range of a decade has no one decimal place
_LEAST_THICKNESS = 0.01  # nm; less is no layer


@dataclass(frozen=True, repr=False)
class SplitsTable(Rendered):
    """One table of a comparison.

    Attributes
    ----------
    comparison : Comparison
    kind : {"pairs", "splits", "wafers"}
    """

    comparison: Comparison
    kind: str

    def sheet(self) -> Sheet:
        """Return the texts in rows and columns."""
        made = {"pairs": _pairs, "splits": _splits, "wafers": _wafers}[self.kind]
        return made(self.comparison)


def splits_table(comparison: Comparison, kind: str = "pairs") -> SplitsTable:
    """Tabulate a comparison.

    Parameters
    ----------
    comparison : Comparison
    kind : {"pairs", "splits", "wafers"}
        Differences with their probabilities; centres and scatter of the splits; shrunken estimates of the wafers.

    Returns
    -------
    SplitsTable
        Shows itself; ``.markdown()`` and ``.latex()`` write it.

    Raises
    ------
    ValueError
        If `comparison` is none, or `kind` is not known.
    """
    if not isinstance(comparison, Comparison):
        raise ValueError(
            f"splits_table takes what compare_splits returned, not a {type(comparison).__name__}."
        )
    if kind not in _KINDS:
        raise ValueError(f"kind={kind!r}; give one of {', '.join(_KINDS)}.")
    return SplitsTable(comparison, kind)


def _pairs(made: Comparison) -> Sheet:
    question = made.question
    measure = "ratio" if question.logarithmic else "difference"
    margin = f"{100 * question.margin:g} %" if question.logarithmic else f"{question.margin:g} {made.unit}"
    columns = ["pair", measure, "95 % interval", "unit", f"P({question.better})"]
    columns += [f"P(by more than {margin})"] * (question.margin > 0) + ["verdict"]
    layer = question.layer
    columns += [f"as {layer.name} thickness{'' if layer.exact else ', at least'}, nm"] if layer else []
    rows = tuple(_pair_cells(made, _best_first(made, pair)) for pair in made.pairs)
    notes = (*made.verdict, *(f"Warning: {w}" for w in made.warnings), _level(made))
    return Sheet(tuple(columns), rows, notes)


def _best_first(made: Comparison, pair: Pair) -> Pair:
    return pair if pair.better >= 0.5 else made.pair(pair.second, pair.first)


def _pair_cells(made: Comparison, pair: Pair) -> tuple[str, ...]:
    apart = pair.ratio or pair.difference
    unit = "1" if pair.ratio else made.unit
    sign = "/" if pair.ratio else "-"
    cells = [f"{pair.first} {sign} {pair.second}", *_cells(apart, pair.open_side), unit, chance(pair.better)]
    cells += [chance(pair.better_by_margin)] * (made.question.margin > 0)
    cells.append("decided" if pair.decided else "undecided")
    return (*cells, *([] if pair.equivalent_thickness is None else [_thickness(pair)]))


def _thickness(pair: Pair) -> str:
    """Write the interlayer's change; of two bonds that set only limits, how large it can be at most."""
    given = pair.equivalent_thickness
    assert given is not None
    largest = max(abs(given.low), abs(given.high))
    if largest < _LEAST_THICKNESS:
        return f"below {_LEAST_THICKNESS} either way"
    if pair.open_side == "<>":
        return f"below {number(largest)} either way"
    return " (".join(_cells(given)) + ")"


def _splits(made: Comparison) -> Sheet:
    columns = (
        "split",
        "wafers",
        "sites",
        "median",
        "95 % interval",
        "unit",
        "between wafers",
        "within wafers",
        "P(best)",
    )
    return Sheet(
        columns, tuple(_split_cells(made, s) for s in made.splits), (_scatter_note(made), _priors(made))
    )


def _split_cells(made: Comparison, split: SplitEstimate) -> tuple[str, ...]:
    scatter = (_scatter(made, s) for s in (split.between, split.within))
    counts = (str(split.wafers), str(split.sites))
    return (
        split.name,
        *counts,
        *_cells(split.centre, split.open_side),
        made.unit,
        *scatter,
        chance(split.rank[0]),
    )


def _wafers(made: Comparison) -> Sheet:
    rows = tuple(
        (w.split, w.wafer, str(w.sites), *_cells(w.centre, w.open_side), made.unit) for w in made.wafers
    )
    columns = ("split", "wafer", "sites", "median", "95 % interval", "unit")
    return Sheet(
        columns, rows, ("Wafers drawn towards their split's centre as far as their own data are uncertain.",)
    )


def _cells(given: Interval, open_side: str = "") -> tuple[str, str]:
    """Write median and interval to one decimal place, that of half the interval; or a limit, or a wide range."""
    if open_side:
        ends = {"<": f"< {number(given.high)}", ">": f"> {number(given.low)}"}
        return ends.get(open_side, "none"), "limit, 97.5 %" if open_side in ends else "both set only limits"
    if given.low > 0 and given.high > _WIDE * given.low:
        return number(given.median), f"{number(given.low)} to {number(given.high)}"
    half = (given.high - given.low) / 4
    place = decimal_place(half) if half > 0 else decimal_place(abs(given.median) or 1.0, 6)
    return fixed(given.median, place), format_range(given.low, given.high, place)


def _scatter(made: Comparison, given: Interval) -> str:
    factor = 100 if made.question.logarithmic else 1
    low, median, high = (number(factor * v) for v in (given.low, given.median, given.high))
    return f"{median} ({low} to {high}){' %' if made.question.logarithmic else ''}"


def _scatter_note(made: Comparison) -> str:
    kind = "relative (of the logarithm)" if made.question.logarithmic else f"in {made.unit}"
    return f"{made.question.quantity}; scatter as a standard deviation, {kind}, median and 95 % interval."


def _priors(made: Comparison) -> str:
    return f"Priors: {made.priors.text()}."


def _level(made: Comparison) -> str:
    level = f"{100 * made.question.level:g} %"
    return f"Pairs are decided at a familywise error of {level}, two-sided, by a step-down rule over all of them."
