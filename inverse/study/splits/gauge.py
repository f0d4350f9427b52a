"""A reference wafer: bias, repeatability and tool-to-tool scatter from repeated measurements of one known sample."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_seed, whole_number
from inverse.study.splits.comparison import Interval, interval
from inverse.study.splits.data import Site, collect
from inverse.study.splits.hierarchy import HierarchyDraws, Wafer, sample_hierarchy
from inverse.study.splits.scatter import SplitPriors
from inverse.study.splits.wording import number

__all__ = ["ReferenceStudy", "reference_wafer"]

Array = NDArray[np.float64]

GAUGE_PRIORS = SplitPriors(between=0.05, within=0.05)


@dataclass(frozen=True, repr=False)
class ReferenceStudy:
    """What repeated measurements of a known sample say of the tools.

    Attributes
    ----------
    quantity, unit : str
    logarithmic : bool
        Biases and scatters are of the natural logarithm, about relative ones.
    reference, reference_uncertainty : float
        Known value and its standard uncertainty, in the unit.
    tools : tuple of str
    bias : Interval
        Of all tools together, measured minus reference.
    tool_bias : tuple of Interval
        Of each tool.
    repeatability : Interval
        Standard deviation of one tool's repeated results, the uncertainty of each fit included.
    unexplained : Interval
        That part of it which the fits' own uncertainties do not explain.
    reproducibility : Interval
        Standard deviation between tools, repeatability not included.
    """

    quantity: str
    unit: str
    logarithmic: bool
    reference: float
    reference_uncertainty: float
    tools: tuple[str, ...]
    bias: Interval
    tool_bias: tuple[Interval, ...]
    repeatability: Interval
    unexplained: Interval
    reproducibility: Interval
    bias_draws: Array = field(repr=False)
    tool_draws: Array = field(repr=False)
    scatter_draws: Array = field(repr=False)

    def __repr__(self) -> str:
        """Return the study as text."""
        kind = "relative" if self.logarithmic else f"in {self.unit}"
        lines = [
            f"Reference {number(self.reference)} {self.unit}, {self.quantity}; numbers are {kind}, with 95 % intervals",
            f"bias               {_text(self.bias)}",
            f"repeatability      {_text(self.repeatability)} (of it beyond the fits' own: {_text(self.unexplained)})",
            f"tool to tool       {_text(self.reproducibility)}",
        ]
        pairs = zip(self.tools, self.tool_bias, strict=True)
        return "\n".join([*lines, *(f"bias of {name or 'the tool'}: {_text(b)}" for name, b in pairs)])

    def corrected(self, sites: tuple[Site, ...], quantity: str) -> tuple[Site, ...]:
        """Return sites with the mean bias of their tools taken out.

        Raises
        ------
        ValueError
            If the study was made of another quantity.
        """
        if quantity != self.quantity:
            raise ValueError(
                f"the reference study is of '{self.quantity}', not of '{quantity}'; make one of the latter."
            )
        return tuple(replace(s, table=s.table.shifted(-self._mean(s.tool))) for s in sites)

    def offsets(self, tools: tuple[str, ...], draws: int, rng: np.random.Generator) -> Array:
        """Draw what is left unknown of the tools' biases, shape (draws, tools); what they share is drawn once."""
        row = rng.integers(self.bias_draws.size, size=draws)
        columns = [self._draws(tool, row, rng) - self._mean(tool) for tool in tools]
        return np.stack(columns, axis=1)

    def _draws(self, tool: str, row: NDArray[np.int_], rng: np.random.Generator) -> Array:
        place = self._place(tool)
        if place is not None:
            return np.asarray(self.tool_draws[row, place])
        return np.asarray(self.bias_draws[row] + self.scatter_draws[row] * rng.standard_normal(row.size))

    def _mean(self, tool: str) -> float:
        place = self._place(tool)
        return float(np.median(self.bias_draws if place is None else self.tool_draws[:, place]))

    def _place(self, tool: str) -> int | None:
        """Find a tool; one without a name is the only one that the study has."""
        if not tool and len(self.tools) == 1:
            return 0
        return self.tools.index(tool) if tool in self.tools else None


