"""Truths drawn from a problem's own priors, traces drawn from its own model, and the problem with those traces."""

from __future__ import annotations

import copy
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.inference.derived import derived
from inverse.inference.problem.posterior import Member

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["Simulator", "draw_traces", "draw_truth", "quantities", "with_data"]

Array = NDArray[np.float64]
Traces = Mapping[str, Any]
Simulator = Callable[[np.random.Generator, dict[str, float]], Traces]
"""Takes a random generator and the true values by name; gives a channel's data at all delays, by channel name."""

_TRIES = 1000


def draw_truth(inversion: Inversion, rng: np.random.Generator) -> Array:
    """Draw values of all unknowns from their priors, within the limits of each quantity.

    Raises
    ------
    ValueError
        If a thousand draws in a row lie outside.
    """
    posterior = inversion.posterior
    for _ in range(_TRIES):
        values = posterior.parameters.to_values(rng.standard_normal((1, len(inversion.names))))[0]
        if (np.isfinite(values) & (values >= posterior.low) & (values <= posterior.high)).all():
            return values
    raise ValueError(
        "A thousand draws from the priors lie outside the allowed ranges; give priors that lie inside."
    )


def draw_traces(inversion: Inversion, values: Array, rng: np.random.Generator) -> list[dict[str, Array]]:
    """Draw one trace per part: the model with linear coefficients from their priors, plus noise.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (unknowns,)
    rng : Generator

    Returns
    -------
    list of dict
        Channel name -> data at all delays, shape (delays,). Delays that are not fitted carry no noise.
    """
    named = inversion.posterior.parameters.named(values[None])
    return [_draw_trace(member, named, rng) for member in inversion.posterior.members]


def _draw_trace(member: Member, named: Mapping[str, Array], rng: np.random.Generator) -> dict[str, Array]:
    model, local = member.model, member.local(named)
    coefficients = rng.standard_normal((1, len(model.coefficient_names)))
    clean = model.predict(local, coefficients, model.delay)
    out = {}
    for channel in model.channels:
        noise = {name: float(v[0]) for name, v in channel.noise_values(local).items()}
        out[channel.name] = clean[channel.name][0].copy()
        out[channel.name][model.used] += channel.noise.draw(rng, noise)
    return out


def with_data(inversion: Inversion, traces: list[dict[str, Array]]) -> Inversion:
    """Return the problem with other data: priors, coefficient widths, delays and mask stay as they are.

    Building an `Inversion` anew would set the noise's priors, the coefficients' widths and time zero's prior from
    the new trace.
    """
    members = inversion.posterior.members
    fresh = tuple(_member_with(m, t) for m, t in zip(members, traces, strict=True))
    out = copy.copy(inversion)
    out.posterior = replace(inversion.posterior, members=fresh)
    if len(members) == 1:
        out.trace = _trace_with(inversion.trace, traces[0])
        out.parts = (out,)
    else:
        out.parts = tuple(with_data(p, [t]) for p, t in zip(inversion.parts, traces, strict=True))
    return out


def _member_with(member: Member, trace: Mapping[str, Array]) -> Member:
    channels = tuple(replace(c, data=np.asarray(trace[c.name], dtype=float)) for c in member.model.channels)
    return replace(member, model=replace(member.model, channels=channels))


def _trace_with(trace: Any, data: Mapping[str, Array]) -> Any:
    return trace.assign({name: ("delay", values, trace[name].attrs) for name, values in data.items()})


def quantities(inversion: Inversion, values: Array) -> dict[str, Array]:
    """Name the unknowns and what follows from them.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (n, unknowns)

    Returns
    -------
    dict
        Name -> array of shape (n,).
    """
    named = inversion.posterior.parameters.named(values)
    out = dict(named)
    for member in inversion.posterior.members:
        local = {inner: named[outer] for inner, outer in member.names.items()}
        prefix = f"{member.label}:" if member.label else ""
        out.update({prefix + name: array for name, array in derived(member.model.bound, local).items()})
    return out
