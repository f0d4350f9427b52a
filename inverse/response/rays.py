"""Arrivals of sound at the surface by tracing rays: when, how strong, and by which way.

A ray leaves the surface at time zero with unit displacement, or two leave the top of a buried layer, up and down. It
splits at every interface into ``r = [Z1 - Z2 + s Z1 Z2 / K] / D`` and ``t = 2 Z1 / D``,
``D = Z1 + Z2 + s Z1 Z2 / K`` (linear slip; Schoenberg 1980), taken at one frequency, and turns round at the free
surface. Rays that have crossed every layer equally often arrive together and are added.
"""

from __future__ import annotations

import heapq
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.stack import Stack
from inverse.response.light import absorption, light_field
from inverse.response.media import Sample, layers
from inverse.response.sound import modulus
from inverse.response.strain_map import known_sample

__all__ = ["Arrival", "arrivals"]

Array = NDArray[np.float64]

_MOST = 20000  # rays followed before giving up on the latest
_Key = tuple[tuple[int, ...], int, int]  # crossings of each layer, the next layer, and +1 down or -1 up


@dataclass(frozen=True)
class Arrival:
    """Sound that comes back to the surface.

    Attributes
    ----------
    time : float
        ps after it left.
    amplitude : complex
        Displacement of the upward wave over that of the wave that left, at the frequency asked for; real without
        compliant interfaces.
    round_trips : mapping of str to float
        Layer -> how often it was crossed down and up; a half is one crossing.
    times, depths : tuple of float
        Corners of the way that contributes most, ps and nm.
    """

    time: float
    amplitude: complex
    round_trips: Mapping[str, float]
    times: tuple[float, ...]
    depths: tuple[float, ...]

    @property
    def label(self) -> str:
        """Round trips in words: ``Al``, ``2 Al``, ``½ SiO2 + W``."""
        return " + ".join(name if n == 1 else f"{_count(n)} {name}" for name, n in self.round_trips.items())


@dataclass(frozen=True)
class _Boundaries:
    """Coefficients at the surface (0) and below each layer, by the side the ray comes from; nan where there is none."""

    reflected_down: tuple[complex, ...]
    passed_down: tuple[complex, ...]
    reflected_up: tuple[complex, ...]
    passed_up: tuple[complex, ...]


@dataclass
class _Ray:
    """Rays about to cross a layer, all at the same time: their sum, and the strongest of them."""

    amplitude: complex
    strongest: float
    times: tuple[float, ...]
    depths: tuple[float, ...]


def arrivals(
    stack: Stack,
    setup: PumpProbe,
    last: float,
    *,
    source: int | None = None,
    smallest: float = 0.02,
    frequency: float = 0.05,
    values: Mapping[str, float] | None = None,
) -> tuple[Arrival, ...]:
    """Trace the sound that the pump launches to the surface.

    Parameters
    ----------
    stack : Stack
        Distributions stand for their median unless `values` says otherwise.
    setup : PumpProbe
    last : float
        Latest arrival, ps.
    source : int, optional
        Medium at whose top the sound starts, 0 at the surface; by default the one that the pump stresses most.
    smallest : float
        Amplitude below which a ray is dropped.
    frequency : float
        THz, at which compliances and losses act.
    values : mapping, optional
        Unknown name -> value.

    Returns
    -------
    tuple of Arrival
        In order of time.

    Raises
    ------
    ValueError
        If a constant is missing, or `values` names no unknown.
    """
    batch = known_sample(stack, setup, values or {})
    s = 2j * np.pi * frequency
    below = layers(batch.media)
    crossing = [m.thickness.item() / m.velocity.item() for m in below]
    loss = [
        _loss(
            m.thickness.item() / m.velocity.item(), modulus(m, np.array([[s]])) / m.density / m.velocity**2, s
        )
        for m in below
    ]
    depth = np.concatenate([[0.0], np.cumsum([m.thickness.item() for m in below])])
    coefficients = _boundaries(batch, s)
    start = _stressed_most(batch, setup) if source is None else source
    found = _trace(crossing, loss, depth, coefficients, last, smallest, start)
    return tuple(_arrival(counts, ray, crossing, stack.names) for counts, ray in found)


def _stressed_most(batch: Sample, setup: PumpProbe) -> int:
    """Return the medium with the largest stress at its top, stress coefficient x absorbed power / heat capacity."""
    media = batch.media
    pump = light_field(*batch.light("pump"), setup.beams[0], batch.ambient.n_pump)
    profiles = [absorption(pump, j) for j in range(len(media))]
    power = [(f.top + f.bottom * f.decay + 2 * f.beat.real).item() for f in profiles]
    launched = [abs(m.stress.item()) * p / m.heat_capacity.item() for m, p in zip(media, power, strict=True)]
    return int(np.argmax(launched))


