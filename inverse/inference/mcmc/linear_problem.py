"""A problem made linear at a point: all but the noise is Gaussian, whatever the noise.

Between a small noise that forgets fast and a large one that forgets slowly the other unknowns change their widths
many times over, so that one normal approximation about the highest point has the wrong width and tails. Here the
noise keeps its own, skew posterior, and the other unknowns are normal given the noise: integrated nested Laplace
approximations (Rue, Martino and Chopin, J. R. Statist. Soc. B 71 (2009) 319; from memory).
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from inverse.inference.mcmc.coordinates import Straight
from inverse.inference.problem.posterior import Member, Posterior

__all__ = ["EDGED_PRECISION", "LinearProblem", "noise_columns"]

Array = NDArray[np.float64]

_STEP = 1e-4
EDGED_PRECISION = 0.25
"""Of an unknown between ends that the data leave open: twice the deviation of its uniform prior."""


def noise_columns(posterior: Posterior) -> NDArray[np.bool_]:
    """Tell which unknowns belong to the noise, shape (unknowns,)."""
    names = {
        outer
        for member in posterior.members
        for inner, outer in member.names.items()
        if any(inner.startswith(channel.prefix) for channel in member.model.channels)
    }
    return np.array([name in names for name in posterior.parameters.names])


class LinearProblem:
    """The log posterior of the noise, everything else linear about a point and eliminated.

    Called with straight coordinates of the noise, shape (n, noise unknowns).

    Parameters
    ----------
    density : Straight
    posterior : Posterior
        The density's. Noise with outliers keeps its likelihood at the point, without what a move would gain; Gaussian
        noise stands for it in the others' covariance.
    point : array, shape (unknowns,)
        In straight coordinates, between all ends.
    """

    def __init__(self, density: Straight, posterior: Posterior, point: Array) -> None:
        self.density, self.posterior, self.point = density, posterior, point
        self.noise = noise_columns(posterior)
        edged = np.isin(np.arange(point.size), [axis.column for axis in density.edged])[~self.noise]
        x = point[~self.noise]
        self.precision = np.where(edged, EDGED_PRECISION, 1.0)
        self.pull = np.where(edged, 0.0, x)
        gaussian = posterior.as_gaussian(density.to_z(point[None])[0][0]).members
        self.outliers = any(member.model.has_outliers for member in posterior.members)
        self.members = list(zip(posterior.members, gaussian, map(self._rows_of, gaussian), strict=True))

    def __call__(self, theta: Array) -> Array:
        """Return the log posterior up to a constant, shape (n,); -inf beyond an end."""
        out = np.full(len(theta), -np.inf)
        y = self._joined(theta)
        z, slope = self.density.to_z(y)
        inside = np.isfinite(z).all(axis=1)
        if inside.any():
            found = self._solved(z[inside])[0]
            noise = z[inside][:, self.noise]
            out[inside] = found - 0.5 * (noise * noise).sum(axis=1) + slope[inside]
        return np.where(np.isnan(out), -np.inf, out)

    def draw(self, theta: Array, rng: np.random.Generator) -> Array:
        """Draw the other unknowns given the noise; points of shape (n, unknowns), some of them beyond ends."""
        y = self._joined(theta)
        _, mean, factor = self._solved(self.density.to_z(y)[0])
        kick = rng.standard_normal(mean.shape)[..., None]
        y[:, ~self.noise] += mean + np.linalg.solve(factor.swapaxes(1, 2), kick)[..., 0]
        return y

    def _joined(self, theta: Array) -> Array:
        y = np.repeat(self.point[None], len(theta), axis=0)
        y[:, self.noise] = theta
        return y

    def _rows_of(self, member: Member) -> dict[str, Array]:
        """Return per channel the basis functions, the slopes of the other unknowns and the data, as rows."""
        columns = np.flatnonzero(~self.noise)
        width = np.full(columns.size, _STEP)
        for axis in self.density.edged:
            near = min(abs(end - self.point[axis.column]) for end in axis.ends)
            width[columns == axis.column] = min(_STEP, near / 2)
        steps = np.zeros((columns.size, self.point.size))
        steps[np.arange(columns.size), columns] = width
        here = self._local(member, self.density.to_z(self.point[None])[0])
        coefficients = member.model.eliminated(here).mean[0]
        functions = member.model.functions(here)
        up, down = (
            member.model.functions(self._local(member, self.density.to_z(self.point + sign * steps)[0]))
            for sign in (1, -1)
        )
        out = {}
        for channel in member.model.channels:
            change = (up[channel.name] - down[channel.name]) / (2 * width[:, None, None])
            slopes = np.einsum("c,ucn->un", coefficients, change)
            data = channel.data[None, member.model.used]
            out[channel.name] = np.concatenate([functions[channel.name][0], slopes, data])
        return out

    def _local(self, member: Member, z: Array) -> dict[str, Array]:
        parameters = self.posterior.parameters
        return member.local(parameters.named(parameters.to_values(z)))

    def _solved(self, z: Array) -> tuple[Array, Array, Array]:
        """Return log likelihoods, and means and inverse roots of the covariance of the other unknowns' moves."""
        size = self.precision.size
        value = np.zeros(len(z))
        matrix = np.repeat(np.diag(self.precision)[None], len(z), axis=0)
        right = np.repeat(-(self.precision * self.pull)[None], len(z), axis=0)
        for member, gaussian, rows in self.members:
            values = self._local(member, z)
            own, own_matrix, own_right = _without_coefficients(gaussian, rows, values, size)
            if self.outliers:
                own = _log_likelihood(member, rows, values, size)
            value, matrix, right = value + own, matrix + own_matrix, right + own_right
        factor = _roots(matrix)
        half = np.linalg.solve(factor, right[..., None])
        mean = np.asarray(np.linalg.solve(factor.swapaxes(1, 2), half)[..., 0])
        volume = np.log(np.diagonal(factor, axis1=1, axis2=2)).sum(axis=1)
        gain = 0.0 if self.outliers else 0.5 * (half[..., 0] ** 2).sum(axis=1)
        return value + gain - volume, mean, factor


