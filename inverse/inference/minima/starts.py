"""Starting points of a search: draws from the priors, moved to the echoes, spread over the fringes of clear layers."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from inverse.inference.problem.posterior import Posterior

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["best", "candidates", "coarse_noise", "given_point", "joined", "parts_of"]

Array = NDArray[np.float64]

_CANDIDATES = 512


def joined(z: Array, physical: NDArray[np.bool_], x: Array) -> Array:
    """Return the noise of z with the physical unknowns x, shape (..., physical unknowns)."""
    out = np.broadcast_to(z, (*x.shape[:-1], z.size)).copy()
    out[..., physical] = x
    return out


def coarse_noise(inversion: Inversion, z: Array, fraction: float) -> Array:
    """Return standard normal variables with white noise at a fraction of the signal and little discrepancy."""
    named = inversion.posterior.parameters.named(inversion.posterior.parameters.to_values(z[None]))
    values = {name: float(v[0]) for name, v in named.items()}
    for member in inversion.posterior.members:
        for channel in member.model.channels:
            signal = float(np.std(channel.data[member.model.used]))
            white = member.names[channel.prefix + "white"]
            values[white] = max(values[white], fraction * signal)
    array = np.array([[values[name] for name in inversion.names]])
    return np.clip(inversion.posterior.parameters.to_z(array)[0], -30, 30)


def candidates(inversion: Inversion, physical: NDArray[np.bool_], seed: int) -> Array:
    """Draw physical unknowns from the priors, half of them moved to the echoes; the first is the priors' middle."""
    from scipy.special import ndtri
    from scipy.stats import qmc

    sampler = qmc.Sobol(int(physical.sum()), rng=np.random.default_rng(seed))
    unit = np.clip(sampler.random(_CANDIDATES), 1e-3, 1 - 1e-3)
    z = joined(np.zeros(len(inversion.names)), physical, ndtri(unit))
    _move_to_echo(inversion, z[::2])
    z[0, physical] = 0.0
    return z[:, physical]


def parts_of(
    inversion: Inversion, physical: NDArray[np.bool_], x: Array, count: int
) -> NDArray[np.intp] | None:
    """Tell in which of `count` equally probable parts of its prior each point has a clear layer's thickness.

    A clear layer has a minimum per fringe of the light in it, each too narrow to be seen from the next.
    """
    from scipy.special import ndtr

    for member in inversion.posterior.members:
        for slots, clear in zip(member.model.bound.media, member.model.clear, strict=False):
            if clear and "thickness" in slots and slots["thickness"].prior is not None:
                column = (
                    np.flatnonzero(physical)
                    .tolist()
                    .index(inversion.names.index(member.names[slots["thickness"].name]))
                )
                return np.minimum((ndtr(x[:, column]) * count).astype(int), count - 1)
    return None


def best(posterior: Posterior, z: Array, count: int, parts: NDArray[np.intp] | None = None) -> list[Array]:
    """Return the points with the highest density, distinct ones only; the best of every part first."""
    score = posterior(z)
    if not np.isfinite(score).any():
        raise ValueError(
            "No draw from the priors has a finite likelihood; check the priors and the constants."
        )
    order = np.argsort(-np.nan_to_num(score, neginf=-1e300))
    if parts is not None:
        of_part = [order[parts[order] == part] for part in range(count)]
        place = {i: k for members in of_part for k, i in enumerate(members)}
        order = np.array(sorted(order, key=place.__getitem__))
    chosen: list[Array] = []
    for i in order:
        if len(chosen) < count and np.isfinite(score[i]):
            _add_distinct(chosen, z[i], 0.5)
    return chosen


def given_point(inversion: Inversion, point: Mapping[str, float]) -> Array:
    """Return a user's point in standard normal variables, shape (unknowns,)."""
    missing = [name for name in inversion.names if name not in point]
    if missing:
        raise ValueError(f"A starting point lacks {', '.join(missing)}; it gives {', '.join(point)}.")
    values = np.array([[point[name] for name in inversion.names]], dtype=float)
    if np.isnan(values).any():
        raise ValueError("A starting point holds NaN; give a number for every unknown.")
    return np.clip(inversion.posterior.parameters.to_z(values)[0], -5, 5)


def _add_distinct(points: list[Array], z: Array, distance: float) -> None:
    if all(np.linalg.norm(z - p) > distance for p in points):
        points.append(z)


def _move_to_echo(inversion: Inversion, z: Array) -> None:
    """Move the thickness of the topmost layer that is not clear to the round-trip time of the echoes (in place)."""
    from inverse.description.trace.look import first_look

    for member, part in zip(inversion.posterior.members, inversion.parts, strict=True):
        clear = member.model.clear
        slots = member.model.bound.media[clear.index(False) if False in clear else 0]
        if "thickness" not in slots or slots["thickness"].prior is None:
            continue
        time = first_look(part.trace).round_trip
        if time is None:
            continue
        values = inversion.posterior.parameters.to_values(z)
        named = member.local(inversion.posterior.parameters.named(values))
        column = inversion.names.index(member.names[slots["thickness"].name])
        velocity = slots["velocity"].fill(named)
        values[:, column] = np.asarray(velocity) * time.value / 2
        moved = np.clip(inversion.posterior.parameters.to_z(values)[:, column], -3, 3)
        z[:, column] = np.where(np.isfinite(moved), moved, z[:, column])