def _loss(time: float, ratio: NDArray[np.complex128], s: complex) -> float:
    """Return what a crossing leaves of the amplitude; `ratio` is c(s) over its value without loss."""
    return float(np.exp(-(s / np.sqrt(ratio.item())).real * time))


def _boundaries(batch: Sample, s: complex) -> _Boundaries:
    z = [(m.density * m.velocity).item() for m in batch.media]
    if batch.backing is not None:
        z.append(0.0)
    above = 0.0
    if batch.ambient.density is not None and batch.ambient.velocity is not None:
        above = (batch.ambient.density * batch.ambient.velocity).item()
    rows: list[tuple[complex, ...]] = [
        (np.nan, np.nan, (z[0] - above) / (z[0] + above), 2 * z[0] / (z[0] + above))
    ]
    for z1, z2, compliance in zip(z, z[1:], batch.compliance, strict=False):
        spring = s * z1 * z2 * compliance.item()
        total = z1 + z2 + spring
        rows.append(((z1 - z2 + spring) / total, 2 * z1 / total, (z2 - z1 + spring) / total, 2 * z2 / total))
    return _Boundaries(*(tuple(column) for column in zip(*rows, strict=True)))


def _trace(
    crossing: list[float],
    loss: list[float],
    depth: Array,
    at: _Boundaries,
    last: float,
    smallest: float,
    source: int,
) -> list[tuple[tuple[int, ...], _Ray]]:
    """Follow rays in order of time; give those at the surface with the number of crossings of each layer."""
    layers = len(crossing)
    if not layers:
        return []
    rays: dict[_Key, _Ray] = {}
    queue: list[tuple[float, _Key]] = []
    start = _Ray(1.0, 1.0, (0.0,), (float(depth[source]),))
    for layer, way in ((source, 1), (source - 1, -1)):
        if 0 <= layer < layers:
            _add(rays, queue, ((0,) * layers, layer, way), 0.0, start, 1.0)
    found = []
    for _ in range(_MOST):
        if not queue:
            break
        time, key = heapq.heappop(queue)
        counts, layer, way = key
        ray = rays.pop(key)
        time += crossing[layer]
        if time > last or abs(ray.amplitude) < smallest:
            continue
        counts = (*counts[:layer], counts[layer] + 1, *counts[layer + 1 :])
        boundary = layer + 1 if way > 0 else layer
        arrived = _Ray(
            ray.amplitude * loss[layer],
            ray.strongest * loss[layer],
            (*ray.times, time),
            (*ray.depths, depth[boundary]),
        )
        if boundary == 0:
            found.append((counts, arrived))
        for target, factor in _split(at, boundary, layer, way):
            if target[0] < layers and target[0] >= 0:
                _add(rays, queue, (counts, *target), time, arrived, factor)
    return found


def _split(at: _Boundaries, boundary: int, layer: int, way: int) -> list[tuple[tuple[int, int], complex]]:
    """Give layer, direction and factor of the reflected and the transmitted ray."""
    if way > 0:
        return [((layer, -1), at.reflected_down[boundary]), ((layer + 1, 1), at.passed_down[boundary])]
    return [((layer, 1), at.reflected_up[boundary]), ((layer - 1, -1), at.passed_up[boundary])]


def _add(
    rays: dict[_Key, _Ray],
    queue: list[tuple[float, _Key]],
    key: _Key,
    time: float,
    ray: _Ray,
    factor: complex,
) -> None:
    """Add a ray to those that go the same way at the same time."""
    strength = ray.strongest * abs(factor)
    if key not in rays:
        rays[key] = _Ray(ray.amplitude * factor, strength, ray.times, ray.depths)
        heapq.heappush(queue, (time, key))
        return
    known = rays[key]
    known.amplitude += ray.amplitude * factor
    if strength > known.strongest:
        known.strongest, known.times, known.depths = strength, ray.times, ray.depths


def _arrival(counts: tuple[int, ...], ray: _Ray, crossing: list[float], names: tuple[str, ...]) -> Arrival:
    trips: Counter[str] = Counter()
    for name, n in zip(names, counts, strict=False):
        trips[name] += n
    time = float(np.dot(counts, crossing))
    return Arrival(
        time, complex(ray.amplitude), {k: n / 2 for k, n in trips.items() if n}, ray.times, ray.depths
    )


def _count(n: float) -> str:
    whole, half = divmod(round(2 * n), 2)
    return f"{whole or ''}{'½' if half else ''}"
