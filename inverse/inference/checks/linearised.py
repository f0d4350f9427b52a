"""A problem made linear at its minimum: what each error of the data and each constant does to the unknowns.

In the standard normal variables z of the priors, at the minimum, with the linear coefficients c eliminated: let
``V = dm/dz - A b`` be the part of the model's derivative that no change b of the coefficients can imitate, K the
covariance of the noise, and ``F = V' K^-1 V + b' b`` the information of the data. With ``C = (F + 1)^-1`` an error e
of the data moves the estimate by ``C V' K^-1 e``, an error of the prior on unknown j by column j of C, and a constant
that moves the model by h moves it by ``-C V' K^-1 h``. This is Gauss and Newton's approximation, the elimination
variable projection in Kaufman's form: shifts come out within an eighth of those of refits. A constant that would move
an unknown by more than its standard deviation is not trusted to the straight line: the minimum, noise included, is
found again with it one spread up and down.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity
from inverse.inference.checks.constants import (
    FixedConstant,
    fixed_constants,
    member_constants,
    moved,
    with_constant,
)
from inverse.inference.minima.least_squares import refine
from inverse.inference.problem.likelihood import Channel, TraceModel
from inverse.inference.problem.posterior import Member

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["COEFFICIENTS", "DISCREPANCY", "STEP", "WHITE", "Linearised", "constant_ends", "linearise"]

Array = NDArray[np.float64]

WHITE, DISCREPANCY, COEFFICIENTS = "white noise", "discrepancy", "priors of the linear coefficients"

STEP = 1e-4
"""For central differences in standard normal variables."""

# In units of a constant's spread; derivatives, so that a spread wider than a pulse does no harm.
_CONSTANT_STEP = 1e-3
_BATCH = 16


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
        steps = STEP * np.eye(z.size)[list(physical)]
        up, down = (
            _contracted(self.model, _local(inversion, self.member, z + sign * steps), coefficients)
            for sign in (1, -1)
        )
        return {name: (up[name] - down[name]) / (2 * STEP) for name in up}

    def _of_constants(self, constants: Sequence[FixedConstant], coefficients: Array) -> dict[str, Array]:
        """Return what one spread of each constant adds to the model, shape (constants, delays)."""
        own = member_constants(self.member)
        out = {c.name: np.zeros((len(constants), c.noise.delay.size)) for c in self.model.channels}
        for k, constant in enumerate(constants):
            if constant.name not in own:
                continue
            low, high = constant_ends(own[constant.name])
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


def constant_ends(constant: FixedConstant) -> tuple[float, float]:
    """Return where the derivative is taken, in spreads; on one side only where the constant stands on its bound."""
    q, step = quantity(constant.field), _CONSTANT_STEP * constant.spread
    low = 0.0 if constant.value - step < q.low else -_CONSTANT_STEP
    return low, 0.0 if constant.value + step > q.high else _CONSTANT_STEP


def _local(inversion: Inversion, member: Member, z: Array) -> dict[str, Array]:
    parameters = inversion.posterior.parameters
    return member.local(parameters.named(parameters.to_values(z)))


def _scalars(values: Mapping[str, Array]) -> dict[str, float]:
    return {name: float(v[0]) for name, v in values.items()}
