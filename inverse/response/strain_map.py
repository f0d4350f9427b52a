"""Strain and temperature at given depths and delays: what the pump sets in motion, before any detector.

In each medium both are the few exponentials of depth that `SoundField` and `HeatField` document; they are
evaluated at every Laplace variable and returned to time like a trace.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_delay
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.known import known_values
from inverse.description.sample.places import bind
from inverse.description.sample.stack import Stack
from inverse.response.basis import Beams, arrival, fields
from inverse.response.carriers import Diffusing, Pairs
from inverse.response.heat import HeatField
from inverse.response.inverse_laplace import TimeGrid, time_grid, to_delays
from inverse.response.light import Absorption, absorption, light_field
from inverse.response.media import Medium, Sample, sample
from inverse.response.sound import SoundField, modulus

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["known_sample", "strain_map", "temperatures"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


def strain_map(
    stack: Stack,
    setup: PumpProbe,
    delay: Any,
    depth: Any,
    *,
    values: Mapping[str, float] | None = None,
) -> xr.Dataset:
    """Compute strain and temperature in the sample.

    Parameters
    ----------
    stack : Stack
        Distributions stand for their median unless `values` says otherwise.
    setup : PumpProbe
        ``fluence`` scales the result; the pulse is that of pump and probe together.
    delay : array, shape (n,)
        ps after time zero.
    depth : array, shape (m,)
        nm below the surface at rest, 0 or more.
    values : mapping, optional
        Unknown name -> value.

    Returns
    -------
    xarray.Dataset
        ``strain`` (1, tension positive), ``elastic_strain`` (stress over modulus: the strain less that of heat at
        rest, so the sound alone), ``temperature`` of the lattice and ``electron_temperature`` (K, rises) on (depth,
        delay); ``medium`` tells each depth's place.

    Raises
    ------
    ValueError
        If a depth is negative, not finite or below a free back; there is no delay; a constant is missing; or `values`
        names no unknown or is out of range.
    """
    import xarray as xr

    delay, depth = checked_delay(delay), np.atleast_1d(np.asarray(depth, dtype=float))
    batch = known_sample(stack, setup, values or {})
    number, below_top = _locate(batch, depth)
    grid = time_grid(delay, setup.pulse_rms, earliest=0.0)
    found = np.empty((4, depth.size, delay.size))
    beams = setup.beams
    for j in np.unique(number):
        inside = number == j
        moved = _moved(batch, beams, grid, int(j))
        found[:, inside] = _in_time(grid, moved.everything(below_top[inside], grid.s)).reshape(
            4, inside.sum(), -1
        )
    found *= setup.fluence
    names = np.array(stack.names)[number]
    about = (
        ("strain", "1", "strain"),
        ("elastic_strain", "1", "stress over modulus"),
        ("temperature", "K", "rise of the lattice"),
        ("electron_temperature", "K", "rise of the electrons"),
    )
    return xr.Dataset(
        {
            name: (("depth", "delay"), rows, {"units": unit, "long_name": text})
            for rows, (name, unit, text) in zip(found, about, strict=True)
        },
        coords={
            "delay": ("delay", delay, {"units": "ps"}),
            "depth": ("depth", depth, {"units": "nm"}),
            "medium": ("depth", names),
        },
    )


def known_sample(stack: Stack, setup: PumpProbe, values: Mapping[str, float]) -> Sample:
    """Return the stack in coherent units, unknowns at given values or their medians.

    Raises
    ------
    ValueError
        If `values` names no unknown of the stack or is out of range, or a constant is missing.
    """
    bound = bind(stack, setup)
    return sample(bound, known_values(bound, values))


def temperatures(
    batch: Sample, beams: Beams, grid: TimeGrid, medium: int, depth: Array
) -> tuple[Array, Array]:
    """Return the rise of the lattice and of the heated (electron) system in one medium at unit fluence.

    Parameters
    ----------
    batch : Sample
        Of one stack.
    beams : tuple of Beam or float
        Pump and probe; a vacuum wavelength in nm stands for normal incidence.
    grid : TimeGrid
    medium : int
    depth : array, shape (depths,)
        nm below the medium's top.

    Returns
    -------
    tuple of array, shape (depths, delays)
        K for 1 J/m2.
    """
    lattice, hot = _moved(batch, beams, grid, medium).heated(depth)
    return _in_time(grid, lattice), _in_time(grid, hot)


@dataclass(frozen=True)
class _Moved:
    """Light, heat and sound of one medium of one stack."""

    medium: Medium
    profile: Absorption
    heat: HeatField
    sound: SoundField
    source: Complex

    def everything(self, z: Array, s: Complex) -> Complex:
        """Strain, elastic strain, lattice and electron temperature, one below the other."""
        strain, (lattice, electrons) = self.strain(z), self.heated(z)
        stress = self.medium.stress * lattice + self.medium.electron_stress * electrons
        if self.medium.carriers is not None and isinstance(self.heat.second, Pairs):
            steep, beat = self._absorbed(z)
            pairs = self._diffusing(self.heat.second, z)
            pairs = pairs + self.heat.second.steep * steep + self.heat.second.beat * beat
            stress = stress + self.medium.carriers.stress * pairs
        if self.medium.initial is not None:
            stress = stress + self.medium.initial.stress * self.source / (s + self.medium.initial.rate)
        elastic = strain - stress / modulus(self.medium, s)
        return np.concatenate([strain, elastic, lattice, electrons])

    def heated(self, z: Array) -> tuple[Complex, Complex]:
        """Lattice and electron temperature at depths below the medium's top, shape (depths, frequencies)."""
        on_hot, on_steep, on_beat = self.heat.ratios
        hot, (steep, beat) = self._diffusing(self.heat, z), self._absorbed(z)
        steep, beat = self.heat.steep * steep, self.heat.beat * beat
        electrons, lattice = hot + steep + beat, on_hot * hot + on_steep * steep + on_beat * beat
        if self.heat.second is None:
            return lattice, electrons
        second = self._diffusing(self.heat.second, z)
        share = self.heat.second_heat if isinstance(self.heat.second, Pairs) else 1.0
        return lattice + self.heat.second_heat * second, electrons + share * second

    def strain(self, z: Array) -> Complex:
        """Strain at depths below the medium's top."""
        steep, beat = self._absorbed(z)
        down, up = self._both_ways(self.sound.q, z)
        ringing = self.sound.q * (self.sound.up * up - self.sound.down * down)
        strain = ringing + self.sound.hot * self._diffusing(self.heat, z)
        if self.heat.second is not None:
            strain = strain + self.sound.paired * self._diffusing(self.heat.second, z)
        return strain + self.sound.steep * steep + self.sound.beat * beat

    def _both_ways(self, q: Complex, z: Array) -> tuple[Complex, Complex]:
        """``exp(-q z)`` and ``exp(-q (d - z))``, the latter zero in the half-space."""
        column = z[:, None]
        thickness = self.medium.thickness.item()
        if np.isinf(thickness):
            return np.exp(-q * column), np.zeros_like(q)
        return np.exp(-q * column), np.exp(-q * (thickness - column))

    def _diffusing(self, field: HeatField | Diffusing, z: Array) -> Complex:
        down, up = self._both_ways(field.q, z)
        return field.down * down + field.up * up

    def _absorbed(self, z: Array) -> tuple[Complex, Complex]:
        """Exponential and interference part of the absorbed profile."""
        down, up = self._both_ways(self.profile.p.astype(complex), z)
        beat = 2 * (self.profile.beat * np.exp(1j * self.profile.x * z[:, None])).real
        return self.profile.top * down + self.profile.bottom * up, beat.astype(complex)