def reference_wafer(
    results: Any,
    *,
    quantity: str,
    reference: float,
    seed: int,
    reference_uncertainty: float = 0.0,
    labels: Any = None,
    scale: str | None = None,
    priors: SplitPriors = GAUGE_PRIORS,
    prior: Any = None,
    draws: int = 20000,
) -> ReferenceStudy:
    """Find bias, repeatability and tool-to-tool scatter from repeated measurements of one known sample.

    Parameters
    ----------
    results : xarray.Dataset or mapping
        As for `compare_splits`; every site is one measurement of the sample.
    quantity : str
    reference : float
        Known value, in the unit of the quantity.
    seed : int
    reference_uncertainty : float
        Its standard uncertainty.
    labels : table, optional
        Columns ``site`` and ``tool``; without it (and without tools in a batch) all are of one tool.
    scale : {"log", "linear"}, optional
    priors : SplitPriors
        ``between`` of tools, ``within`` of repetitions.
    prior : frozen distribution or mapping, optional
        Under which draws given as arrays were sampled.
    draws : int

    Returns
    -------
    ReferenceStudy
        To be handed to `compare_splits`.

    Raises
    ------
    ValueError
        If there are fewer than two measurements, or the reference is not a usable number.

    References
    ----------
    JCGM 100:2008, B.2.15 and B.2.16 (repeatability, reproducibility), and clause 6 on recognised systematic effects, to
    be corrected with the correction's uncertainty carried (from memory).
    """
    seed, draws = checked_seed(seed), whole_number("draws", draws, 1000)
    given = _single_tool(results) if labels is None else labels
    data = collect(results, quantity, given, scale, prior, ("tool",))
    if len(data.sites) < 2:
        raise ValueError(f"the reference wafer was measured {len(data.sites)} time; two or more are needed.")
    known, spread = _known(reference, reference_uncertainty, data.logarithmic)
    tools = tuple(dict.fromkeys(site.tool for site in data.sites))
    groups = [Wafer(t, tuple(s.table for s in data.sites if s.tool == t)) for t in tools]
    sequence = np.random.SeedSequence(seed)
    found = sample_hierarchy([groups], priors, seed=sequence, draws=draws, wafer_draws=draws)
    shift = known + spread * np.random.default_rng(sequence.spawn(1)[0]).standard_normal(draws)
    own = float(np.mean([s.table.moments(s.table.start, s.table.end)[1] ** 2 for s in data.sites]))
    return _study(
        quantity, data.unit, data.logarithmic, (reference, reference_uncertainty), tools, found, shift, own
    )


def _study(
    quantity: str,
    unit: str,
    logarithmic: bool,
    known: tuple[float, float],
    tools: tuple[str, ...],
    found: HierarchyDraws,
    shift: Array,
    own: float,
) -> ReferenceStudy:
    # A single tool's bias is that of the tool itself: what other tools would show is not asked.
    bias = (found.centre[:, 0] if len(tools) > 1 else found.wafers[0][:, 0]) - shift
    each = found.wafers[0] - shift[:, None]
    return ReferenceStudy(
        quantity,
        unit,
        logarithmic,
        *known,
        tools,
        interval(bias),
        tuple(interval(each[:, k]) for k in range(len(tools))),
        interval(np.sqrt(found.within[:, 0] ** 2 + own)),
        interval(found.within[:, 0]),
        interval(found.between[:, 0]),
        bias,
        each,
        found.between[:, 0],
    )


def _single_tool(results: Any) -> Any:
    if hasattr(results, "data_vars"):
        names = map(str, results["site"].values)
        return None if "tool" in results.coords else [{"site": n, "tool": "the tool"} for n in names]
    return [{"site": str(name), "tool": "the tool"} for name in results]


def _known(value: float, uncertainty: float, logarithmic: bool) -> tuple[float, float]:
    if not np.isfinite(value) or (logarithmic and value <= 0):
        raise ValueError(f"reference={value!r}; give the known value{', above zero' if logarithmic else ''}.")
    if not (np.isfinite(uncertainty) and uncertainty >= 0):
        raise ValueError(
            f"reference_uncertainty={uncertainty!r}; give its standard uncertainty, zero or positive."
        )
    return (float(np.log(value)), uncertainty / value) if logarithmic else (value, uncertainty)


def _text(given: Interval) -> str:
    return f"{number(given.median)} ({number(given.low)} to {number(given.high)})"
