"""Nonlinear least squares on batched residuals, with the covariance and what the data leave open."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

__all__ = ["STEP", "Minimum", "covariance_of", "jacobian", "minimise"]

Array = NDArray[np.float64]
Residuals = Callable[[Array], Array]

STEP = float(np.finfo(float).eps ** (1 / 3))
_LARGEST = 1e150


@dataclass(frozen=True)
class Minimum:
    """A minimum of a sum of squares.

    Attributes
    ----------
    x : array, shape (unknowns,)
    cost : float
        Sum of squares.
    covariance : array, shape (unknowns, unknowns)
        Inverse of J'J (unit-variance residuals).
    condition : float
        Ratio of the largest to the smallest singular value of J with its columns scaled to unit length.
    open_directions : array, shape (directions, unknowns)
        Combinations that the residuals do not determine (singular values below 1e-8 of the largest).
    evaluations : int
        Parameter sets evaluated.
    converged : bool
    message : str
    """

    x: Array
    cost: float
    covariance: Array
    condition: float
    open_directions: Array
    evaluations: int
    converged: bool
    message: str


def jacobian(residuals: Residuals, x: Array, typical: float = 1e-8) -> Array:
    """Return the Jacobian by central differences, all points in one batch, shape (residuals, unknowns).

    The step is a part of each coordinate, or of `typical` where that is larger.
    """
    step = STEP * np.maximum(np.abs(x), typical)
    up, down = x + np.diag(step), x - np.diag(step)
    values = residuals(np.concatenate([up, down]))
    width = (np.diagonal(up) - np.diagonal(down))[:, None]
    return ((values[: x.size] - values[x.size :]) / width).T


def minimise(
    residuals: Residuals,
    start: Array,
    *,
    derivative: Callable[[Array], Array] | None = None,
    typical: float = 1e-8,
    tolerance: float = 1e-14,
    max_evaluations: int = 2000,
) -> Minimum:
    """Minimise a sum of squares from one starting point.

    Parameters
    ----------
    residuals : callable
        Takes points of shape (n, unknowns), gives residuals of shape (n, residuals).
    start : array, shape (unknowns,)
    derivative : callable, optional
        Jacobian of shape (residuals, unknowns) at a point; central differences by default.
    typical : float
        Size of a coordinate near zero, for the step of the differences; 1 for standard normal variables.
    tolerance : float
        Relative change of the sum of squares, or of the point, that ends the search.
    max_evaluations : int
        Residual evaluations allowed to the optimiser, derivatives apart.

    Raises
    ------
    ValueError
        If the residuals at the start are not finite.
    """
    count = [0]

    def one(x: Array) -> Array:
        count[0] += 1
        values = residuals(x[None])[0]
        # A step to where the sum of squares overflows is refused like one to where it is not a number.
        return np.where(np.abs(values) < _LARGEST, values, np.inf)

    def slope(x: Array) -> Array:
        count[0] += 2 * x.size
        return jacobian(residuals, x, typical) if derivative is None else derivative(x)

    if not np.isfinite(one(start)).all():
        raise ValueError(
            f"The residuals at the starting point {start} are not finite; start from another point."
        )
    try:
        found = optimize.least_squares(
            one, start, jac=slope, method="trf", x_scale="jac", ftol=tolerance, xtol=max(tolerance, 1e-12),
            gtol=1e-12,
            max_nfev=max_evaluations,
        )  # fmt: skip
    except (np.linalg.LinAlgError, ValueError) as error:
        return _failed(start, float((one(start) ** 2).sum()), count[0], str(error))
    covariance, condition, left_open = covariance_of(np.asarray(found.jac))
    return Minimum(
        found.x,
        2 * float(found.cost),
        covariance,
        condition,
        left_open,
        count[0],
        bool(found.success),
        found.message,
    )


def _failed(start: Array, cost: float, evaluations: int, reason: str) -> Minimum:
    size = start.size
    return Minimum(
        start, cost, np.full((size, size), np.nan), np.inf, np.eye(size), evaluations, False, reason
    )


def covariance_of(j: Array) -> tuple[Array, float, Array]:
    """Invert J'J through the singular values of J with unit columns; leave the null space infinite.

    Parameters
    ----------
    j : array, shape (residuals, unknowns)

    Returns
    -------
    array, float, array
        `Minimum.covariance`, `Minimum.condition` and `Minimum.open_directions`.
    """
    length = np.sqrt((j * j).sum(axis=0))
    scale = np.where(length > 0, length, 1.0)
    _, singular, directions = np.linalg.svd(j / scale, full_matrices=False)
    good = singular > 1e-8 * singular[0] if singular[0] > 0 else np.zeros(singular.size, dtype=bool)
    inverse = (directions[good].T / singular[good] ** 2) @ directions[good]
    covariance = inverse / np.outer(scale, scale)
    if not good.all():
        touched = np.abs(directions[~good]).max(axis=0) > 1e-4
        covariance[touched, touched] = np.inf
    condition = float(singular[0] / singular[-1]) if singular[-1] > 0 else np.inf
    return covariance, condition, directions[~good] / scale
