"""Sums of complex arrays with real weights, the inner loop of the response, as one matrix product per set."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

__all__ = ["product", "weight_rows", "weighted_sum"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


def weight_rows(*rows: Sequence[Array]) -> Array:
    """Lay out weights of shape (sets or 1, 1), given row by row, as `weighted_sum` takes them."""
    sets = max(len(weight) for row in rows for weight in row)
    out = np.empty((sets, len(rows), len(rows[0])))
    for i, row in enumerate(rows):
        for j, weight in enumerate(row):
            out[:, i, j] = weight[:, 0]
    return out


def weighted_sum(weights: Array, *terms: tuple[Complex, Complex]) -> Complex:
    """Add products of two factors with real weights.

    Parameters
    ----------
    weights : array, shape (sets or 1, rows, terms)
    *terms : pairs of complex arrays, shape (sets or 1, frequencies or 1)
        The factors of each term.

    Returns
    -------
    complex array, shape (sets, rows, frequencies)
    """
    factors = [factor for pair in terms for factor in pair]
    sets, size = max(map(len, factors)), max([factor.shape[1] for factor in factors])
    stacked = np.empty((sets, len(terms), size), dtype=complex)
    for i, (first, second) in enumerate(terms):
        np.multiply(first, second, out=stacked[:, i])
    return product(weights, stacked)


def product(weights: Array, terms: Complex) -> Complex:
    """Multiply real weights (sets or 1, rows, terms) into complex terms (sets, terms, frequencies)."""
    # Real and imaginary parts are neighbours in memory: a real matrix acts on both at once.
    return np.matmul(weights, terms.view(float)).view(complex)
