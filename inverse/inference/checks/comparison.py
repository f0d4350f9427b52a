"""Comparison of models by how well they predict blocks of the trace that were left out.

Residuals are correlated, so that a point left out is known from its neighbours whatever the model; blocks longer than
the correlation time are not. Pareto-smoothed importance sampling turns the density of each block given the rest
(`inverse.inference.checks.block_density`) into that of blocks that were truly left out; a Pareto k above 0.7 tells that
it could not.
"""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.inference.checks.block_density import block_log_density
from inverse.inference.checks.posterior_draws import PosteriorDraws, posterior_draws
from inverse.inference.inversion import Inversion
from inverse.inference.problem.likelihood import TraceModel

if TYPE_CHECKING:
    import xarray as xr

__all__ = [
    "Comparison",
    "Prediction",
    "compare",
    "to_arviz",
    "with_log_likelihood",
]

Array = NDArray[np.float64]

UNRELIABLE = 0.7
"""Pareto k above which a block's density is not to be trusted."""

_FEWEST_BLOCKS = 8
_CORRELATIONS = 2.0
_DRAWS = 250


@dataclass(frozen=True)
class Prediction:
    """How well one model predicts what was left out.

    Attributes
    ----------
    name : str
    elpd, se : float
        Expected log predictive density of all blocks, and its standard error.
    p : float
        Effective number of unknowns.
    difference, difference_se : float
        `elpd` less the best model's, and the standard error of that, from the blocks in pairs.
    pareto_k : array, shape (blocks,)
    pointwise : array, shape (blocks,)
        Log predictive density of each block.
    """

    name: str
    elpd: float
    se: float
    p: float
    difference: float
    difference_se: float
    pareto_k: Array
    pointwise: Array


@dataclass(frozen=True, repr=False)
class Comparison:
    """Models ranked by how well they predict blocks left out.

    Attributes
    ----------
    models : tuple of Prediction
        The best first.
    block : float
        Length of the blocks, ps.
    warnings : tuple of str
        Where the numbers are not to be trusted.
    """

    models: tuple[Prediction, ...]
    block: float
    warnings: tuple[str, ...]

    @property
    def verdict(self) -> str:
        """The finding in plain words."""
        best, second = self.models[:2]
        gap, error = -second.difference, second.difference_se
        told = f"{gap:.1f} ± {error:.1f} in log predictive density"
        if gap < 2 * error or gap < 4:
            return f"The trace does not tell '{best.name}' from '{second.name}' ({told})."
        return f"'{best.name}' predicts what was left out better than '{second.name}' ({told})."

    def __str__(self) -> str:
        """Write table, verdict and warnings."""
        head = f"{'model':24s} {'elpd':>10s} {'se':>8s} {'p':>6s} {'difference':>11s} {'se':>7s} {'largest k':>9s}"
        rows = [
            f"{m.name:24s} {m.elpd:10.1f} {m.se:8.1f} {m.p:6.1f} {m.difference:11.1f} {m.difference_se:7.1f} "
            f"{m.pareto_k.max():9.2f}"
            for m in self.models
        ]
        count = self.models[0].pointwise.size
        said = f"{count} blocks of {self.block:.3g} ps or more were left out in turn."
        return "\n".join([head, *rows, said, self.verdict, *self.warnings])

    __repr__ = __str__


def compare(results: Mapping[str, xr.DataTree], *, block: float | None = None) -> Comparison:
    """Compare models of one trace, such as a perfect bond and a spring.

    Parameters
    ----------
    results : mapping of str to xarray.DataTree
        Two or more results of `sample_posterior` on the same trace with the same mask.
    block : float, optional
        Length of the blocks left out in ps; by default twice the longest median correlation time of the noise
        models, but never so long that fewer than 8 blocks remain.

    Returns
    -------
    Comparison

    Raises
    ------
    ValueError
        If there are fewer than two results, they are not of the same fitted data, or a result is of least squares.
    """
    if not isinstance(results, Mapping) or len(results) < 2:
        raise ValueError(
            "compare takes a mapping of names to two or more results: {'welded': a, 'spring': b}."
        )
    draws = {name: posterior_draws(result) for name, result in results.items()}
    least_squares = [name for name, d in draws.items() if not d.sampled]
    if least_squares:
        raise ValueError(
            f"{', '.join(least_squares)}: compare needs draws; give the result of sample_posterior."
        )
    _check_same_data({name: d.inversion for name, d in draws.items()})
    length = max(_default_block(d) for d in draws.values()) if block is None else float(block)
    found = {name: _loo(name, d, length) for name, d in draws.items()}
    order = sorted(found, key=lambda name: -float(found[name][0].sum()))
    best = found[order[0]][0]
    models = tuple(_prediction(name, *found[name], best) for name in order)
    weak = [
        f"{m.name}: Pareto k is above {UNRELIABLE} for {(m.pareto_k > UNRELIABLE).sum()} of {m.pareto_k.size} blocks; "
        "their densities are not reliable: take shorter blocks, or fit without them."
        for m in models
        if (m.pareto_k > UNRELIABLE).any()
    ]
    short = _too_short(draws, length)
    return Comparison(models, length, (*weak, *short))


