"""What would decide it: the power of a comparison with more wafers, more sites or less noise."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_seed, whole_number
from inverse.study.splits.comparison import Comparison
from inverse.study.splits.decisions import decided, pairs_of, tail_probability
from inverse.study.splits.hierarchy import sample_normal_hierarchy
from inverse.study.splits.normal_sites import NormalWafer
from inverse.study.splits.scatter import SplitPriors

__all__ = ["Design", "PowerStudy", "comparison_power"]

Array = NDArray[np.float64]

_DRAWS = 2000


@dataclass(frozen=True)
class Design:
    """One way to repeat a comparison.

    Attributes
    ----------
    wafers, sites : int
        Wafers a split, sites a wafer.
    noise : float
        The sites' own uncertainty over that of the comparison made.
    power : float
        Share of simulated experiments in which the pair was decided, and rightly.
    error : float
        Monte Carlo standard error of `power`.
    """

    wafers: int
    sites: int
    noise: float
    power: float
    error: float


@dataclass(frozen=True, repr=False)
class PowerStudy:
    """Designs and their power.

    Attributes
    ----------
    first, second : str
    difference : float
        Ratio of the two (logarithmic scale) or their difference that is supposed true.
    logarithmic : bool
    designs : tuple of Design
    target : float
    shares : tuple of float
        Parts of a split centre's variance, as measured now, that come from the scatter between wafers, the scatter
        within wafers, and the sites' own uncertainty.
    """

    first: str
    second: str
    difference: float
    logarithmic: bool
    designs: tuple[Design, ...]
    target: float
    shares: tuple[float, float, float]

    @property
    def sufficient(self) -> tuple[Design, ...]:
        """Designs that reach the target, fewest measured sites first."""
        enough = [d for d in self.designs if d.power >= self.target]
        return tuple(sorted(enough, key=lambda d: (d.wafers * d.sites, -d.noise)))

    def __repr__(self) -> str:
        """Return the study as sentences and a table of text."""
        lines = [*self.verdict, "wafers  sites  noise  power"]
        lines += [
            f"{d.wafers:6d}  {d.sites:5d}  {d.noise:5g}  {d.power:.2f} ± {d.error:.2f}" for d in self.designs
        ]
        return "\n".join(lines)

    @property
    def verdict(self) -> tuple[str, ...]:
        """What to do, in sentences."""
        kind = "ratio" if self.logarithmic else "difference"
        asked = f"If {self.first} and {self.second} truly stand in a {kind} of {self.difference:.3g}"
        if self.sufficient:
            best = self.sufficient[0]
            found = (
                f"{best.wafers} wafers a split, {best.sites} sites a wafer and {best.noise:g} times the present noise "
                f"decide it with probability {best.power:.2f}"
            )
        else:
            found = f"no design here decides it with probability {self.target:g}; the best reaches {self._best:.2f}"
        between, within, own = (f"{100 * s:.0f} %" for s in self.shares)
        return (
            f"{asked}, {found}.",
            f"Of the variance of a split's centre {between} is scatter between wafers, {within} scatter within a "
            f"wafer, {own} the sites' own uncertainty.",
        )

    @property
    def _best(self) -> float:
        return max(d.power for d in self.designs)


def comparison_power(
    comparison: Comparison,
    first: str,
    second: str,
    *,
    seed: int,
    difference: float | None = None,
    wafers: Sequence[int] = (4, 6, 8, 12),
    sites: Sequence[int] | None = None,
    noise: Sequence[float] = (1.0, 0.5),
    scatter: tuple[float, float] | None = None,
    target: float = 0.8,
    experiments: int = 200,
) -> PowerStudy:
    """Simulate repetitions of a comparison and count how often a pair is decided.

    Parameters
    ----------
    comparison : Comparison
    first, second : str
        The pair.
    seed : int
    difference : float, optional
        Ratio of first over second (logarithmic scale), else first minus second, supposed true; by default the median
        found.
    wafers, sites : sequence of int
        Wafers a split, sites a wafer; by default as many sites as the comparison's wafers have on average.
    noise : sequence of float
        Factors to the sites' present uncertainty.
    scatter : (float, float), optional
        Scatter between and within wafers, supposed true; by default drawn anew for each experiment from what the
        comparison found, so that its uncertainty counts.
    target : float
        Power wanted.
    experiments : int
        Simulated for each design.

    Returns
    -------
    PowerStudy

    Raises
    ------
    ValueError
        If a split is unknown, or a number is out of range.

    Notes
    -----
    The other splits stand where the comparison found them; pairs are decided by the comparison's own rule and priors,
    site likelihoods being normal.
    """
    seed, found = checked_seed(seed), comparison.pair(first, second)
    logarithmic = comparison.question.logarithmic
    if difference is None:
        chosen = found.difference if found.ratio is None else found.ratio
        difference = chosen.median
    _check(difference, logarithmic, wafers, noise, target, experiments)
    count = round(sum(s.sites for s in comparison.splits) / sum(s.wafers for s in comparison.splits))
    sites = (max(count, 1),) if sites is None else tuple(sites)
    own = _own_uncertainty(comparison)
    apart = float(np.log(difference)) if logarithmic else difference
    places = comparison.names.index(first), comparison.names.index(second)
    centres = np.median(comparison.posterior.centre, axis=0)
    centres[places[0]] = centres[places[1]] + apart
    # Every design meets the same experiments, so that designs differ by themselves and not by luck.
    sequences = np.random.SeedSequence(seed).spawn(experiments)
    made = []
    for design in product(wafers, sites, noise):
        hits = [
            _is_decided(comparison, centres, places, design, own, scatter, np.random.default_rng(sequence))
            for sequence in sequences
        ]
        power = float(np.mean(hits))
        made.append(Design(*design, power, float(np.sqrt(max(power * (1 - power), 1e-4) / experiments))))
    return PowerStudy(
        first, second, difference, logarithmic, tuple(made), target, _shares(comparison, own, scatter)
    )


def _check(
    difference: float,
    logarithmic: bool,
    wafers: Sequence[int],
    noise: Sequence[float],
    target: float,
    count: int,
) -> None:
    if not np.isfinite(difference) or (logarithmic and difference <= 0):
        raise ValueError(
            f"difference={difference!r}; give a ratio above zero (a difference on a linear scale)."
        )
    if min(wafers) < 1 or min(noise) <= 0:
        raise ValueError(
            f"wafers={tuple(wafers)}, noise={tuple(noise)}; give one wafer or more, and factors above 0."
        )
    if not 0 < target < 1:
        raise ValueError(f"target={target!r}; give a probability between 0 and 1, such as 0.8.")
    whole_number("experiments", count, 20)


def _own_uncertainty(comparison: Comparison) -> float:
    """Median standard deviation of the likelihoods of the sites that set a bound."""
    spreads = [s.table.moments(s.table.start, s.table.end)[1] for s in comparison.sites if not s.open_side]
    if not spreads:
        raise ValueError("every site sets only a limit; there is no uncertainty from which to plan.")
    return float(np.median(spreads))


def _scatter(
    comparison: Comparison, scatter: tuple[float, float] | None, rng: np.random.Generator
) -> tuple[float, float]:
    if scatter is not None:
        return scatter
    row = rng.integers(len(comparison.posterior.typical_between))
    return float(comparison.posterior.typical_between[row]), float(comparison.posterior.typical_within[row])


def _is_decided(
    comparison: Comparison,
    centres: Array,
    places: tuple[int, int],
    design: tuple[int, int, float],
    own: float,
    scatter: tuple[float, float] | None,
    rng: np.random.Generator,
) -> bool:
    wafers, sites, factor = design
    between, within = _scatter(comparison, scatter, rng)
    middle = centres[:, None] + between * rng.standard_normal((centres.size, wafers))
    spread = np.hypot(within, factor * own)
    seen = middle[..., None] + spread * rng.standard_normal((centres.size, wafers, sites))
    splits = [[NormalWafer(row, np.full(sites, factor * own)) for row in split] for split in seen]
    drawn = sample_normal_hierarchy(
        splits, _priors(comparison), seed=int(rng.integers(2**62)), draws=_DRAWS
    ).centre
    pairs = pairs_of(centres.size)
    tails = [tail_probability(drawn[:, a] - drawn[:, b]) for a, b in pairs]
    at = pairs.index((min(places), max(places)))
    right = np.sign(np.mean(drawn[:, places[0]] - drawn[:, places[1]])) == np.sign(
        centres[places[0]] - centres[places[1]]
    )
    return bool(decided(tails, centres.size, comparison.question.level)[at] and right)


def _priors(comparison: Comparison) -> SplitPriors:
    return replace(comparison.priors, centre=None)


def _shares(
    comparison: Comparison, own: float, scatter: tuple[float, float] | None
) -> tuple[float, float, float]:
    posterior = comparison.posterior
    between, within = scatter or (np.median(posterior.typical_between), np.median(posterior.typical_within))
    sites = sum(s.sites for s in comparison.splits) / sum(s.wafers for s in comparison.splits)
    parts = np.array([between**2, within**2 / sites, own**2 / sites])
    return tuple(map(float, parts / parts.sum()))  # type: ignore[return-value]
