"""Log densities that worker processes and scripts can import."""

import time

import numpy as np


def gaussian(points):
    """Independent, unit variances."""
    return -0.5 * np.sum(points**2, axis=1)


class CorrelatedGaussian:
    """Unit variances, correlation `strength` between neighbours and its powers beyond."""

    def __init__(self, dimension, strength):
        steps = np.abs(np.subtract.outer(np.arange(dimension), np.arange(dimension)))
        self.covariance = strength**steps
        self.precision = np.linalg.inv(self.covariance)

    def __call__(self, points):
        return -0.5 * np.einsum("ni,ij,nj->n", points, self.precision, points)


def two_modes(points):
    """Two unit Gaussians, 20 apart in the first direction."""
    rest = -0.5 * np.sum(points[:, 1:] ** 2, axis=1)
    return rest + np.logaddexp(-0.5 * (points[:, 0] - 10.0) ** 2, -0.5 * (points[:, 0] + 10.0) ** 2)


def half_gaussian_nan(points):
    """NaN where the first value is negative."""
    return np.where(points[:, 0] < 0.0, np.nan, gaussian(points))


def half_gaussian_raising(points):
    """Fail for the whole batch if any first value in it is negative."""
    if (points[:, 0] < 0.0).any():
        raise ArithmeticError("negative thickness")
    return gaussian(points)


def slow_gaussian(points):
    """A fifth of a millisecond a call, and more."""
    time.sleep(0.0002)
    return gaussian(points)