def with_log_likelihood(
    result: xr.DataTree, *, block: float | None = None, draws: int = _DRAWS
) -> xr.DataTree:
    """Make a tree for ArviZ with the log densities of blocks left out.

    Parameters
    ----------
    result : xarray.DataTree
        From `sample_posterior` or `load`.
    block : float, optional
        Length of the blocks, ps; as in `compare`.
    draws : int
        Draws kept of each ensemble, evenly spread.

    Returns
    -------
    xarray.DataTree
        Groups ``posterior`` and ``log_likelihood`` (variable ``trace`` on chain, draw, block). ``az.loo`` and
        ``az.compare`` take ``to_arviz`` of it.

    Raises
    ------
    ValueError
        If `result` is not a sampling result.
    """
    found = posterior_draws(result)
    if not found.sampled:
        raise ValueError("with_log_likelihood needs draws; give the result of sample_posterior.")
    return _tree(found, _default_block(found) if block is None else float(block), draws)


def to_arviz(tree: xr.DataTree) -> Any:
    """Give ArviZ what it takes: the tree itself from 1.0 on, InferenceData before."""
    import arviz as az

    convert = getattr(az, "from_datatree", None)
    return tree if convert is None else convert(tree)


def _tree(draws: PosteriorDraws, length: float, count: int) -> xr.DataTree:
    import xarray as xr

    few = draws.thinned(count)
    chains, kept, _ = few.values.shape
    density = block_log_density(few.inversion, few.flat, length).reshape(chains, kept, -1)
    coords = {"chain": np.arange(chains), "draw": np.arange(kept)}
    posterior = {name: (("chain", "draw"), few.values[..., i]) for i, name in enumerate(few.inversion.names)}
    trace = {
        "trace": (
            ("chain", "draw", "block"),
            density,
            {"long_name": "log density of a block given the others"},
        )
    }
    return xr.DataTree.from_dict(
        {"posterior": xr.Dataset(posterior, coords), "log_likelihood": xr.Dataset(trace, coords)}
    )


def _loo(name: str, draws: PosteriorDraws, length: float) -> tuple[Array, Array, float]:
    """Return pointwise log predictive densities, Pareto k and the effective number of unknowns."""
    import arviz as az

    tree = _tree(draws, length, _DRAWS)
    with warnings.catch_warnings():
        # Its warning of large k is ours to give, with the model's name.
        warnings.simplefilter("ignore")
        found = az.loo(to_arviz(tree), pointwise=True)
    pointwise = found.loo_i if hasattr(found, "loo_i") else found.elpd_i
    p = found.p_loo if hasattr(found, "p_loo") else found.p
    return np.asarray(pointwise, dtype=float), np.asarray(found.pareto_k, dtype=float), float(p)


def _prediction(name: str, pointwise: Array, pareto_k: Array, p: float, best: Array) -> Prediction:
    apart = pointwise - best
    root = np.sqrt(pointwise.size)
    return Prediction(
        name=name,
        elpd=float(pointwise.sum()),
        se=float(root * pointwise.std(ddof=1)),
        p=p,
        difference=float(apart.sum()),
        difference_se=float(root * apart.std(ddof=1)),
        pareto_k=pareto_k,
        pointwise=pointwise,
    )


def _check_same_data(inversions: Mapping[str, Inversion]) -> None:
    first, *others = inversions
    for name in others:
        if not _same(inversions[first], inversions[name]):
            raise ValueError(
                f"'{first}' and '{name}' are not of the same fitted data; models are compared on one trace, with one "
                "mask."
            )


def _same(a: Inversion, b: Inversion) -> bool:
    if len(a.posterior.members) != len(b.posterior.members):
        return False
    for one, two in zip(a.posterior.members, b.posterior.members, strict=True):
        m, n = one.model, two.model
        if [c.name for c in m.channels] != [c.name for c in n.channels]:
            return False
        pairs = [(m.delay, n.delay), (m.used, n.used), *zip(_data(m), _data(n), strict=True)]
        if not all(np.array_equal(x, y) for x, y in pairs):
            return False
    return True


def _data(model: TraceModel) -> list[Array]:
    return [c.data for c in model.channels]


def _default_block(draws: PosteriorDraws) -> float:
    """Twice the median correlation time, but short enough for 8 blocks."""
    span = min(float(np.ptp(m.model.delay[m.model.used])) for m in draws.inversion.posterior.members)
    return min(_CORRELATIONS * _correlation_time(draws), span / (_FEWEST_BLOCKS + 1))


def _correlation_time(draws: PosteriorDraws) -> float:
    names = [n for n in draws.inversion.noise_names if draws.inversion.fields[n] == "noise.correlation_time"]
    if not names:
        return 0.0
    return max(float(np.median(draws.values[..., draws.inversion.names.index(n)])) for n in names)


def _too_short(draws: Mapping[str, PosteriorDraws], length: float) -> list[str]:
    longest = max(_correlation_time(d) for d in draws.values())
    if length >= longest:
        return []
    return [
        f"The blocks of {length:.3g} ps are shorter than the correlation time of the discrepancy, {longest:.3g} ps: "
        "neighbours tell what was left out, and the models look more alike than they are."
    ]
