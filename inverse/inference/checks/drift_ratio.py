"""Likelihood-ratio test for a correlated part in residuals that were taken to be white.

The fitted curve bends towards a drift, which hides much of it from the autocorrelation of the residuals. Here the
linear coefficients X and, to first order, all other unknowns J are fitted anew under every correlated part tried:

``y = X c + J d + e``,  ``c, d ~ N(0, 1)``,  ``e ~ N(0, s^2 M)``,

``M_ij = r_i^2 delta_ij + q^2 exp(-|t_i - t_j| / l)``,

with s profiled out, ``LR = max over (q, l) of N ln(S_0 / S) - ln(det M / det M_0) - ln(det A / det A_0)``, S the misfit
and A the inverse covariance of (c, d). Its distribution without a correlated part is that of simulated white noise, as
chi-square does not hold at ``q = 0``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.inference.inversion import Inversion
from inverse.inference.problem.likelihood import Channel, TraceModel
from inverse.inference.problem.noise import Noise
from inverse.inference.problem.posterior import Member

__all__ = ["DriftTest", "drift_tests"]

Array = NDArray[np.float64]

_SIZES = np.array([0.1, 0.2, 0.35, 0.6, 1.0, 1.7, 3.0, 6.0, 15.0])
_TIMES = 7
_REFERENCE = 500
_STEP = 1e-4

_Design = tuple[Array, float]
"""Columns of coefficients and unknowns, and the white noise level."""


@dataclass(frozen=True)
class DriftTest:
    """Result of the test on one channel.

    Attributes
    ----------
    ratio : float
        LR; 0 where no correlated part improves the likelihood.
    p : float
        Share of white noises with as large a ratio.
    size, time : float
        Best correlated part over the white one, and its correlation time, ps. Slow parts are fitted away by the
        curve, so that ``size^2 / time`` is known better than either.
    """

    ratio: float
    p: float
    size: float
    time: float


def drift_tests(inversion: Inversion, values: Array, *, seed: int = 0) -> tuple[DriftTest | None, ...]:
    """Test every channel; None for those whose noise model has a correlated part.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (unknowns,)
        A point near the best fit, public units.
    seed : int
        For the simulated noise.

    Returns
    -------
    tuple of DriftTest or None
        In the order of traces, then channels.
    """
    rng = np.random.default_rng(seed)
    out: list[DriftTest | None] = []
    for member in inversion.posterior.members:
        designs = _designs(inversion, member, values)
        for channel in member.model.channels:
            is_white = channel.noise.model == "white"
            out.append(_test(member.model, channel, designs[channel.name], rng) if is_white else None)
    return tuple(out)


def _designs(inversion: Inversion, member: Member, values: Array) -> dict[str, _Design]:
    """Return per channel the columns of all coefficients and unknowns, prior widths included, and the white level."""
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    parameters = inversion.posterior.parameters
    z = parameters.to_z(values[None])[0]
    shifts = _STEP * np.eye(z.size)[physical]
    points = parameters.to_values(z + np.concatenate([np.zeros((1, z.size)), shifts, -shifts]))
    local = member.local(parameters.named(points))
    functions = member.model.functions(local)
    first = {k: v[:1] for k, v in local.items()}
    weights = member.model.marginal({k: f[:1] for k, f in functions.items()}, first).mean[0]
    out = {}
    for channel in member.model.channels:
        f = functions[channel.name]
        predicted = np.einsum("c,ncd->nd", weights, f)
        count = len(shifts)
        slopes = (predicted[1 : count + 1] - predicted[count + 1 :]) / (2 * _STEP)
        out[channel.name] = np.concatenate([f[0], slopes]), float(channel.noise_values(first)["white"][0])
    return out


def _test(model: TraceModel, channel: Channel, design: _Design, rng: np.random.Generator) -> DriftTest:
    columns, white = design
    data = channel.data[model.used] / white
    noise = channel.noise
    # The data are the first row, white noise the others.
    rows = np.concatenate([data[None], noise.relative * rng.standard_normal((_REFERENCE, data.size))])
    step, span = float(np.median(np.diff(noise.delay))), float(np.ptp(noise.delay))
    tried = [(q, t) for q in _SIZES for t in np.geomspace(2 * step, span / 2, _TIMES)]
    plain = _profiled(noise, columns / white, rows, 0.0, 1.0)
    ratios = np.stack([_profiled(noise, columns / white, rows, q, t) - plain for q, t in tried])
    best = np.maximum(ratios.max(axis=0), 0.0)
    q, t = tried[int(ratios[:, 0].argmax())]
    p = (1 + (best[1:] >= best[0]).sum()) / (1 + _REFERENCE)
    return DriftTest(float(best[0]), float(p), float(q), float(t))


def _profiled(noise: Noise, columns: Array, rows: Array, size: float, time: float) -> Array:
    """Return twice the log likelihood of rows, their scale profiled out, to a constant."""
    values = {"white": np.ones(1), "discrepancy": np.full(1, size), "correlation_time": np.full(1, time)}
    model = Noise("white" if size == 0 else "correlated", noise.delay, noise.relative)
    gram, log_det = model.gram(np.concatenate([columns, rows])[None], values)
    count = len(columns)
    inner = np.linalg.cholesky(np.eye(count) + gram[0, :count, :count])
    half = np.linalg.solve(inner, gram[0, :count, count:])
    misfit = gram[0, count:, count:].diagonal() - (half**2).sum(axis=0)
    return np.asarray(-noise.delay.size * np.log(misfit) - log_det[0] - 2 * np.log(inner.diagonal()).sum())
