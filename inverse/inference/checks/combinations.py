"""Combinations of unknowns that data determine although they do not determine the unknowns, in words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.description.wording import percent, plain, plus_minus
from inverse.inference.checks.identifiability import Local, Ridge

__all__ = ["Combination", "combinations_of"]

Array = NDArray[np.float64]

# Exponents this near to a multiple of a half are written as one.
_ROUND = 0.12
# A product or a sum whose coefficients vary by more than this along the ridge holds only locally.
_STEADY = 0.25


@dataclass(frozen=True)
class Combination:
    """One combination that is measured and the priors that make the split.

    Attributes
    ----------
    names : tuple of str
        The unknown that follows, then those whose priors make the split.
    coefficients : tuple of float
        Exponents of a product, factors of a sum, in the order of `names`; the first is 1.
    kind : {"product", "sum", "local sum"}
        A local sum holds at the posterior's centre only: its factors change along the ridge.
    text : str
        ``Al.thickness/Al.velocity``.
    value, width : float
        Median and half the 68 % interval; the width of a product is relative.
    unit : str
        Of `value`; empty where a product's unit is of no use.
    alone : tuple of float
        Half the 68 % interval of each unknown by itself, relative for a product.
    """

    names: tuple[str, ...]
    coefficients: tuple[float, ...]
    kind: str
    text: str
    value: float
    width: float
    unit: str
    alone: tuple[float, ...]

    @property
    def sentence(self) -> str:
        """The finding in words."""
        free = self.names[1:]
        priors = f"the prior on {free[0]}" if len(free) == 1 else f"the priors on {' and '.join(free)}"
        if self.kind == "product":
            width = percent(self.width)
            alone = ", ".join(f"{n} alone {percent(a)}" for n, a in zip(self.names, self.alone, strict=True))
        else:
            width = f"{plus_minus(self.value, self.width)} {self.unit}"
            alone = ", ".join(f"{n} alone ± {plain(a)}" for n, a in zip(self.names, self.alone, strict=True))
        near = " near the posterior's centre" if self.kind == "local sum" else ""
        return f"Only {self.text} is measured ({width}; {alone}){near}; the split comes from {priors}."


def combinations_of(
    ridge: Ridge, local: Local, values: Array | None, units: Mapping[str, str]
) -> tuple[Combination, ...]:
    """Say what is measured along a ridge, one combination for each unknown that follows.

    Parameters
    ----------
    ridge : Ridge
    local : Local
    values : array, shape (draws, unknowns), or None
        All draws of the unknowns of `local`, for the widths; without them the local covariance gives them.
    units : mapping
        Units by name.
    """
    return tuple(_combination(tied, ridge.free, local, values, units) for tied in ridge.tied)


def _combination(
    tied: int, free: tuple[int, ...], local: Local, values: Array | None, units: Mapping[str, str]
) -> Combination:
    at = [tied, *free]
    covariance = local.covariance[:, at][:, :, at] * local.slope[:, at, None] * local.slope[:, None, at]
    x = local.values[:, at]
    # d(tied) / d(free) at fixed data, from every draw.
    b = np.asarray(np.linalg.solve(covariance[:, 1:, 1:], covariance[:, 1:, :1])[..., 0], dtype=float)
    exponents = b * x[:, 1:] / np.where(x[:, :1] == 0, np.nan, x[:, :1])
    kind, factors = _form(b, exponents, positive=bool((x > 0).all()))
    names = tuple(local.names[i] for i in at)
    draws = None if values is None else values[:, at]
    coefficients = np.concatenate([[1.0], -factors])
    if kind == "product":
        value, width, alone = _product_widths(coefficients, x, covariance, draws)
        return Combination(
            names, tuple(coefficients), kind, _product(names, coefficients), value, width, "", alone
        )
    value, width, alone = _sum_widths(coefficients, x, covariance, draws)
    return Combination(
        names, tuple(coefficients), kind, _sum(names, coefficients), value, width, units[names[0]], alone
    )


def _form(factors: Array, exponents: Array, positive: bool) -> tuple[str, Array]:
    """Choose between a product of powers and a weighted sum by which coefficients are steadier along the ridge."""
    found = np.median(exponents, axis=0)
    halves = np.round(2 * found) / 2
    is_round = bool(np.all(np.abs(found - halves) < _ROUND) and np.all(halves != 0))
    product, total = _unsteady(exponents), _unsteady(factors)
    if positive and product < _STEADY and (is_round or product < total):
        return "product", halves if is_round else found
    return ("sum" if total < _STEADY else "local sum"), np.median(factors, axis=0)


def _unsteady(coefficients: Array) -> float:
    if not np.isfinite(coefficients).all():
        return np.inf
    middle = np.median(coefficients, axis=0)
    spread = np.median(np.abs(coefficients - middle), axis=0)
    return float(np.max(1.48 * spread / np.maximum(np.abs(middle), 1e-300)))


def _product_widths(
    exponents: Array, x: Array, covariance: Array, draws: Array | None
) -> tuple[float, float, tuple[float, ...]]:
    if draws is None:
        relative = covariance / (x[:, :, None] * x[:, None, :])
        value = float(np.median(np.prod(x**exponents, axis=1)))
        return value, *_local_widths(exponents, relative)
    logs = np.log(draws)
    combined = logs @ exponents
    return float(np.exp(np.median(combined))), _half(combined), tuple(_half(column) for column in logs.T)


def _sum_widths(
    factors: Array, x: Array, covariance: Array, draws: Array | None
) -> tuple[float, float, tuple[float, ...]]:
    if draws is None:
        return float(np.median(x @ factors)), *_local_widths(factors, covariance)
    combined = draws @ factors
    return float(np.median(combined)), _half(combined), tuple(_half(column) for column in draws.T)


def _local_widths(factors: Array, covariance: Array) -> tuple[float, tuple[float, ...]]:
    variance = np.einsum("i,nij,j->n", factors, covariance, factors)
    alone = np.median(np.diagonal(covariance, axis1=1, axis2=2), axis=0)
    return float(np.sqrt(np.median(variance))), tuple(map(float, np.sqrt(alone)))


def _half(draws: Array) -> float:
    low, high = np.quantile(draws, [0.16, 0.84])
    return float(high - low) / 2


def _product(names: tuple[str, ...], exponents: Array) -> str:
    over = [_power(n, e) for n, e in zip(names, exponents, strict=True) if e > 0]
    under = [_power(n, -e) for n, e in zip(names, exponents, strict=True) if e < 0]
    below = f"/({' '.join(under)})" if len(under) > 1 else "".join(f"/{u}" for u in under)
    return " × ".join(over) + below


def _power(name: str, exponent: float) -> str:
    return name if exponent == 1 else f"{name}^{exponent:.2g}"


def _sum(names: tuple[str, ...], factors: Array) -> str:
    terms = [names[0]]
    for name, factor in zip(names[1:], factors[1:], strict=True):
        terms.append(f"{'-' if factor < 0 else '+'} {abs(factor):.3g} {name}")
    return " ".join(terms)
