"""Least squares with the linear coefficients eliminated: variable projection and its derivative.

Whitened residuals ``r = (1 - X X+) y`` depend on the other unknowns alone. Along one of them their derivative is
``-(1 - X X+) X' c - (X+)^T X'^T r`` with ``c = X+ y`` (Golub and Pereyra, SIAM J. Numer. Anal. 10, 413 (1973); from
memory).
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from inverse.inference.minima.minimise import STEP, jacobian
from inverse.inference.problem.likelihood import TraceModel
from inverse.inference.problem.posterior import Posterior

__all__ = ["Projected"]

Array = NDArray[np.float64]


class Projected:
    """Whitened residuals with the linear coefficients eliminated, as a function of the physical unknowns.

    Parameters
    ----------
    posterior : Posterior
    physical : bool array, shape (unknowns,)
        Which unknowns do not belong to the noise.
    z : array, shape (unknowns,)
        Standard normal variables; those of the noise are held.
    """

    def __init__(self, posterior: Posterior, physical: NDArray[np.bool_], z: Array) -> None:
        self.posterior, self.physical, self.z = posterior, physical, z

    def __call__(self, x: Array) -> Array:
        """Return the residuals at points of shape (n, unknowns), the priors' first, shape (n, residuals)."""
        named = self._named(x)
        parts = [x]
        for member in self.posterior.members:
            local = member.local(named)
            functions = member.model.functions(local)
            parts.append(np.stack([_residual(member.model, local, functions, i) for i in range(len(x))]))
        return np.nan_to_num(np.concatenate(parts, axis=1), nan=1e10, posinf=1e10, neginf=-1e10)

    def derivative(self, x: Array) -> Array:
        """Return the Jacobian at a point, shape (residuals, unknowns).

        The projection's part is exact, the basis functions' by central differences. Noise that is not Gaussian has
        another projection: there the residuals themselves are differenced.
        """
        if any(member.model.has_outliers for member in self.posterior.members):
            return jacobian(self, x, typical=1.0)
        step = STEP * np.maximum(np.abs(x), 1.0)
        named = self._named(np.concatenate([x[None], x + np.diag(step), x - np.diag(step)]))
        parts = [np.eye(x.size)]
        for member in self.posterior.members:
            local = member.local(named)
            parts.append(_moved(member.model, local, member.model.functions(local), step))
        return np.nan_to_num(np.concatenate(parts), nan=0.0, posinf=0.0, neginf=0.0)

    def _named(self, x: Array) -> dict[str, Array]:
        z = np.repeat(self.z[None], len(x), axis=0)
        z[:, self.physical] = x
        return self.posterior.parameters.named(self.posterior.parameters.to_values(z))


def _residual(model: TraceModel, local: Mapping[str, Array], functions: Mapping[str, Array], i: int) -> Array:
    values = {name: float(v[i]) for name, v in local.items()}
    return model.residual(values, {name: f[i] for name, f in functions.items()})


def _moved(
    model: TraceModel, local: Mapping[str, Array], functions: Mapping[str, Array], step: Array
) -> Array:
    """Return how one trace's residuals move: functions at a point, then at it plus and minus each step."""
    values = {name: float(v[0]) for name, v in local.items()}
    a, y = model.whitened(values, {name: f[0] for name, f in functions.items()})
    width = (2 * step)[:, None, None]
    changes = {name: (f[1 : step.size + 1] - f[step.size + 1 :]) / width for name, f in functions.items()}
    moved = model.whitened_changes(values, changes)
    q, r = np.linalg.qr(a)
    c = np.linalg.solve(r, q.T @ y)
    left = y - a @ c
    part = np.einsum("ucn,c->nu", moved, c)
    turned = np.linalg.solve(r.T, (moved @ left).T)
    return np.asarray(q @ (q.T @ part - turned) - part)
