"""Derivatives by central differences along axes scaled to the standard uncertainties."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

__all__ = ["second_order", "slopes"]

Array = NDArray[np.float64]
Model = Callable[[Array], Array]

# In units of the standard uncertainty. Truncation falls as step^4, rounding grows as 1/step^order.
_FIRST_STEP = 1e-2
_HIGHER_STEP = 1e-1


def _along(model: Model, n: int, *axes: int) -> Callable[..., Array]:
    """Return the model as a function of displacements along the given standardised axes only."""

    def displaced(*steps: float) -> Array:
        t = np.zeros(n)
        for axis, step in zip(axes, steps, strict=True):
            t[axis] += step
        return model(t)

    return displaced


def slopes(model: Model, n: int) -> Array:
    """Return the first derivatives along each axis.

    Parameters
    ----------
    model : callable
        Takes displacements of shape (n,) in units of the standard uncertainties.
    n : int
        Number of inputs.

    Returns
    -------
    numpy.ndarray
        Shape (n,) or (outputs, n); the error is of fourth order in the step.
    """
    h = _FIRST_STEP
    columns = []
    for i in range(n):
        f = _along(model, n, i)
        columns.append((8 * (f(h) - f(-h)) - (f(2 * h) - f(-2 * h))) / (12 * h))
    return np.stack(columns, axis=-1)


def _curvature(f: Callable[[float], Array]) -> Array:
    h = _HIGHER_STEP
    return np.asarray((16 * (f(h) + f(-h)) - (f(2 * h) + f(-2 * h)) - 30 * f(0.0)) / (12 * h**2))


def _mixed(f: Callable[[float, float], Array]) -> Array:
    """Mixed second derivative, the leading error removed by halving the step."""

    def quotient(h: float) -> Array:
        return np.asarray((f(h, h) - f(h, -h) - f(-h, h) + f(-h, -h)) / (4 * h**2))

    return (4 * quotient(_HIGHER_STEP) - quotient(2 * _HIGHER_STEP)) / 3


def second_order(model: Model, n: int) -> tuple[Array, Array]:
    """Return the second-order part of the output covariance and the shift of the expectation.

    Parameters
    ----------
    model : callable
        As for `slopes`, the axes independent.
    n : int
        Number of inputs.

    Returns
    -------
    tuple of numpy.ndarray
        Covariance of shape () or (outputs, outputs), shift of shape () or (outputs,).

    References
    ----------
    JCGM 100:2008, note to 5.1.2, extended to several outputs.
    """
    first = slopes(model, n)
    hessian = np.empty((*first.shape, n))
    for i in range(n):
        hessian[..., i, i] = _curvature(_along(model, n, i))
        for j in range(i):
            hessian[..., i, j] = hessian[..., j, i] = _mixed(_along(model, n, i, j))
    third = _summed_thirds(model, n)
    quadratic = 0.5 * np.einsum("...ij,kij->...k" if hessian.ndim == 3 else "ij,ij->", hessian, hessian)
    cross = first @ third.T
    extra = quadratic + (cross + cross.T) / 2
    return np.asarray(extra), np.asarray(0.5 * np.trace(hessian, axis1=-2, axis2=-1))


def _summed_thirds(model: Model, n: int) -> Array:
    """Return sum_j f_ijj for each i: the slope along i of the sum of curvatures."""

    def laplacian(t: Array) -> Array:
        return np.asarray(sum(_curvature(_along(lambda s: model(t + s), n, j)) for j in range(n)))

    h = _HIGHER_STEP
    columns = []
    for i in range(n):
        f = _along(laplacian, n, i)
        columns.append((8 * (f(h) - f(-h)) - (f(2 * h) - f(-2 * h))) / (12 * h))
    return np.stack(columns, axis=-1)
