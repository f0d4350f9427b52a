"""Density of a block of a trace given all the rest of it.

Given the unknowns the data are normal with covariance ``S = K + X X'`` (linear coefficients integrated out, X in prior
widths), and with ``Q = S^-1`` a block b given all other data has

``ln p(y_b | y_-b) = -[g' Q_bb^-1 g - ln det Q_bb + n_b ln 2 pi] / 2``,  ``g = (Q y)_b``

(Sundararajan and Keerthi 2001; Buerkner, Gabry and Vehtari 2021; both from memory).
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from inverse.inference.inversion import Inversion
from inverse.inference.problem.likelihood import TraceModel

__all__ = ["block_log_density", "blocks"]

Array = NDArray[np.float64]

_FEWEST_DELAYS = 5


def blocks(delay: Array, length: float) -> tuple[NDArray[np.int_], ...]:
    """Cut delays into runs that each span at least `length` and hold at least 5 delays.

    Parameters
    ----------
    delay : array, shape (delays,)
        ps, increasing.
    length : float
        ps.

    Returns
    -------
    tuple of int arrays
        Indices; a rest that is too short goes to the last run.

    Raises
    ------
    ValueError
        If fewer than two runs result.
    """
    starts = [0]
    for i in range(delay.size):
        if delay[i] - delay[starts[-1]] >= length and i - starts[-1] >= _FEWEST_DELAYS:
            starts.append(i)
    if len(starts) > 1 and (
        delay[-1] - delay[starts[-1]] < 0.5 * length or delay.size - starts[-1] < _FEWEST_DELAYS
    ):
        starts.pop()
    if len(starts) < 2:
        raise ValueError(
            f"block={length:g} ps leaves fewer than two blocks of {delay[-1] - delay[0]:g} ps; give a shorter one."
        )
    return tuple(np.split(np.arange(delay.size), starts[1:]))


def block_log_density(inversion: Inversion, values: Array, length: float) -> Array:
    """Compute log densities of blocks given all other data, at every draw.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (draws, unknowns)
        Public units.
    length : float
        Least length of a block, ps; a block holds its delays in all channels.

    Returns
    -------
    array, shape (draws, blocks)
        Of all traces of a joint problem, one after the other.

    Raises
    ------
    ValueError
        If the noise is of Student's t distribution, for which there is no closed form, or fewer than two blocks
        result.
    """
    if any(member.model.has_outliers for member in inversion.posterior.members):
        raise ValueError(
            'With noise="student" a block has no density in closed form; compare fits with noise="correlated".'
        )
    named = inversion.posterior.parameters.named(values)
    parts = []
    for member in inversion.posterior.members:
        cut = blocks(member.model.delay[member.model.used], length)
        local = member.local(named)
        rows = [
            _one_draw(member.model, {k: v[i : i + 1] for k, v in local.items()}, cut)
            for i in range(len(values))
        ]
        parts.append(np.array(rows))
    return np.concatenate(parts, axis=1)


def _one_draw(model: TraceModel, values: Mapping[str, Array], cut: tuple[NDArray[np.int_], ...]) -> Array:
    precision, design, data = _channels(model, values)
    solved = precision @ design.T
    inner = np.eye(len(design)) + design @ solved
    q = precision - solved @ np.linalg.solve(inner, solved.T)
    pull = q @ data
    count = int(model.used.sum())
    out = []
    for block in cut:
        at = np.concatenate([block + i * count for i in range(len(model.channels))])
        factor = np.linalg.cholesky(q[np.ix_(at, at)])
        half = np.linalg.solve(factor, pull[at])
        out.append(-0.5 * (half @ half + at.size * np.log(2 * np.pi)) + np.log(factor.diagonal()).sum())
    return np.array(out)


def _channels(model: TraceModel, values: Mapping[str, Array]) -> tuple[Array, Array, Array]:
    """Return K^-1, the basis functions in prior widths and the data of all channels, one after the other."""
    functions = model.functions(values)
    count = int(model.used.sum())
    precision = np.zeros((count * len(model.channels),) * 2)
    for i, channel in enumerate(model.channels):
        noise = {k: float(v[0]) for k, v in channel.noise_values(values).items()}
        # The best discrepancy f of a residual r has r - f = (white part of K) K^-1 r.
        unit = np.eye(count)
        rows = (unit - channel.noise.discrepancy(unit, noise)) / (
            noise["white"] * channel.noise.relative
        ) ** 2
        precision[i * count : (i + 1) * count, i * count : (i + 1) * count] = (rows + rows.T) / 2
    design = np.concatenate([functions[c.name][0] for c in model.channels], axis=1)
    return precision, design, np.concatenate([c.data[model.used] for c in model.channels])