def _moved(batch: Sample, beams: Beams, grid: TimeGrid, medium: int) -> _Moved:
    found = fields(batch, beams, grid, np.zeros((1, 1)))
    media, sound = batch.media, found.sound[medium]
    if not isinstance(sound, SoundField):
        raise ValueError(
            "Strain in a stack with an oblique cut has three components; only its trace is computed."
        )
    pump = light_field(*batch.light("pump"), beams[0], batch.ambient.n_pump)
    profile = absorption(pump, medium)
    return _Moved(media[medium], profile, found.heat[medium], sound, arrival(grid, np.zeros((1, 1))))


def _in_time(grid: TimeGrid, spectra: Complex) -> Array:
    full = np.broadcast_to(spectra, (len(spectra), grid.s.shape[1]))
    return to_delays(grid, np.array(full)[None])[0]


def _locate(batch: Sample, depth: Array) -> tuple[NDArray[np.intp], Array]:
    """Return the medium of each depth, and the depth below that medium's top."""
    tops = np.concatenate([[0.0], np.cumsum([m.thickness.item() for m in batch.media[:-1]])])
    if not np.all(np.isfinite(depth)) or np.any(depth < 0):
        raise ValueError("A depth is negative or not finite; give nm below the surface, 0 or more.")
    if batch.backing is not None and np.any(depth > tops[-1] + batch.media[-1].thickness.item()):
        raise ValueError(
            f"A depth is in the vacuum below {tops[-1] + batch.media[-1].thickness.item():g} nm."
        )
    number = np.clip(np.searchsorted(tops, depth, side="right") - 1, 0, None)
    return number, depth - tops[number]