def _without_coefficients(
    member: Member, rows: Mapping[str, Array], values: Mapping[str, Array], size: int
) -> tuple[Array, Array, Array]:
    """Eliminate one trace's coefficients; its log likelihood at no move, curvature and slope in the moves."""
    sets = len(next(iter(values.values())))
    stacked = len(next(iter(rows.values())))
    gram, log_det = np.zeros((sets, stacked, stacked)), np.zeros(sets)
    for channel in member.model.channels:
        repeated = np.repeat(rows[channel.name][None], sets, axis=0)
        own, own_det = channel.noise.gram(repeated, channel.noise_values(values))
        gram, log_det = gram + own, log_det + own_det
    count = stacked - size - 1
    factor = _roots(gram[:, :count, :count] + np.eye(count))
    half = np.linalg.solve(factor, gram[:, :count, count:])
    rest = gram[:, count:, count:] - half.swapaxes(1, 2) @ half
    volume = np.log(np.diagonal(factor, axis1=1, axis2=2)).sum(axis=1)
    value = -0.5 * (rest[:, -1, -1] + log_det) - volume
    return value, rest[:, :-1, :-1], rest[:, :-1, -1]


def _log_likelihood(
    member: Member, rows: Mapping[str, Array], values: Mapping[str, Array], size: int
) -> Array:
    """Return the log likelihood at no move, shape (sets,)."""
    sets = len(next(iter(values.values())))
    functions = {name: np.repeat(r[None, : -size - 1], sets, axis=0) for name, r in rows.items()}
    return member.model.marginal(functions, values).log_likelihood


def _roots(matrices: Array) -> Array:
    """Return lower Cholesky factors, shape (n, size, size); not a number where rounding left none."""
    try:
        return np.asarray(np.linalg.cholesky(matrices))
    except np.linalg.LinAlgError:
        if len(matrices) == 1:
            return np.full_like(matrices, np.nan)
        return np.concatenate([_roots(matrix[None]) for matrix in matrices])
