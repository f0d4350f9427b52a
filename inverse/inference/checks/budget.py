"""Where the uncertainty of each number comes from: noise, discrepancy, each prior, each fixed constant.

In the standard normal variables z of the priors, at the minimum, with the linear coefficients c eliminated: let
``V = dm/dz - A b`` be the part of the model's derivative that no change b of the coefficients can imitate, K the
covariance of the noise, and ``F = V' K^-1 V + b' b`` the information of the data. With ``C = (F + 1)^-1`` an error e
of the data moves the estimate by ``C V' K^-1 e``, an error of the prior on unknown j by column j of C, and a constant
that moves the model by h moves it by ``-C V' K^-1 h``. Without constants the contributions add up to
``C (F + 1) C = C``. This is Gauss and Newton's approximation, the elimination variable projection in Kaufman's form:
shifts come out within an eighth of those of refits. A constant that would move an unknown by more than its standard
deviation is not trusted to the straight line: the minimum, noise included, is found again with it one spread up and
down. Contributions are standard uncertainties and combine as JCGM 100:2008, 5.1.2.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity
from inverse.description.wording import plain
from inverse.inference.checks.constants import (
    FixedConstant,
    fixed_constants,
    member_constants,
    moved,
    with_constant,
)
from inverse.inference.derived import derived
from inverse.inference.minima.least_squares import refine
from inverse.inference.problem.likelihood import Channel, TraceModel
from inverse.inference.problem.posterior import Member

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion
    from inverse.inference.minima.least_squares import Fit

__all__ = ["Linearised", "budget", "constant_warnings", "linearise", "weigh_constants"]

Array = NDArray[np.float64]

WHITE, DISCREPANCY, COEFFICIENTS = "white noise", "discrepancy", "priors of the linear coefficients"

_STEP = 1e-4
# In units of a constant's spread; derivatives, so that a spread wider than a pulse does no harm.
_CONSTANT_STEP = 1e-3
_BATCH = 16
# Unknowns that a sentence names; those that a constant moves most.
_NAMED = 3


@dataclass(frozen=True)
class Linearised:
    """A problem made linear at a point.

    Attributes
    ----------
    names : tuple of str
        Unknowns other than noise.
    z : array, shape (all unknowns,)
        The point, in standard normal variables.
    covariance : array, shape (unknowns, unknowns)
        C, of the standard normal variables.
    scores : dict
        Source of noise -> covariance of ``V' K^-1 e``, shape (unknowns, unknowns).
    constants : tuple of FixedConstant
    shifts : array, shape (unknowns, constants)
        What one spread of each constant does to the estimate, in standard normal variables.
    """

    names: tuple[str, ...]
    z: Array
    covariance: Array
    scores: Mapping[str, Array]
    constants: tuple[FixedConstant, ...]
    shifts: Array


def budget(
    result: Any, *, quantities: Sequence[str] | None = None, refit: bool = True
) -> dict[str, dict[str, float]]:
    """Split the uncertainty of each number into what it comes from.

    Parameters
    ----------
    result : Fit or xarray.DataTree
        Of `Inversion.least_squares` or `Inversion.sample_posterior`. The split is made at the most probable minimum:
        of a posterior, the draw of the highest density, moved to its minimum.
    quantities : sequence of str, optional
        Unknowns other than noise and derived quantities; by default all of them that are finite.
    refit : bool
        Find the minimum again, one spread up and down, for each constant that moves an unknown by more than its
        standard deviation; without it such a constant's contribution is that of a straight line, and fast.

    Returns
    -------
    dict
        Quantity -> {source: standard uncertainty in the quantity's unit}. Sources: ``white noise``,
        ``discrepancy``, ``prior of <unknown>``, ``priors of the linear coefficients``, ``constant <name>``.
        `budget_table` presents it.

    Raises
    ------
    ValueError
        If `result` is neither kind, or a quantity is not of the problem.

    Notes
    -----
    Linear in everything: where a posterior is skewed or has several minima, the combined value differs from
    its standard deviation. A fixed constant contributes what its spread does to the estimate, although the
    posterior itself, for which it is known, does not contain it. A constant without a stated spread takes
    `inverse.inference.checks.constants.DEFAULT_RELATIVE_SPREAD`.

    References
    ----------
    JCGM 100:2008, Guide to the expression of uncertainty in measurement, 5.1.
    """
    inversion, z = _point(result)
    known = [name for name, v in _quantities(inversion, z[None]).items() if np.isfinite(v).all()]
    if isinstance(quantities, str):
        raise ValueError(f"quantities = {quantities!r}; give a list of names, such as [{quantities!r}].")
    asked = known if quantities is None else list(quantities)
    strange = [name for name in asked if name not in known]
    if strange:
        raise ValueError(f"No budget for {', '.join(strange)}; there is one for {', '.join(known)}.")
    linear = linearise(inversion, z, refit=refit)
    gradients, direct = _gradients(inversion, linear)
    return {name: _split(linear, gradients[name], direct[name]) for name in asked}


def constant_warnings(inversion: Inversion, fit: Fit, *, refit: bool = True) -> list[str]:
    """Say which fixed constants move an unknown by more than its standard deviation.

    Parameters
    ----------
    inversion : Inversion
    fit : Fit
        Its least-squares result.
    refit : bool
        As for `budget`.

    Returns
    -------
    list of str
        One sentence for each such constant, about the unknowns that it moves most; empty if there is none.
    """
    return weigh_constants(inversion, fit, refit=refit)[0]


def weigh_constants(
    inversion: Inversion, fit: Fit, *, refit: bool = True
) -> tuple[list[str], dict[str, float]]:
    """Say which fixed constants outweigh an interval, and what all of them would add to each quantity.

    Parameters
    ----------
    inversion, fit, refit
        As for `constant_warnings`.

    Returns
    -------
    warnings : list of str
    shares : dict
        Quantity -> root sum of squares of the constants' contributions, in its unit, as in `budget`.
    """
    linear = linearise(inversion, fit.best.z, refit=refit)
    ratios = np.abs(linear.shifts) / np.sqrt(linear.covariance.diagonal())[:, None]
    sd = dict(zip(fit.names, fit.sd, strict=True))
    warnings = []
    for constant, column in zip(linear.constants, ratios.T, strict=True):
        heavy = [i for i in np.argsort(-column) if column[i] > 1]
        moves = [(linear.names[i], float(column[i] * sd[linear.names[i]]), float(column[i])) for i in heavy]
        if moves:
            warnings.append(_warning(inversion, constant, moves))
    gradients, direct = _gradients(inversion, linear)
    shares = {name: float(np.linalg.norm(g @ linear.shifts + direct[name])) for name, g in gradients.items()}
    return warnings, {name: share for name, share in shares.items() if np.isfinite(share)}


def linearise(inversion: Inversion, z: Array, *, refit: bool = True) -> Linearised:
    """Make a problem linear at standard normal variables z.

    Parameters
    ----------
    inversion : Inversion
    z : array, shape (unknowns,)
    refit : bool
        As for `budget`.
    """
    physical = [i for i, name in enumerate(inversion.names) if name not in inversion.noise_names]
    names = tuple(inversion.names[i] for i in physical)
    constants = fixed_constants(inversion)
    members = inversion.posterior.as_gaussian(z).members
    parts = [_Part(inversion, member, z, physical, constants) for member in members]
    information = sum(part.information for part in parts)
    covariance = np.asarray(np.linalg.inv(np.eye(len(names)) + information), dtype=float)
    scores: dict[str, Array] = {}
    for part in parts:
        for source, score in part.scores.items():
            scores[source] = scores.get(source, 0.0) + score
    shifts = -covariance @ sum(part.pull for part in parts)
    heavy = (np.abs(shifts) > np.sqrt(covariance.diagonal())[:, None]).any(axis=0) & refit
    for k in np.flatnonzero(heavy):
        shifts[:, k] = _refitted(inversion, z, physical, constants[k].name)
    return Linearised(names, z, covariance, scores, constants, shifts)


def _refitted(inversion: Inversion, z: Array, physical: Sequence[int], name: str) -> Array:
    """Return the rms shift of the minimum with a constant one spread up and down, signed as the former."""
    chosen = np.isin(np.arange(z.size), physical)
    ends = [refine(with_constant(inversion.posterior, name, sign), chosen, z).z for sign in (1, -1)]
    up, down = ((end - z)[chosen] for end in ends)
    return np.copysign(np.sqrt((up**2 + down**2) / 2), up - down)


class _Part:
    """One trace's share: its information, the covariance of its scores and the pull of the constants on it."""

    def __init__(
        self,
        inversion: Inversion,
        member: Member,
        z: Array,
        physical: Sequence[int],
        constants: Sequence[FixedConstant],
    ) -> None:
        self.member, self.model = member, member.model
        self.values = _local(inversion, member, z[None])
        coefficients = self.model.eliminated(self.values).mean[0]
        slopes = self._of_unknowns(inversion, z, physical, coefficients)
        bends = self._of_constants(constants, coefficients)
        functions = {name: f[0] for name, f in self.model.functions(self.values).items()}
        noise = {c.name: _scalars(c.noise_values(self.values)) for c in self.model.channels}
        imitated = _imitated(self.model, self.values, functions, slopes, noise)
        own = {name: d - imitated.T @ functions[name] for name, d in slopes.items()}
        self.information = imitated.T @ imitated
        self.pull = np.zeros((len(physical), len(constants)))
        self.scores: dict[str, Array] = {COEFFICIENTS: imitated.T @ imitated}
        for channel in self.model.channels:
            self._add(channel, own[channel.name], bends[channel.name], noise[channel.name])

    def _add(self, channel: Channel, own: Array, bend: Array, noise: Mapping[str, float]) -> None:
        """Add a channel, with ``K^-1 V = (V - f) / (sigma d)^2``, f the discrepancy that V would be taken for."""
        taken = channel.noise.discrepancy(own, noise)
        white = noise["white"] * channel.noise.relative
        solved = (own - taken) / white**2
        self.information = self.information + solved @ own.T
        self.pull += solved @ bend.T
        scaled = solved * white
        self._score(WHITE, scaled @ scaled.T)
        if "discrepancy" in noise:
            # f = a^2 R K^-1 V, so that this is the discrepancy's own covariance seen through K^-1 V.
            self._score(DISCREPANCY, solved @ taken.T)

    def _score(self, source: str, score: Array) -> None:
        self.scores[source] = self.scores.get(source, 0.0) + (score + score.T) / 2

    def _of_unknowns(
        self, inversion: Inversion, z: Array, physical: Sequence[int], coefficients: Array
    ) -> dict[str, Array]:
        """Return d(model)/dz per channel, shape (unknowns, delays)."""
        steps = _STEP * np.eye(z.size)[list(physical)]
        up, down = (
            _contracted(self.model, _local(inversion, self.member, z + sign * steps), coefficients)
            for sign in (1, -1)
        )
        return {name: (up[name] - down[name]) / (2 * _STEP) for name in up}

    def _of_constants(self, constants: Sequence[FixedConstant], coefficients: Array) -> dict[str, Array]:
        """Return what one spread of each constant adds to the model, shape (constants, delays)."""
        own = member_constants(self.member)
        out = {c.name: np.zeros((len(constants), c.noise.delay.size)) for c in self.model.channels}
        for k, constant in enumerate(constants):
            if constant.name not in own:
                continue
            low, high = _ends(own[constant.name])
            below, above = (self._with(constant.name, end, coefficients) for end in (low, high))
            for name, rows in out.items():
                rows[k] = (above[name] - below[name])[0] / (high - low)
        return out

    def _with(self, name: str, spreads: float, coefficients: Array) -> dict[str, Array]:
        """Return the model with one constant moved."""
        other = moved(self.member, name, spreads)
        fixed = {inner: np.full(1, value) for inner, value in other.fixed.items()}
        return _contracted(other.model, {**self.values, **fixed}, coefficients)


def _contracted(model: TraceModel, values: Mapping[str, Array], coefficients: Array) -> dict[str, Array]:
    """Return the traces of given coefficients per channel, shape (sets, delays)."""
    sets = len(next(iter(values.values())))
    pieces: dict[str, list[Array]] = {c.name: [] for c in model.channels}
    for start in range(0, sets, _BATCH):
        block = {name: v[start : start + _BATCH] for name, v in values.items()}
        for name, functions in model.functions(block).items():
            pieces[name].append(np.einsum("c,bcn->bn", coefficients, functions))
    return {name: np.concatenate(p) for name, p in pieces.items()}


def _imitated(
    model: TraceModel,
    values: Mapping[str, Array],
    functions: Mapping[str, Array],
    slopes: Mapping[str, Array],
    noise: Mapping[str, Mapping[str, float]],
) -> Array:
    """Return the coefficients that imitate each unknown's derivative best, shape (coefficients, unknowns)."""
    basis, _ = model.whitened(_scalars(values), functions)
    white = np.concatenate([c.noise.whiten(slopes[c.name], noise[c.name]) for c in model.channels], axis=1)
    padded = np.pad(white, ((0, 0), (0, basis.shape[0] - white.shape[1])))
    return np.asarray(np.linalg.lstsq(basis, padded.T, rcond=None)[0])


def _ends(constant: FixedConstant) -> tuple[float, float]:
    """Return where the derivative is taken, in spreads; on one side only where the constant stands on its bound."""
    q, step = quantity(constant.field), _CONSTANT_STEP * constant.spread
    low = 0.0 if constant.value - step < q.low else -_CONSTANT_STEP
    return low, 0.0 if constant.value + step > q.high else _CONSTANT_STEP


def _local(inversion: Inversion, member: Member, z: Array) -> dict[str, Array]:
    parameters = inversion.posterior.parameters
    return member.local(parameters.named(parameters.to_values(z)))


def _scalars(values: Mapping[str, Array]) -> dict[str, float]:
    return {name: float(v[0]) for name, v in values.items()}


def _point(result: Any) -> tuple[Inversion, Array]:
    """Return the problem and its minimum in standard normal variables."""
    if hasattr(result, "best") and hasattr(result, "inversion"):
        return _with_traces(result.inversion), np.asarray(result.best.z)
    if not (hasattr(result, "children") and "posterior" in result.children):
        raise ValueError(
            f"budget got {type(result).__name__}; give the result of Inversion.least_squares or sample_posterior."
        )
    from inverse.inference.result import rebuild

    inversion = rebuild(result)
    density = result["sample_stats"]["lp"].values
    place = np.unravel_index(int(np.argmax(density)), density.shape)
    values = np.array([[result["posterior"][name].values[place] for name in inversion.names]])
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    draw = inversion.posterior.parameters.to_z(values)[0]
    return inversion, refine(inversion.posterior, physical, draw).z


def _with_traces(inversion: Any) -> Inversion:
    if not hasattr(getattr(inversion, "posterior", None), "members"):
        raise ValueError("budget takes the fit of an Inversion; this fit is of another kind of problem.")
    return inversion


def _gradients(inversion: Inversion, linear: Linearised) -> tuple[dict[str, Array], dict[str, Array]]:
    """Return d(quantity)/dz, and what one spread of each constant does to a quantity at given unknowns."""
    physical = [inversion.names.index(name) for name in linear.names]
    steps = _STEP * np.eye(linear.z.size)[physical]
    up, down = (_quantities(inversion, linear.z + sign * steps) for sign in (1, -1))
    with np.errstate(invalid="ignore"):
        slopes = {name: (up[name] - down[name]) / (2 * _STEP) for name in up}
    direct = {name: np.zeros(len(linear.constants)) for name in up}
    for k, constant in enumerate(linear.constants):
        low, high = _ends(constant)
        below, above = (_quantities(inversion, linear.z[None], (constant.name, end)) for end in (low, high))
        with np.errstate(invalid="ignore"):
            for name in direct:
                direct[name][k] = (above[name] - below[name])[0] / (high - low)
    return slopes, direct


def _quantities(inversion: Inversion, z: Array, change: tuple[str, float] | None = None) -> dict[str, Array]:
    """Return the unknowns other than noise and what follows from them, shape (n,), one constant moved."""
    named = inversion.posterior.parameters.named(inversion.posterior.parameters.to_values(z))
    out = {name: v for name, v in named.items() if name not in inversion.noise_names}
    for member in inversion.posterior.members:
        bound, prefix = member.model.bound, f"{member.label}:" if member.label else ""
        local = member.local(named)
        fixed = moved(member, *change).fixed if change else {}
        found = derived(bound, {**local, **{name: np.full(len(z), v) for name, v in fixed.items()}})
        out |= {prefix + name: found[name] for name in derived(bound, local)}
    return out


def _split(linear: Linearised, gradient: Array, direct: Array) -> dict[str, float]:
    response = linear.covariance @ gradient
    out = {
        source: float(np.sqrt(max(float(response @ score @ response), 0.0)))
        for source, score in linear.scores.items()
    }
    out |= {f"prior of {name}": abs(float(r)) for name, r in zip(linear.names, response, strict=True)}
    shifts = gradient @ linear.shifts + direct
    return out | {f"constant {c.name}": abs(float(m)) for c, m in zip(linear.constants, shifts, strict=True)}


def _warning(inversion: Inversion, constant: FixedConstant, moves: Sequence[tuple[str, float, float]]) -> str:
    origin = "stated" if constant.stated else "assumed, as none was given"
    own = "" if constant.unit == "1" else f" {constant.unit}"
    units = {name: f" {unit}" if (unit := inversion.units[name]) != "1" else "" for name, _, _ in moves}
    (name, size, ratio), *others = moves[:_NAMED]
    said = [f"{name} by {plain(size)}{units[name]}, {plain(ratio)} times its standard deviation"]
    said += [f"{n} by {plain(s)}{units[n]} ({plain(r)} times)" for n, s, r in others]
    if len(moves) > _NAMED:
        said.append(f"{len(moves) - _NAMED} more by more than theirs")
    return (
        f"The fixed constant {constant.name} = {constant.value:.4g}{own} (standard uncertainty "
        f"{constant.spread:.2g}, {origin}) moves {', '.join(said)}; give it a prior, or say how well it is known."
    )
