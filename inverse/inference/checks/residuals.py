"""Residuals that are independent standard normal if the model is right, whatever the delays and the noise model."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.inference.inversion import Inversion
from inverse.inference.problem.likelihood import Channel
from inverse.inference.problem.noise import FREEDOM, Noise

__all__ = ["Replicates", "autocorrelation", "innovations", "replicates"]

Array = NDArray[np.float64]

_BATCH = 50


@dataclass(frozen=True)
class Replicates:
    """Residuals of one channel at draws of the posterior, linear coefficients drawn too.

    Attributes
    ----------
    channel : Channel
    name : str
        Of the channel, after the label of its trace in a joint problem.
    delay : array, shape (delays,)
        Fitted delays, ps.
    data : array, shape (delays,)
    residual : array, shape (draws, delays)
        Data less model.
    innovation : array, shape (draws, delays)
        Standardised one-step prediction errors of the residual.
    replicate : array, shape (draws, delays)
        Data that model and noise would give anew.
    noise : mapping of str to array
        Noise values of the draws.
    """

    channel: Channel
    name: str
    delay: Array
    data: Array
    residual: Array
    innovation: Array
    replicate: Array
    noise: Mapping[str, Array]


def innovations(noise: Noise, residual: Array, values: Mapping[str, Array]) -> Array:
    """Standardise residuals by their prediction from the earlier ones: ``u = L^-1 r``, ``K = L L'``.

    Parameters
    ----------
    noise : Noise
    residual : array, shape (draws, delays)
    values : mapping
        Noise values, each of shape (draws,).

    Returns
    -------
    array, shape (draws, delays)
        Independent N(0, 1) if K is right, for delays of any spacing (Kalman filter of the Markov kernel; O(delays)).
        Under Student's t noise K has its variance, and u is uncorrelated but not normal.
    """
    white = values["white"][:, None] * noise.relative
    if noise.model == "student":
        white = white * np.sqrt(FREEDOM / (FREEDOM - 2))
    if noise.model == "white":
        return residual / white
    size2, time = values["discrepancy"] ** 2, values["correlation_time"]
    mean, variance = np.zeros(len(residual)), size2.copy()
    steps = np.append(np.diff(noise.delay), 0.0)
    out = np.empty_like(residual)
    for i, step in enumerate(steps):
        total = variance + white[:, i] ** 2
        error = residual[:, i] - mean
        out[:, i] = error / np.sqrt(total)
        gain = variance / total
        kept = np.exp(-step / time)
        mean = kept * (mean + gain * error)
        variance = kept**2 * variance * (1 - gain) - size2 * np.expm1(2 * np.log(kept))
    return out


def replicates(inversion: Inversion, values: Array, seed: int) -> tuple[Replicates, ...]:
    """Compute the residuals of every channel at draws of the posterior.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (draws, unknowns)
        Public units.
    seed : int
        For the linear coefficients and the replicated noise.
    """
    rng = np.random.default_rng(seed)
    batches = [_batch(inversion, values[i : i + _BATCH], rng) for i in range(0, len(values), _BATCH)]
    return tuple(_joined(parts) for parts in zip(*batches, strict=True))


def _batch(inversion: Inversion, values: Array, rng: np.random.Generator) -> list[Replicates]:
    out = []
    named = inversion.posterior.parameters.named(values)
    for member in inversion.posterior.members:
        model, local = member.model, member.local(named)
        functions = model.functions(local)
        weights = model.marginal(functions, local).draw(rng)
        for channel in model.channels:
            predicted = np.einsum("nc,ncd->nd", weights, functions[channel.name])
            noise = channel.noise_values(local)
            residual = channel.data[model.used] - predicted
            drawn = [
                channel.noise.draw(rng, {k: float(v[i]) for k, v in noise.items()})
                for i in range(len(values))
            ]
            out.append(
                Replicates(
                    channel,
                    f"{member.label}:{channel.name}" if member.label else channel.name,
                    model.delay[model.used],
                    channel.data[model.used],
                    residual,
                    innovations(channel.noise, residual, noise),
                    predicted + np.array(drawn),
                    noise,
                )
            )
    return out


def _joined(parts: tuple[Replicates, ...]) -> Replicates:
    return replace(
        parts[0],
        residual=np.concatenate([p.residual for p in parts]),
        innovation=np.concatenate([p.innovation for p in parts]),
        replicate=np.concatenate([p.replicate for p in parts]),
        noise={k: np.concatenate([p.noise[k] for p in parts]) for k in parts[0].noise},
    )


def autocorrelation(series: Array, lags: int) -> Array:
    """Return the autocorrelations of rows at lags 1 to `lags`, shape (rows, lags): ``sum u_i u_i+k / sum u_i^2``."""
    power = (series**2).sum(axis=1)
    return np.stack(
        [(series[:, k:] * series[:, :-k]).sum(axis=1) / power for k in range(1, lags + 1)], axis=1
    )
