"""A trace from a stack whose every value is known, with the share of each layer and mechanism."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.limits import warn_if_not_plane
from inverse.description.materials import Material
from inverse.description.parts import Substrate
from inverse.description.places import BoundStack, bind
from inverse.description.pumpprobe import PumpProbe
from inverse.description.stack import Stack
from inverse.response.basis import CHANNELS, columns, displaced, fields
from inverse.response.instrument import drift, measured_sample
from inverse.response.inverse_laplace import TimeGrid, time_grid, to_delays
from inverse.response.media import Sample
from inverse.response.pulse_train import PulseTrain, pulse_train, residual

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["DEFAULT_HEAT", "DEFAULT_STRAIN", "simulate"]

Array = NDArray[np.float64]

DEFAULT_STRAIN = 1.0 + 1.0j
"""dn/d(strain) where the material gives none: the order of magnitude, nothing more."""

DEFAULT_HEAT = 1e-4 + 1e-4j
"""dn/dT in 1/K where the material gives none: the order of magnitude, nothing more."""


def simulate(
    stack: Stack,
    setup: PumpProbe,
    delay: Any,
    *,
    values: Mapping[str, float] | None = None,
    time_zero: float = 0.0,
    shares: bool = False,
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

    Returns
    -------
    xarray.Dataset
        ``reflectance_change`` and ``optical_phase`` (rad) on ``delay``; attrs tell every coefficient used and
        where it comes from.

    Raises
    ------
    ValueError
        If a constant is missing, a delay is not finite or not increasing, or `values` names no unknown.
    """
    from inverse.description.traces import make_trace

    delay = np.atleast_1d(np.asarray(delay, dtype=float))
    bound = bind(stack, setup)
    known = _known(bound, values or {})
    grid = time_grid(delay, setup.pulse_rms, earliest=time_zero)
    batch = measured_sample(bound, known)
    warn_if_not_plane(stack, setup, float(delay.max()) - time_zero)
    found, names = _merged(*_parts(bound, stack, batch, setup, grid, time_zero))
    if train := pulse_train(setup):
        earlier = _earlier(stack, batch, setup, train, delay, time_zero)
        found, names = train.with_earlier(found, earlier), [*names, "earlier pulses"]
    found *= drift(bound, known, delay[None] - time_zero)[0]
    parts = {"reflectance_change": 2 * found.real, "optical_phase": found.imag}
    signals = {channel: setup.fluence * parts[channel] for channel in CHANNELS}
    sums = {channel: rows.sum(axis=0) for channel, rows in signals.items()}
    trace = make_trace(delay, **sums, measured=False)
    if shares:
        trace = trace.assign_coords(part=("part", names))
        for channel, rows in signals.items():
            trace[f"{channel}_share"] = (("part", "delay"), rows, dict(trace[channel].attrs))
    trace.attrs["coefficients"] = _said(stack)
    return trace


def _known(bound: BoundStack, values: Mapping[str, float]) -> dict[str, Array]:
    strange = sorted(set(values) - set(bound.priors))
    if strange:
        raise ValueError(
            f"values names {', '.join(strange)}; the stack's unknowns are {', '.join(bound.priors) or 'none'}."
        )
    return {
        name: np.array([float(values[name] if name in values else prior.median())])
        for name, prior in bound.priors.items()
    }


def _parts(
    bound: BoundStack, stack: Stack, batch: Sample, setup: PumpProbe, grid: TimeGrid, time_zero: float
) -> tuple[NDArray[np.complex128], list[str]]:
    """Return the contribution of each part to delta r / r at unit fluence, and the parts' names."""
    found = fields(batch, (setup.pump, setup.probe), grid, np.full((1, 1), time_zero))
    media = _materials(stack)
    owners = [*(["ambient"] if bound.ambient else []), *bound.names][: len(media)]
    spectra: list[NDArray[np.complex128]] = []
    names: list[str] = []
    weights: list[complex] = []
    for owner, material, part in zip(owners, media, found.detected, strict=True):
        names += [f"{owner} strain", f"{owner} heat"]
        weights += [
            _coefficient(material.dn_dstrain, DEFAULT_STRAIN),
            _coefficient(material.dn_dT, DEFAULT_HEAT),
        ]
        spectra += [part.strain_real, part.strain_imag, part.heat_real, part.heat_imag]
    for boundary, real, imag in zip(("surface", *stack.interface_names), *displaced(found), strict=True):
        names.append(f"{boundary} displacement")
        weights.append(1.0)
        spectra += [real, imag]
    size = grid.s.shape[1]
    rows = np.stack([np.broadcast_to(spectrum, (1, size))[0] for spectrum in spectra])
    response = to_delays(grid, rows[None])[0]
    complex_parts = np.array(weights)[:, None] * (response[0::2] + 1j * response[1::2])
    return complex_parts, names


def _earlier(
    stack: Stack, batch: Sample, setup: PumpProbe, train: PulseTrain, delay: Array, time_zero: float
) -> NDArray[np.complex128]:
    """Return delta r / r that earlier pulses leave in the lock-in's channel, at unit fluence, shape (1, delays)."""
    materials = _materials(stack)
    layout = columns([m.name for m in materials])
    left = residual(batch, (setup.pump, setup.probe), delay, train, np.full((1, 1), time_zero), layout, 1)[0]
    rows = train.channel_of(left)
    known = {m.name: m for m in materials}
    weights = [
        coefficient
        for group in layout.groups
        for coefficient in (
            _coefficient(known[group].dn_dstrain, DEFAULT_STRAIN),
            _coefficient(known[group].dn_dT, DEFAULT_HEAT),
        )
    ]
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


def _coefficient(given: Any, default: complex) -> complex:
    if isinstance(given, tuple):
        raise ValueError(
            "simulate takes complex numbers for dn_dstrain and dn_dT, and one of them has a part that is unknown; give "
            "the stack to be simulated a number there."
        )
    return default if given is None else complex(given)


def _said(stack: Stack) -> str:
    """Say for every material which coefficients were used."""
    lines = []
    for name, material in {m.name: m for m in _materials(stack)}.items():
        for field, default in (("dn_dstrain", DEFAULT_STRAIN), ("dn_dT", DEFAULT_HEAT)):
            value = getattr(material, field)
            origin = "default" if value is None else "given"
            lines.append(f"{name}.{field} = {default if value is None else value} ({origin})")
    return "; ".join(lines)
