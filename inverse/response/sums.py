"""Sums of complex arrays with real weights, the inner loop of detection, as one matrix product per set."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["weighted_sum"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


def weighted_sum(weights: Array, *terms: Complex) -> Complex:
    """Add terms with real weights.

    Parameters
    ----------
    weights : array, shape (sets or 1, rows, terms)
    *terms : complex arrays, shape (sets or 1, frequencies or 1)

    Returns
    -------
    complex array, shape (sets, rows, frequencies)
    """
    sets, size = (max(t.shape[axis] for t in terms) for axis in (0, 1))
    stacked = np.empty((sets, len(terms), size), dtype=complex)
    for i, term in enumerate(terms):
        stacked[:, i] = term
    # Real and imaginary parts are neighbours in memory: a real matrix acts on both at once.
    return np.matmul(weights, stacked.view(float)).view(complex)
