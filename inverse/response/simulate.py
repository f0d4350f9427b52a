"""A trace from a stack whose every value is known, with the share of each layer and mechanism."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_delay
from inverse.description.limits import warn_if_not_plane
from inverse.description.material.properties import Material
from inverse.description.pumpprobe import PumpProbe
from inverse.description.quantities import check
from inverse.description.sample.known import known_values
from inverse.description.sample.parts import Substrate
from inverse.description.sample.places import BoundStack, bind
from inverse.description.sample.stack import Stack
from inverse.response.basis import CHANNELS, PORTS, columns, displaced, fields
from inverse.response.instrument import drift
from inverse.response.inverse_laplace import TimeGrid, time_grid, to_delays
from inverse.response.media import Sample
from inverse.response.pulse_train import PulseTrain, pulse_train, residual
from inverse.response.spread import under_the_spot

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["DEFAULT_HEAT", "DEFAULT_STRAIN", "simulate"]

Array = NDArray[np.float64]

DEFAULT_STRAIN = 1.0 + 1.0j
"""dn/d(strain) where the material gives none: the order of magnitude, nothing more."""

DEFAULT_HEAT = 1e-4 + 1e-4j
"""dn/dT in 1/K where the material gives none: the order of magnitude, nothing more."""

DEFAULT_PAIRS = 0j
"""dn per density of carrier pairs in nm3 where the material gives none."""


def simulate(
    stack: Stack,
    setup: PumpProbe,
    delay: Any,
    *,
    values: Mapping[str, float] | None = None,
    time_zero: float = 0.0,
    shares: bool = False,
    channels: Sequence[str] = ("reflectance_change", "optical_phase"),
) -> xr.Dataset:
    """Compute the noise-free trace of a stack.

    Parameters
    ----------
    stack : Stack
        Distributions stand for their median unless `values` says otherwise.
    setup : PumpProbe
        ``fluence`` scales the trace.
    delay : array
        ps, strictly increasing.
    values : mapping, optional
        Unknown name -> value.
    time_zero : float
        ps.
    shares : bool
        Add ``<channel>_share`` on (part, delay): strain and heat of every place, displacement of every boundary.
        They add up to the channel.
    channels : str or sequence of str
        Of ``reflectance_change``, ``optical_phase``, ``transmission_change``, which needs a stack that light gets
        through, and ``beam_deflection``, which needs the spots (see `PumpProbe.deflection`).

    Returns
    -------
    xarray.Dataset
        The channels (rad for the phase) on ``delay``; attrs tell every coefficient used and
        where it comes from.

    Raises
    ------
    ValueError
        If a constant is missing, there is no delay, one is not finite or not increasing, or `values` names no unknown
        or is out of range.
    """
    from inverse.description.trace.reading import make_trace

    delay = checked_delay(delay)
    bound, time_zero = bind(stack, setup), check("time_zero", time_zero)
    known = known_values(bound, values or {})
    grid = time_grid(delay, setup.pulse_rms, earliest=time_zero)
    batches = under_the_spot(bound, known)
    warn_if_not_plane(stack, setup, float(delay.max()) - time_zero)
    channels = (channels,) if isinstance(channels, str) else tuple(channels)
    strange = sorted(set(channels) - set(CHANNELS))
    if strange or not channels:
        raise ValueError(f"simulate got channels={channels!r}; give some of {', '.join(CHANNELS)}.")
    runs = [(weight, _Run(stack, setup, bound, batch, grid, time_zero)) for weight, batch in batches]
    signals = {}
    for port in dict.fromkeys(PORTS[channel] for channel in channels):
        seen = [(weight, *run.parts(port)) for weight, run in runs]
        names = seen[0][2]
        found = np.sum([weight * part for weight, part, _ in seen], axis=0)
        found *= setup.fluence * drift(bound, known, delay[None] - time_zero)[0]
        for channel in channels:
            if PORTS[channel] == port:
                signals[channel] = _as_channel(found, channel, setup)
    sums = {channel: rows.sum(axis=0) for channel, rows in signals.items()}
    trace = make_trace(delay, **sums, measured=False)
    if shares:
        trace = trace.assign_coords(part=("part", names))
        for channel, rows in signals.items():
            trace[f"{channel}_share"] = (("part", "delay"), rows, dict(trace[channel].attrs))
    trace.attrs["coefficients"] = _said(stack)
    return trace


def _as_channel(found: NDArray[np.complex128], channel: str, setup: PumpProbe) -> Array:
    if channel in ("reflectance_change", "transmission_change"):
        return 2 * found.real
    return found.imag if channel == "optical_phase" else setup.deflection * found.imag


@dataclass(frozen=True)
class _Run:
    """A stack with its measurement, ready to be detected."""

    stack: Stack
    setup: PumpProbe
    bound: BoundStack
    batch: Sample
    grid: TimeGrid
    time_zero: float

    def parts(self, port: str) -> tuple[NDArray[np.complex128], list[str]]:
        """Return delta c / c of each place and mechanism at unit fluence, and their names."""
        found, names = _merged(*self._of_one_pulse(port))
        train = pulse_train(self.setup)
        if train is None:
            return found, names
        return train.with_earlier(found, self._earlier(train, port)), [*names, "earlier pulses"]

    def _of_one_pulse(self, port: str) -> tuple[NDArray[np.complex128], list[str]]:
        found = fields(self.batch, self.setup.beams, self.grid, np.full((1, 1), self.time_zero), port)
        media = _materials(self.stack)
        owners = [*(["ambient"] if self.bound.ambient else []), *self.bound.names][: len(media)]
        spectra: list[NDArray[np.complex128]] = []
        names: list[str] = []
        weights: list[complex] = []
        for owner, material, part in zip(owners, media, found.detected, strict=True):
            names += [f"{owner} strain", f"{owner} heat"]
            weights += _coefficients(material)
            spectra += [part.strain_real, part.strain_imag, part.heat_real, part.heat_imag]
            if part.pairs is not None:
                names.append(f"{owner} carriers")
                weights.append(_coefficient(material.dn_dN, DEFAULT_PAIRS))
                spectra += [part.pairs[:, 0], part.pairs[:, 1]]
        for boundary, real, imag in zip(
            ("surface", *self.stack.interface_names), *displaced(found), strict=True
        ):
            names.append(f"{boundary} displacement")
            weights.append(1.0)
            spectra += [real, imag]
        size = self.grid.s.shape[1]
        rows = np.stack([np.broadcast_to(spectrum, (1, size))[0] for spectrum in spectra])
        response = to_delays(self.grid, rows[None])[0]
        return np.array(weights)[:, None] * (response[0::2] + 1j * response[1::2]), names

    def _earlier(self, train: PulseTrain, port: str) -> NDArray[np.complex128]:
        """Return what earlier pulses leave in the lock-in's channel, shape (1, delays)."""
        known = {m.name: m for m in _materials(self.stack)}
        dark = [name for name, m in known.items() if m.band_gap is not None]
        layout = columns([m.name for m in _materials(self.stack)], dark)
        zero = np.full((1, 1), self.time_zero)
        left = residual(self.batch, self.setup.beams, self.grid.delay, train, zero, layout, 1, port)[0]
        rows = train.channel_of(left)
        weights = [c for group in layout.groups for c in _coefficients(known[group])]
        weights += [_coefficient(known[group].dn_dN, DEFAULT_PAIRS) for group in dark]
        return np.array([*weights, 1.0])[None] @ (rows[0::2] + 1j * rows[1::2])


