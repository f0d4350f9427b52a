"""A comparison in plain sentences: what is decided, what is not, and what to beware of."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from inverse.study.splits.comparison import Comparison, Interval, Pair
from inverse.study.splits.data import SiteData

if TYPE_CHECKING:
    from inverse.study.splits.gauge import ReferenceStudy

__all__ = ["chance", "margin_text", "number", "stated", "verdict", "warnings_for"]


def number(value: float) -> str:
    """Write a number to three significant figures."""
    return f"{value:.3g}"


def chance(probability: float) -> str:
    """Write a probability without claiming more than draws can show."""
    if probability > 0.9995:
        return "above 0.999"
    return "below 0.001" if probability < 0.0005 else f"{probability:.3f}"


def stated(given: Interval, unit: str = "1", open_side: str = "") -> str:
    """Write median and interval, or the limit where the other end of the interval rests on the prior.

    Parameters
    ----------
    given : Interval
    unit : str
    open_side : str
        As `Pair` has it.
    """
    tail = "" if unit == "1" else f" {unit}"
    if open_side == "<>":
        return "not determined, as both set only limits"
    if open_side:
        word, end = ("below", given.high) if open_side == "<" else ("above", given.low)
        return f"{word} {number(end)}{tail} (97.5 %)"
    return f"{number(given.median)}{tail} (95 %: {number(given.low)} to {number(given.high)})"


def verdict(made: Comparison, reference: ReferenceStudy | None = None) -> tuple[str, ...]:
    """Say which splits differ, which pairs are undecided, and what was corrected, one sentence each."""
    pairs = (_pair(made, pair) for pair in made.pairs)
    return (_best(made), *pairs, *_correction(made, reference))


def _correction(made: Comparison, reference: ReferenceStudy | None) -> list[str]:
    if reference is None:
        return []
    factor, unit = (100, "%") if made.question.logarithmic else (1, made.unit)
    used = {site.tool for site in made.sites}
    known = zip(reference.tools, reference.tool_bias, strict=True)
    parts = [f"{number(factor * b.median)} {unit} of {t or 'the tool'}" for t, b in known if t in used]
    text = ", ".join(parts) or f"{number(factor * reference.bias.median)} {unit}"
    return [f"Corrected for the bias on the reference wafer ({text}); what is not known of it is carried."]


def _best(made: Comparison) -> str:
    first, *others = sorted(made.splits, key=lambda s: -s.rank[0])
    what = f"with the {_superlative(made)} {made.question.quantity}"
    centre = stated(first.centre, made.unit, first.open_side)
    if all(_beats(made, first.name, s.name) for s in others):
        return f"Decided: split {first.name} is the best, {what}, {centre}."
    rest = ", ".join(f"{chance(s.rank[0])} for {s.name}" for s in others)
    return (
        f"Undecided which split is the best, {what}: probability {chance(first.rank[0])} for {first.name}, {rest}. "
        f"That of {first.name} is {centre}."
    )


def _beats(made: Comparison, first: str, second: str) -> bool:
    pair = made.pair(first, second)
    return pair.decided and pair.better > 0.5


def _superlative(made: Comparison) -> str:
    return "highest" if made.question.better == "higher" else "lowest"


def _pair(made: Comparison, pair: Pair) -> str:
    pair = pair if pair.better >= 0.5 else made.pair(pair.second, pair.first)
    asked = f"{made.question.quantity} is {made.question.better} in {pair.first} than in {pair.second}"
    odds = f"{_amount(made, pair)}; probability {chance(pair.better)}{_margin(made, pair)}."
    if pair.decided:
        return f"{asked}: {odds}"
    return f"Whether {asked} is undecided: {odds}{_practically_same(made, pair)}"


def _amount(made: Comparison, pair: Pair) -> str:
    if pair.ratio is not None:
        return f"ratio {stated(pair.ratio, '1', pair.open_side)}"
    return f"difference {stated(pair.difference, made.unit, pair.open_side)}"


def _margin(made: Comparison, pair: Pair) -> str:
    if made.question.margin == 0:
        return ""
    return f", {chance(pair.better_by_margin)} that it is by more than {margin_text(made)}"


def margin_text(made: Comparison) -> str:
    """Write the margin with its unit."""
    return (
        f"{100 * made.question.margin:g} %"
        if made.question.logarithmic
        else f"{made.question.margin:g} {made.unit}"
    )


def _practically_same(made: Comparison, pair: Pair) -> str:
    inside = 1 - pair.better_by_margin - pair.worse_by_margin
    if made.question.margin > 0 and inside > 1 - made.question.level:
        return f" They agree within {margin_text(made)} with probability {chance(inside)}."
    return ""


def warnings_for(
    made: Comparison,
    data: SiteData,
    reference: ReferenceStudy | None,
) -> tuple[str, ...]:
    """List what limits the comparison."""
    return tuple(
        [
            *data.left_out,
            *data.doubts,
            *_about_wafers(made),
            *_about_sites(data),
            *_about_priors(data),
            *_about_layer(made),
            *_about_tools(data, reference),
        ]
    )


def _about_wafers(made: Comparison) -> list[str]:
    single = [s.name for s in made.splits if s.wafers == 1]
    out = []
    if len(single) == len(made.splits):
        out.append(
            "every split has one wafer: nothing measures the scatter between wafers, and the intervals rest on its "
            "prior."
        )
    elif single:
        out.append(
            f"split {', '.join(single)} has one wafer; its scatter between wafers is that of the other splits."
        )
    if all(s.wafers == s.sites for s in made.splits):
        out.append(
            "every wafer has one site: scatter between and within wafers cannot be told apart, only their sum."
        )
    return out


def _about_sites(data: SiteData) -> list[str]:
    count = sum(bool(site.open_side) for site in data.sites)
    if count == 0:
        return []
    who = "all sites set" if count == len(data.sites) else f"{count} of {len(data.sites)} sites set"
    text = f"{who} only a limit; they count as limits, and what lies beyond rests on the prior of the split centres."
    return [text]


def _about_priors(data: SiteData) -> list[str]:
    if not data.flat:
        return []
    variable = "logarithm" if data.logarithmic else "quantity"
    return [
        f"the prior of {len(data.flat)} sites is not known and was taken as flat in the {variable}; give prior= if it "
        "was another."
    ]


def _about_layer(made: Comparison) -> list[str]:
    layer = made.question.layer
    if layer is None:
        return []
    least, how = ("", "inertia counted") if layer.exact else ("at least ", "inertia not counted")
    return [
        f"the difference of {pair.first} and {pair.second} may as well be one of {least}"
        f"{stated(_absolute(pair.equivalent_thickness), 'nm')} in the thickness of a {layer.name} interlayer ({how}); "
        "a trace alone seldom tells the two apart."
        for pair in made.pairs
        if pair.decided and pair.equivalent_thickness is not None
    ]


def _absolute(given: Interval) -> Interval:
    if given.median >= 0:
        return given
    return Interval(-given.median, -given.high, -given.low)


def _about_tools(data: SiteData, reference: ReferenceStudy | None) -> list[str]:
    tools = {site.tool for site in data.sites}
    if reference is None:
        if len(tools) > 1:
            return [
                f"{len(tools)} tools measured ({', '.join(sorted(tools))}) and no reference study was given: "
                "differences between tools count as differences between splits."
            ]
        return []
    strange = sorted(tools - set(reference.tools) - {""})
    if strange and np.any([t in reference.tools for t in tools]):
        return [
            f"tool {', '.join(strange)} did not measure the reference wafer; its offset is drawn from the scatter."
        ]
    return []
