"""What a check of coverage found, and its verdict."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from inverse.study.coverage.judgement import Replicate
from inverse.study.coverage.ranks import CELLS, Bands, counts, simultaneous_bands

__all__ = ["Coverage"]

_TELLS = 0.7
"""Share of a level that must be admitted at least, or passing means little."""


@dataclass(frozen=True)
class Coverage:
    """How often intervals held known truths.

    Attributes
    ----------
    replicates : tuple of Replicate
        Every one that was asked for, in order; none is left out.
    levels : tuple of float
    budget : float
        Probability that a correct problem fails the check, shared evenly by all quantities (Bonferroni).
    """

    replicates: tuple[Replicate, ...]
    levels: tuple[float, ...]
    budget: float

    @property
    def ranked(self) -> tuple[Replicate, ...]:
        """Replicates that have draws, whether or not they converged."""
        return tuple(r for r in self.replicates if r.status != "failed")

    @property
    def failed(self) -> tuple[Replicate, ...]:
        """Replicates without draws."""
        return tuple(r for r in self.replicates if r.status == "failed")

    @property
    def unconverged(self) -> tuple[Replicate, ...]:
        """Replicates with draws that missed the target; their ranks are counted."""
        return tuple(r for r in self.replicates if r.status == "not converged")

    @property
    def names(self) -> tuple[str, ...]:
        """Quantities that were ranked in every replicate with draws."""
        rows = self.ranked
        return tuple(n for n in rows[0].ranks if all(n in r.ranks for r in rows)) if rows else ()

    @cached_property
    def ranks(self) -> dict[str, NDArray[np.int64]]:
        """Quantity -> rank of the truth among 199 draws, per replicate with draws."""
        return {name: np.array([r.ranks[name] for r in self.ranked]) for name in self.names}

    @cached_property
    def bands(self) -> Bands:
        """What is admitted: see `inverse.study.coverage.ranks.simultaneous_bands`."""
        return simultaneous_bands(len(self.ranked), self.levels, self.budget / len(self.names))

    @cached_property
    def held(self) -> dict[str, NDArray[np.int64]]:
        """Quantity -> number of truths inside the central interval of each level."""
        return {n: counts(_histogram(r), self.levels)[0, -len(self.levels) :] for n, r in self.ranks.items()}

    def share(self, level: float, names: Iterable[str] | None = None) -> float:
        """Return the share of truths inside the intervals of a level, over all or some quantities.

        Parameters
        ----------
        level : float
            One of `levels`.
        names : iterable of str, optional
        """
        column = self.levels.index(level)
        chosen = list(self.names if names is None else names)
        return float(np.mean([self.held[name][column] for name in chosen]) / len(self.ranked))

    @cached_property
    def outside(self) -> dict[str, str]:
        """Quantity that leaves the bands -> what is wrong with its intervals."""
        return {n: self._fault(n) for n, ranks in self.ranks.items() if not self.bands.admits(ranks)}

    @property
    def passed(self) -> bool:
        """True if every quantity stays inside the bands and every replicate has draws."""
        return bool(self.ranked) and not self.failed and not self.outside

    def _fault(self, name: str) -> str:
        """Name the larger fault: of place (mean of the ranks) or of width (their spread), in standard errors."""
        centred = (self.ranks[name] + 0.5) / CELLS - 0.5
        place = float(centred.mean() * np.sqrt(12))
        width = float((np.mean(centred**2) - 1 / 12) * np.sqrt(180))
        if abs(place) > abs(width):
            return "too high" if place < 0 else "too low"
        return "too narrow" if width > 0 else "too wide"

    @property
    def verdict(self) -> str:
        """The outcome in words."""
        if not self.ranked:
            return f"Failed: none of {len(self.replicates)} replicates gave draws. First error: {self._first_error()}"
        sentences = [self._judgement(), *self._weakest()]
        if self.failed:
            sentences.append(
                f"{len(self.failed)} gave no draws, so the check fails. First: {self._first_error()}"
            )
        if self.unconverged:
            sentences.append(
                f"{len(self.unconverged)} did not reach the sampling target; their ranks are counted."
            )
        return " ".join(sentences)

    def _judgement(self) -> str:
        count, size = len(self.ranked), len(self.names)
        bands = f"bands that correct intervals leave with a probability of at most {self.budget:.2g}"
        if not self.outside:
            start = "Passed" if self.passed else "Failed"
            return f"{start}: in {count} replicates the ranks of all {size} quantities stay inside {bands}."
        listed = ", ".join(f"{name} ({fault})" for name, fault in self.outside.items())
        return (
            f"Failed: in {count} replicates {len(self.outside)} of {size} quantities leave {bands}: {listed}."
        )

    def _weakest(self) -> Iterator[str]:
        level = 0.9 if 0.9 in self.levels else self.levels[-1]
        column, count = self.levels.index(level), len(self.ranked)
        name = min(self.names, key=lambda n: self.held[n][column])
        low, high = 100 * self.bands.inside[column] / count
        if self.passed and low < _TELLS * 100 * level:
            yield (
                f"That is little: with so few replicates intervals that hold {low:.0f} %, not {100 * level:.0f}, "
                "would pass too. Ask for 50 or more."
            )
        yield (
            f"The {100 * level:.0f} % intervals hold {100 * self.share(level):.1f} % of the truths, those of {name} "
            f"least ({100 * self.held[name][column] / count:.1f} %); {low:.1f} to {high:.1f} % is admitted for each."
        )

    def _first_error(self) -> str:
        return self.failed[0].message if self.failed else "none"

    def table(self) -> str:
        """Return a Markdown table: share of truths held per quantity and level, and what is admitted."""
        head = ["quantity", *(f"{100 * p:.0f} %" for p in self.levels), "mean rank", "verdict"]
        count = len(self.ranked)
        rows = [self._row(name) for name in self.names]
        limits = [f"{100 * a / count:.1f} to {100 * b / count:.1f}" for a, b in self.bands.inside]
        rows.append(["admitted", *limits, "", ""])
        return "\n".join(_markdown([head, ["---"] * len(head), *rows]))

    def _row(self, name: str) -> list[str]:
        shares = [f"{100 * k / len(self.ranked):.1f}" for k in self.held[name]]
        rank = f"{self.ranks[name].mean() / (CELLS - 1):.3f}"
        return [name.replace("|", r"\|"), *shares, rank, self.outside.get(name, "inside")]

    def __repr__(self) -> str:
        return f"{self.verdict}\n\n{self.table()}" if self.ranked else self.verdict


def _histogram(ranks: NDArray[np.int64]) -> NDArray[np.int64]:
    return np.bincount(ranks, minlength=CELLS)[None]


def _markdown(rows: Sequence[Sequence[str]]) -> Iterator[str]:
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    for row in rows:
        yield "| " + " | ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)) + " |"
