"""Linear unknowns eliminated in closed form: Gaussian prior, Gaussian noise.

With unit-variance priors on c and ``y = X c + e``, e ~ N(0, K):
``log p(y) = -(y' K^-1 y - b' A^-1 b)/2 - log det K /2 - log det A /2 - (N/2) log 2 pi``,
``A = 1 + X' K^-1 X``, ``b = X' K^-1 y``; c given y is N(A^-1 b, A^-1).
(Rasmussen and Williams, Gaussian Processes for Machine Learning, 2006, section 2.7; from memory.)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Eliminated", "eliminate"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Eliminated:
    """Marginal likelihood and coefficients of a batch.

    Attributes
    ----------
    log_likelihood : array, shape (sets,)
        Minus infinity where the model was not finite.
    mean : array, shape (sets, coefficients)
        Posterior mean of the coefficients in units of their prior widths.
    factor : array, shape (sets, coefficients, coefficients)
        Lower Cholesky factor of A, the inverse posterior covariance.
    """

    log_likelihood: Array
    mean: Array
    factor: Array

    def draw(self, rng: np.random.Generator) -> Array:
        """Draw coefficients, one set per member of the batch."""
        kick = rng.standard_normal(self.mean.shape)[..., None]
        return self.mean + np.linalg.solve(self.factor.swapaxes(1, 2), kick)[..., 0]


def eliminate(gram: Array, log_det: Array, count: int) -> Eliminated:
    """Eliminate the coefficients from a Gram matrix whose last row is the data.

    Parameters
    ----------
    gram : array, shape (sets, coefficients + 1, coefficients + 1)
        ``Z K^-1 Z'`` with columns scaled by their prior widths and the data last.
    log_det : array, shape (sets,)
        log det K.
    count : int
        Number of data.
    """
    size = gram.shape[1] - 1
    good = np.isfinite(gram).all(axis=(1, 2)) & np.isfinite(log_det)
    matrix = np.where(good[:, None, None], gram, np.eye(size + 1))
    data = matrix[:, size, size].copy()
    # The factor's last row is L^-1 b whatever stands in the corner; this keeps the matrix positive definite.
    matrix[:, size, size] += data
    matrix += np.eye(size + 1)
    whole = np.linalg.cholesky(matrix)
    factor, half = whole[:, :size, :size], whole[:, size, :size]
    mean = np.linalg.solve(factor.swapaxes(1, 2), half[..., None])[..., 0]
    misfit = data - (half**2).sum(axis=1)
    log_volume = np.log(np.diagonal(factor, axis1=1, axis2=2)).sum(axis=1)
    value = -0.5 * (misfit + log_det + count * np.log(2 * np.pi)) - log_volume
    return Eliminated(np.where(good, value, -np.inf), mean.astype(float), factor.astype(float))
