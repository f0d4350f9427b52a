"""Propagation of uncertainty: JCGM 100 (linear and second order) and JCGM 101 (Monte Carlo)."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from inverse.description.arguments import checked_seed, whole_number
from inverse.report.finite_differences import second_order, slopes

__all__ = ["MonteCarlo", "Propagated", "linear_is_valid", "propagate", "propagate_distributions"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Propagated:
    """Result of the law of propagation of uncertainty.

    Attributes
    ----------
    value : numpy.ndarray
        The function at the estimates, shape () for one output or (outputs,).
    covariance : numpy.ndarray
        Covariance of the outputs, shape () or (outputs, outputs).
    contributions : numpy.ndarray
        Sensitivity coefficient times standard uncertainty of each input, signed, shape (inputs,) or
        (outputs, inputs).
    degrees_of_freedom : numpy.ndarray
        Effective degrees of freedom by the Welch-Satterthwaite formula, shape () or (outputs,).
    shift : numpy.ndarray
        Second-order shift of the expectation, zero for ``order=1``; `value` does not contain it.
    order : int
        1 or 2.
    """

    value: Array
    covariance: Array
    contributions: Array
    degrees_of_freedom: Array
    shift: Array
    order: int

    @property
    def standard_uncertainty(self) -> Array:
        """Combined standard uncertainty, shape of `value`."""
        return np.sqrt(self.covariance if self.value.ndim == 0 else np.diagonal(self.covariance))

    @property
    def correlation(self) -> Array:
        """Correlation matrix of the outputs, shape of `covariance`."""
        spread = self.standard_uncertainty
        return self.covariance / (spread**2 if spread.ndim == 0 else np.outer(spread, spread))

    def coverage_factor(self, mass: float = 0.95) -> Array:
        """Return the coverage factor from Student's t, degrees of freedom cut to the next lower integer.

        Parameters
        ----------
        mass : float
            Coverage probability, between 0 and 1.

        Raises
        ------
        ValueError
            If `mass` is not between 0 and 1.

        References
        ----------
        JCGM 100:2008, G.4.1.
        """
        from scipy import stats

        _check_mass(mass)
        whole = np.maximum(np.floor(self.degrees_of_freedom), 1.0)
        normal = np.isinf(whole)
        student = stats.t.ppf(0.5 + mass / 2, np.where(normal, 1.0, whole))
        return np.asarray(np.where(normal, stats.norm.ppf(0.5 + mass / 2), student))

    def expanded_uncertainty(self, mass: float = 0.95) -> Array:
        """Return the expanded uncertainty for coverage probability `mass`, shape of `value`."""
        return np.asarray(self.coverage_factor(mass) * self.standard_uncertainty)

    def interval(self, mass: float = 0.95) -> Array:
        """Return the symmetric coverage interval around `value`, last axis (low, high)."""
        half = self.expanded_uncertainty(mass)
        return np.stack([self.value - half, self.value + half], axis=-1)


@dataclass(frozen=True)
class MonteCarlo:
    """Result of the propagation of distributions.

    Attributes
    ----------
    draws : numpy.ndarray
        Outputs in the order drawn, shape (draws,) or (outputs, draws).
    """

    draws: Array

    @property
    def value(self) -> Array:
        """Mean of the draws."""
        return np.asarray(self.draws.mean(axis=-1))

    @property
    def standard_uncertainty(self) -> Array:
        """Standard deviation of the draws."""
        return np.asarray(self.draws.std(axis=-1, ddof=1))

    @property
    def standard_error(self) -> Array:
        """Monte Carlo standard error of `value`."""
        return np.asarray(self.standard_uncertainty / math.sqrt(self.draws.shape[-1]))

    @property
    def covariance(self) -> Array:
        """Covariance of the outputs."""
        return np.asarray(np.cov(self.draws))

    def interval(self, mass: float = 0.95, kind: str = "symmetric") -> Array:
        """Return a coverage interval.

        Parameters
        ----------
        mass : float
            Coverage probability.
        kind : {"symmetric", "shortest"}
            Probabilistically symmetric (equal tails) or shortest.

        Returns
        -------
        numpy.ndarray
            Last axis (low, high).

        Raises
        ------
        ValueError
            If `mass` is not between 0 and 1 or `kind` is unknown.

        References
        ----------
        JCGM 101:2008, 7.7.
        """
        _check_mass(mass)
        if kind == "symmetric":
            return np.moveaxis(np.quantile(self.draws, [0.5 - mass / 2, 0.5 + mass / 2], axis=-1), 0, -1)
        if kind == "shortest":
            return np.asarray(np.apply_along_axis(_shortest, -1, self.draws, mass))
        raise ValueError(f"kind = {kind!r}; expected 'symmetric' (equal tails) or 'shortest'.")


def propagate(
    function: Callable[..., Any],
    estimates: ArrayLike,
    covariance: ArrayLike,
    *,
    degrees_of_freedom: ArrayLike | None = None,
    order: int = 1,
) -> Propagated:
    r"""Propagate standard uncertainties through a function by its derivatives at the estimates.

    .. math:: u^2(y) = \sum_{ij} f_i f_j u(x_i, x_j)
       + \sum_{ij} \left[\tfrac12 f_{ij}^2 + f_i f_{ijj}\right] u^2(x_i) u^2(x_j)

    The second sum is taken for ``order=2`` only, in the form for independent normal inputs; correlated ones
    are first turned into independent ones. It holds where the function is close to a cubic over a few
    uncertainties.

    Parameters
    ----------
    function : callable
        Takes the inputs as separate arguments, numbers; returns a number or a sequence of numbers.
    estimates : array_like
        Best estimates of the inputs, shape (inputs,).
    covariance : array_like
        Standard uncertainties, shape (inputs,), or covariance matrix, shape (inputs, inputs).
    degrees_of_freedom : array_like, optional
        Of each input, shape (inputs,); ``inf`` where nothing is left out. Without it all are infinite.
    order : int
        1 or 2.

    Returns
    -------
    Propagated
        Value, covariance, contributions and effective degrees of freedom.

    Raises
    ------
    ValueError
        If shapes disagree, the covariance is not symmetric and positive semi-definite, `order` is not 1 or 2,
        degrees of freedom are finite for correlated inputs, or the function is not finite at the estimates.

    References
    ----------
    JCGM 100:2008, 5.1.2 with its note on second order, 5.2.2, G.4.1; F.1.2.3 for several outputs.

    Examples
    --------
    >>> width = propagate(lambda d, v: 2 * d / v, [60.0, 6.42], [0.5, 0.05])
    >>> round(float(width.standard_uncertainty), 3)
    0.213
    """
    if order not in (1, 2):
        raise ValueError(f"order = {order!r}; expected 1 (linear) or 2 (second-order terms added).")
    centre, matrix = _check_inputs(estimates, covariance)
    spread = np.sqrt(np.diagonal(matrix))
    dof = _check_degrees(degrees_of_freedom, matrix)
    value = _evaluate(function, centre)
    parts = slopes(lambda t: _evaluate(function, centre + spread * t), centre.size)
    variance = np.asarray(parts @ _correlation(matrix, spread) @ parts.T)
    shift = np.zeros_like(value)
    effective = _welch_satterthwaite(parts, variance, dof)
    if order == 2:
        root = _square_root(matrix, spread)
        extra, shift = second_order(lambda t: _evaluate(function, centre + root @ t), centre.size)
        variance = variance + extra
    return Propagated(value, variance, parts, effective, shift, order)


def propagate_distributions(
    function: Callable[..., Any], inputs: Sequence[Any], *, seed: int, draws: int = 1_000_000
) -> MonteCarlo:
    """Propagate whole distributions through a function by Monte Carlo.

    Parameters
    ----------
    function : callable
        Takes the inputs as separate arguments, arrays of shape (draws,); returns an array or a sequence of
        arrays.
    inputs : sequence
        Frozen scipy.stats distributions and numbers. A multivariate one stands for as many arguments as it
        has dimensions.
    seed : int
        Each input has its own stream, so that adding one leaves the others' draws as they were.
    draws : int
        Number of trials; JCGM 101 recommends 10^6 for a 95 % interval to one or two figures.

    Returns
    -------
    MonteCarlo
        The draws, with mean, standard deviation and coverage intervals.

    Raises
    ------
    ValueError
        If an input is neither a number nor a distribution, there are fewer than 1000 draws, or the function
        gives values that are not finite.

    References
    ----------
    JCGM 101:2008, clause 7.
    """
    draws = whole_number("draws", draws, 1000)
    streams = np.random.SeedSequence(checked_seed(seed)).spawn(len(inputs))
    arguments: list[Array] = []
    for position, (source, stream) in enumerate(zip(inputs, streams, strict=True)):
        arguments.extend(_draw(source, position, draws, np.random.default_rng(stream)))
    result = function(*arguments)
    values = (
        np.stack([np.broadcast_to(r, (draws,)) for r in result])
        if isinstance(result, tuple | list)
        else result
    )
    values = np.asarray(values, dtype=float)
    lost = int(np.sum(~np.isfinite(values)))
    if lost:
        raise ValueError(
            f"The function gave {lost} values that are not finite; restrict the inputs to its domain."
        )
    return MonteCarlo(values)


def linear_is_valid(linear: Propagated, trials: MonteCarlo, *, mass: float = 0.95, digits: int = 2) -> bool:
    """Tell whether Monte Carlo confirms the linear interval to the digits in which the uncertainty is stated.

    Parameters
    ----------
    linear : Propagated
        Of one output.
    trials : MonteCarlo
        Of the same function and inputs.
    mass : float
        Coverage probability of the intervals compared.
    digits : int
        Significant digits of the standard uncertainty that are to be right.

    Returns
    -------
    bool
        True if both end-points agree within half a unit of the last of those digits.

    References
    ----------
    JCGM 101:2008, 7.9.2 and 8.1.
    """
    from inverse.report.rounding import decimal_place

    tolerance = 0.5 * 10.0 ** decimal_place(float(trials.standard_uncertainty), digits)
    apart = np.abs(linear.interval(mass) - trials.interval(mass))
    return bool(np.all(apart <= tolerance))


def _check_mass(mass: float) -> None:
    if not 0 < mass < 1:
        raise ValueError(f"mass = {mass!r}; expected a probability between 0 and 1, such as 0.95.")


def _check_inputs(estimates: ArrayLike, covariance: ArrayLike) -> tuple[Array, Array]:
    centre = np.asarray(estimates, dtype=float)
    matrix = np.asarray(covariance, dtype=float)
    if centre.ndim != 1 or matrix.shape not in (centre.shape, centre.shape * 2):
        raise ValueError(
            f"estimates of shape {centre.shape} and covariance of shape {matrix.shape} do not fit; "
            "expected (n,) and either (n,) standard uncertainties or an (n, n) matrix."
        )
    if matrix.ndim == 1:
        if np.any(matrix < 0):
            raise ValueError(f"standard uncertainties {matrix} hold a negative number; give magnitudes.")
        matrix = np.diag(matrix**2)
    if not (np.all(np.isfinite(matrix)) and np.allclose(matrix, matrix.T, rtol=1e-9, atol=0)):
        raise ValueError("The covariance is not a finite symmetric matrix; give u(x_i, x_j) for every pair.")
    spread = np.sqrt(np.maximum(np.diagonal(matrix), 0))
    if np.any(np.diagonal(matrix) < 0) or np.linalg.eigvalsh(_correlation(matrix, spread)).min() < -1e-9:
        raise ValueError(
            "The covariance has a negative eigenvalue, so no inputs can have it; check the correlations."
        )
    return centre, matrix


def _check_degrees(degrees: ArrayLike | None, matrix: Array) -> Array:
    n = len(matrix)
    if degrees is None:
        return np.full(n, np.inf)
    dof = np.asarray(degrees, dtype=float)
    if dof.shape != (n,) or not np.all(dof > 0):
        raise ValueError(
            f"degrees_of_freedom = {degrees!r}; expected {n} positive numbers, inf where none are lost."
        )
    if np.any(np.isfinite(dof)) and np.any(matrix != np.diag(np.diagonal(matrix))):
        raise ValueError(
            "The Welch-Satterthwaite formula holds for independent inputs (JCGM 100, G.4.1), and these are "
            "correlated; leave degrees_of_freedom out, or use propagate_distributions."
        )
    return dof


def _evaluate(function: Callable[..., Any], point: Array) -> Array:
    value = np.asarray(function(*point), dtype=float)
    if value.ndim > 1 or not np.all(np.isfinite(value)):
        raise ValueError(
            f"The function gave {value!r} at {point}; expected a finite number or a sequence of them."
        )
    return value


def _correlation(matrix: Array, spread: Array) -> Array:
    scale = np.where(spread > 0, spread, 1.0)
    return np.asarray(matrix / np.outer(scale, scale))


def _square_root(matrix: Array, spread: Array) -> Array:
    """Return S with S S' = matrix; diagonal where the matrix is."""
    levels, vectors = np.linalg.eigh(_correlation(matrix, spread))
    return np.asarray(spread[:, None] * ((vectors * np.sqrt(np.maximum(levels, 0))) @ vectors.T))


def _welch_satterthwaite(contributions: Array, variance: Array, dof: Array) -> Array:
    total = variance if variance.ndim == 0 else np.diagonal(variance)
    lost = np.sum(contributions**4 / dof, axis=-1)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(lost > 0, total**2 / lost, np.inf)


def _draw(source: Any, position: int, draws: int, rng: np.random.Generator) -> list[Array]:
    if hasattr(source, "rvs"):
        sample = np.asarray(source.rvs(size=draws, random_state=rng), dtype=float)
        return [sample] if sample.ndim == 1 else list(sample.T)
    if isinstance(source, int | float | np.number):
        return [np.full(draws, float(source))]
    raise ValueError(
        f"Input {position + 1} is {source!r}; expected a number or a frozen scipy.stats distribution."
    )


def _shortest(draws: Array, mass: float) -> Array:
    ordered = np.sort(draws)
    inside = max(math.ceil(mass * ordered.size), 1)
    widths = ordered[inside - 1 :] - ordered[: ordered.size - inside + 1]
    start = int(np.argmin(widths))
    return np.array([ordered[start], ordered[start + inside - 1]])