def _merged(rows: NDArray[np.complex128], names: list[str]) -> tuple[NDArray[np.complex128], list[str]]:
    """Add rows of the same name: the periods of a superlattice, the slices of a graded layer."""
    unique = list(dict.fromkeys(names))
    out = np.zeros((len(unique), rows.shape[1]), dtype=complex)
    np.add.at(out, [unique.index(name) for name in names], rows)
    return out, unique


def _materials(stack: Stack) -> list[Material]:
    """Return what the probe crosses, top to bottom, a liquid above included."""
    liquid = [] if stack.ambient is None else [stack.ambient]
    solids = (p.material for p in stack.media if not (isinstance(p, Substrate) and p.is_empty))
    return [*liquid, *solids]


def _coefficients(material: Material) -> list[complex]:
    return [_coefficient(material.dn_dstrain, DEFAULT_STRAIN), _coefficient(material.dn_dT, DEFAULT_HEAT)]


def _coefficient(given: Any, default: complex) -> complex:
    if isinstance(given, tuple):
        raise ValueError(
            "simulate takes complex numbers for dn_dstrain and dn_dT (dn_dN too), and one of them has a part that is "
            "unknown; give the stack to be simulated a number there."
        )
    return default if given is None else complex(given)


def _said(stack: Stack) -> str:
    """Say for every material which coefficients were used."""
    lines = []
    for name, material in {m.name: m for m in _materials(stack)}.items():
        defaults = {"dn_dstrain": DEFAULT_STRAIN, "dn_dT": DEFAULT_HEAT}
        if material.band_gap is not None:
            defaults["dn_dN"] = DEFAULT_PAIRS
        for field, default in defaults.items():
            value = getattr(material, field)
            origin = "default" if value is None else "given"
            lines.append(f"{name}.{field} = {default if value is None else value} ({origin})")
    return "; ".join(lines)
