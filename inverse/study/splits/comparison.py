"""What a comparison of process splits has found, as plain frozen data."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from inverse.study.splits.data import Site
from inverse.study.splits.equivalent_layer import EquivalentLayer
from inverse.study.splits.hierarchy import HierarchyDraws
from inverse.study.splits.scatter import SplitPriors

__all__ = [
    "Comparison",
    "Interval",
    "Pair",
    "Question",
    "SplitEstimate",
    "WaferEstimate",
    "interval",
    "turned_side",
]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Interval:
    """Median and central interval."""

    median: float
    low: float
    high: float


def interval(draws: Array, mass: float = 0.95) -> Interval:
    """Summarise draws by median and central interval."""
    low, median, high = np.quantile(draws, [0.5 - mass / 2, 0.5, 0.5 + mass / 2])
    return Interval(float(median), float(low), float(high))


@dataclass(frozen=True)
class Question:
    """What is asked of the splits.

    Attributes
    ----------
    quantity : str
    margin : float
    better : {"higher", "lower"}
    level : float
    logarithmic : bool
    layer : EquivalentLayer or None
        Interlayer that could act as a difference does; None where none could.
    """

    quantity: str
    margin: float
    better: str
    level: float
    logarithmic: bool
    layer: EquivalentLayer | None

    @property
    def sign(self) -> int:
        """1 where higher is better, else -1."""
        return 1 if self.better == "higher" else -1

    @property
    def least(self) -> float:
        """The margin in the variable compared."""
        return float(np.log1p(self.margin)) if self.logarithmic else self.margin


@dataclass(frozen=True)
class SplitEstimate:
    """A split's centre: the median over its wafers and sites.

    Attributes
    ----------
    name : str
    centre : Interval
        In the unit of the quantity.
    between, within : Interval
        Scatter (standard deviation) between wafers and between sites of a wafer, of the variable compared: of the
        logarithm, about the relative scatter, unless the scale is linear.
    wafers, sites : int
    rank : tuple of float
        Probability of each place, the best first.
    open_side : str
        ``"<"`` (``">"``) where every site only bounds the quantity from above (below), else empty: the other end
        of the interval then rests on the prior.
    """

    name: str
    centre: Interval
    between: Interval
    within: Interval
    wafers: int
    sites: int
    rank: tuple[float, ...]
    open_side: str


@dataclass(frozen=True)
class WaferEstimate:
    """A wafer's centre, drawn towards its split's as far as its data are uncertain."""

    split: str
    wafer: str
    centre: Interval
    sites: int
    open_side: str


@dataclass(frozen=True)
class Pair:
    """Two splits against each other.

    Attributes
    ----------
    first, second : str
    difference : Interval
        First minus second, in the unit of the quantity.
    ratio : Interval or None
        First over second; None on a linear scale.
    better : float
        Probability that the first is better.
    better_by_margin, worse_by_margin : float
        Probability that the first is better (worse) by more than the margin.
    tail : float
        Two-sided tail probability of no difference.
    decided : bool
        The two differ, at the comparison's familywise level.
    equivalent_thickness : Interval or None
        Change of an interlayer's thickness, in nm, that would act as the difference of compliances does.
    open_side : str
        Ends of the ratio that rest on the prior: ``"<"`` where only its upper end is known, ``">"`` where only its
        lower, ``"<>"`` where neither is, else empty.
    """

    first: str
    second: str
    difference: Interval
    ratio: Interval | None
    better: float
    better_by_margin: float
    worse_by_margin: float
    tail: float
    decided: bool
    equivalent_thickness: Interval | None
    open_side: str


@dataclass(frozen=True, repr=False)
class Comparison:
    """Splits compared; shows its verdict at the prompt. `inverse.splits_table` gives the numbers as a table.

    Attributes
    ----------
    question : Question
    unit : str
        Of the quantity.
    splits : tuple of SplitEstimate
    pairs : tuple of Pair
    wafers : tuple of WaferEstimate
    sites : tuple of Site
    verdict, warnings : tuple of str
        Sentences.
    priors : SplitPriors
    posterior : HierarchyDraws
        Draws in the variable compared.
    """

    question: Question
    unit: str
    splits: tuple[SplitEstimate, ...]
    pairs: tuple[Pair, ...]
    wafers: tuple[WaferEstimate, ...]
    sites: tuple[Site, ...]
    verdict: tuple[str, ...]
    warnings: tuple[str, ...]
    priors: SplitPriors
    posterior: HierarchyDraws = field(repr=False)

    def __repr__(self) -> str:
        """Return verdict and warnings as text."""
        return "\n".join([*self.verdict, *(f"Warning: {w}" for w in self.warnings)])

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the splits."""
        return tuple(s.name for s in self.splits)

    def split(self, name: str) -> SplitEstimate:
        """Return one split's estimate.

        Raises
        ------
        ValueError
            If there is no such split.
        """
        return self.splits[self._place(name)]

    def pair(self, first: str, second: str) -> Pair:
        """Return two splits' comparison, the first over the second, whichever way round it was made.

        Raises
        ------
        ValueError
            If the two are not different splits of this comparison.
        """
        places = self._place(first), self._place(second)
        if places[0] == places[1]:
            raise ValueError(
                f"pair got '{first}' twice; give two different splits of {', '.join(self.names)}."
            )
        for pair in self.pairs:
            if (pair.first, pair.second) == (first, second):
                return pair
            if (pair.first, pair.second) == (second, first):
                return _turned(pair)
        raise AssertionError("every pair of splits is compared")

    def values(self, name: str) -> Array:
        """Return draws of a split's centre in the unit of the quantity, shape (draws,)."""
        column = self.posterior.centre[:, self._place(name)]
        return np.exp(column) if self.question.logarithmic else column.copy()

    def _place(self, name: str) -> int:
        if name not in self.names:
            raise ValueError(f"there is no split '{name}'; the comparison has {', '.join(self.names)}.")
        return self.names.index(name)


def _turned(pair: Pair) -> Pair:
    ratio = (
        None
        if pair.ratio is None
        else Interval(1 / pair.ratio.median, 1 / pair.ratio.high, 1 / pair.ratio.low)
    )
    return Pair(
        pair.second,
        pair.first,
        _negative(pair.difference),
        ratio,
        1 - pair.better,
        pair.worse_by_margin,
        pair.better_by_margin,
        pair.tail,
        pair.decided,
        None if pair.equivalent_thickness is None else _negative(pair.equivalent_thickness),
        turned_side(pair.open_side),
    )


def turned_side(side: str) -> str:
    """Return the open side of the inverse or the negative."""
    return {"<": ">", ">": "<"}.get(side, side)


def _negative(given: Interval) -> Interval:
    return Interval(-given.median, -given.high, -given.low)
