"""A comparison in plain sentences: what is decided, what is not, and what to beware of."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from inverse.study.splits.comparison import Comparison, Interval, Pair
from inverse.study.splits.data import SiteData

if TYPE_CHECKING:
    from inverse.study.splits.gauge import ReferenceStudy

__all__ = ["chance", "number", "verdict", "warnings_for"]


def number(value: float) -> str:
    """Write a number to three significant figures."""
    return f"{value:.3g}"


def chance(probability: float) -> str:
    """Write a probability without claiming more than draws can show."""
    if probability > 0.9995:
        return "above 0.999"
    return "below 0.001" if probability < 0.0005 else f"{probability:.3f}"


def verdict(made: Comparison) -> tuple[str, ...]:
    """Say which splits differ, and which pairs are undecided, one sentence each."""
    head = _best(made)
    return (head, *(_pair(made, pair) for pair in made.pairs))


def _best(made: Comparison) -> str:
    ranked = sorted(made.splits, key=lambda s: -s.rank[0])
    first = ranked[0]
    beaten = [s.name for s in ranked[1:] if _beats(made, first.name, s.name)]
    centre = _between(first.centre, made.unit)
    what = f"{_superlative(made)} {made.question.quantity}"
    if len(beaten) == len(made.splits) - 1:
        return f"Split {first.name} is the best, with the {what}, {centre}. Decided."
    return (
        f"Undecided which split is the best, with the {what}: most probably {first.name} "
        f"({chance(first.rank[0])}; {centre})."
    )


def _beats(made: Comparison, first: str, second: str) -> bool:
    pair = made.pair(first, second)
    return pair.decided and pair.better > 0.5


def _superlative(made: Comparison) -> str:
    return "highest" if made.question.better == "higher" else "lowest"


def _pair(made: Comparison, pair: Pair) -> str:
    pair = pair if pair.better >= 0.5 else made.pair(pair.second, pair.first)
    amount = _amount(made, pair)
    odds = f"probability of {made.question.better} {chance(pair.better)}{_margin(made, pair)}"
    if pair.decided:
        return f"{pair.first} is {made.question.better} than {pair.second}: {amount}; {odds}. Decided."
    same = _practically_same(made, pair)
    return f"{pair.first} against {pair.second} is undecided: {amount}; {odds}.{same}"


def _amount(made: Comparison, pair: Pair) -> str:
    if pair.ratio is not None:
        return f"ratio {_between(pair.ratio, '1')}"
    return f"difference {_between(pair.difference, made.unit)}"


def _between(given: Interval, unit: str) -> str:
    tail = "" if unit == "1" else f" {unit}"
    return f"{number(given.median)}{tail} (95 %: {number(given.low)} to {number(given.high)})"


def _margin(made: Comparison, pair: Pair) -> str:
    if made.question.margin == 0:
        return ""
    return f", by more than {_margin_text(made)} {chance(pair.better_by_margin)}"


def _margin_text(made: Comparison) -> str:
    return (
        f"{100 * made.question.margin:g} %"
        if made.question.logarithmic
        else f"{made.question.margin:g} {made.unit}"
    )


def _practically_same(made: Comparison, pair: Pair) -> str:
    inside = 1 - pair.better_by_margin - pair.worse_by_margin
    if made.question.margin > 0 and inside > 1 - made.question.level:
        return f" They agree within {_margin_text(made)} with probability {chance(inside)}."
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
    out = []
    for pair in made.pairs:
        if pair.decided and pair.equivalent_thickness is not None:
            change = _between(_absolute(pair.equivalent_thickness), "nm")
            out.append(
                f"the difference of {pair.first} and {pair.second} may as well be one of {change} in the thickness of "
                f"a {layer[0]} interlayer (c33 = {layer[1]:g} GPa); a trace alone seldom tells the two apart."
            )
    return out


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
