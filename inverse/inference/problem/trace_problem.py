"""One trace as a problem: priors, mask, noise and the scale of the linear coefficients."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.limits import warn_if_not_plane
from inverse.description.pumpprobe import PumpProbe
from inverse.description.quantities import QUANTITIES
from inverse.description.sample.places import BoundStack, bind
from inverse.description.sample.stack import Stack
from inverse.description.unknowns import Unknown, checked, is_distribution, validate_prior
from inverse.inference.problem.likelihood import (
    CLEAR,
    DISPLACEMENT_WIDTH,
    HEAT_WIDTH,
    PAIR_WIDTH,
    SCALE_WIDTH,
    STRAIN_WIDTH,
    Channel,
    TraceModel,
)
from inverse.inference.problem.noise import Noise, noise_priors
from inverse.inference.problem.posterior import Member
from inverse.inference.problem.reach import refuse_a_trace_before_the_pulse, refuse_what_no_trace_can_tell
from inverse.inference.problem.scans import relative_noise
from inverse.inference.problem.tied import tie
from inverse.response.basis import CHANNELS, PORTS, Columns, basis, columns, take
from inverse.response.media import Sample, sample
from inverse.response.pulse_train import pulse_train
from inverse.response.windows import delay_windows

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["trace_member"]

Array = NDArray[np.float64]

OVERLAP = 2.5
"""Delays up to this many ps after time zero are left out by default: hot electrons there fit no simple model."""


def trace_member(
    stack: Stack, setup: PumpProbe, trace: xr.Dataset, time_zero: Any, mask: Any, noise: Any
) -> tuple[Member, dict[str, Any], dict[str, str], frozenset[str]]:
    """Build one trace's model; return it with the priors, quantity names and shared names of its unknowns."""
    from inverse.description.trace.checks import check_trace
    from inverse.description.trace.look import first_look

    check_trace(trace)
    bound = bind(stack, setup)
    slots = {slot.name: slot for slot in bound.slots if slot.prior is not None}
    priors = {name: slot.prior for name, slot in slots.items()}
    fields = {name: slot.field for name, slot in slots.items()}
    shared = {name for name, slot in slots.items() if slot.shared}
    name, zero, fixed = _time_zero(time_zero, trace)
    if isinstance(time_zero, Unknown):
        shared.add(name)
    if zero is not None:
        _add_unknown(name, zero, "time_zero", priors, fields)
    names = {inner: inner for inner in slots}
    if zero is not None:
        names["time_zero"] = name
    centre, early = (
        (fixed["time_zero"],) * 2 if zero is None else (float(zero.median()), float(zero.ppf(1e-9)))
    )
    delay = trace["delay"].values.astype(float)
    warn_if_not_plane(stack, setup, float(delay.max()) - centre)
    used = _used(mask, delay, centre, setup.pulse_rms)
    refuse_a_trace_before_the_pulse(delay[used], centre)
    refuse_what_no_trace_can_tell(bound, float(delay[used].max()) - centre, setup.pulse_rms, setup.probe)
    look = first_look(trace)
    present = [c for c in CHANNELS if c in trace]
    channels = []
    for channel in present:
        prefix = "noise." if len(present) == 1 else f"noise.{channel}."
        built, own = _channel(trace, channel, used, noise, look.noise[channel], prefix)
        if channel == "beam_deflection":
            built = replace(built, scale=setup.deflection)
        channels.append(built)
        for key, prior in own.items():
            _add_unknown(prefix + key, prior, f"noise.{key}", priors, fields)
            names[prefix + key] = prefix + key
    model = _trace_model(bound, setup, tuple(channels), delay, used, centre, early)
    return Member(model, "", names, fixed), priors, fields, frozenset(shared)


def _add_unknown(name: str, prior: Any, field: str, priors: dict[str, Any], fields: dict[str, str]) -> None:
    """Add an unknown to those of the stack, whose shared ones bear names of the user's choice."""
    if name in priors and (priors[name] is not prior or fields[name] != field):
        raise ValueError(
            f"An Unknown is called '{name}', which is the name of another unknown of this problem; name it otherwise."
        )
    priors[name], fields[name] = prior, field


def _time_zero(given: Any, trace: xr.Dataset) -> tuple[str, Any, dict[str, float]]:
    """Return name, prior (None if known) and the fixed value of time zero."""
    given = given if given is None else checked("time_zero", given, "")
    if isinstance(given, Unknown):
        return given.name, given.prior, {}
    if given is None:
        from scipy import stats

        from inverse.description.trace.rising_edge import edge_prior

        centre, sd = edge_prior(trace)
        return "time_zero", stats.norm(centre, sd), {}
    if is_distribution(given):
        return "time_zero", given, {}
    return "time_zero", None, {"time_zero": given}


def _used(mask: Any, delay: Array, centre: float, pulse_rms: float) -> NDArray[np.bool_]:
    if mask is None:
        return np.ones(delay.size, dtype=bool)
    if isinstance(mask, str):
        if mask != "overlap":
            raise ValueError(
                f"mask={mask!r} is not known; give 'overlap', None, a pair of times in ps or a bool array."
            )
        mask = (-4 * pulse_rms - 0.3, OVERLAP)
    array = np.asarray(mask)
    if array.dtype == bool and array.shape == delay.shape:
        used = array.copy()
    elif array.shape == (2,) and array.dtype != bool and array[0] < array[1]:
        used = (delay - centre < array[0]) | (delay - centre > array[1])
    else:
        raise ValueError(
            f"mask has shape {array.shape} and type {array.dtype}; give a pair (start, stop) in ps relative to time "
            f"zero, start first, or {delay.size} booleans, True where a delay is fitted."
        )
    if used.sum() < 20:
        raise ValueError(
            f"The mask leaves {used.sum()} of {delay.size} delays; at least 20 are needed for a fit."
        )
    return used


def _channel(
    trace: xr.Dataset, name: str, used: NDArray[np.bool_], noise: Any, level: float, prefix: str
) -> tuple[Channel, dict[str, Any]]:
    model = noise if isinstance(noise, str) else "correlated"
    delay = trace["delay"].values.astype(float)[used]
    priors = noise_priors(model, level, delay)
    replaced = {} if isinstance(noise, str) else _noise_given(noise, priors)
    data = trace[name].values.astype(float)
    scatter, scans = trace.get(f"{name}_scatter"), trace.get(f"{name}_scans")
    relative = np.ones(delay.size)
    if scatter is not None:
        relative = relative_noise(scatter.values[used], None if scans is None else scans.values[used])
    channel = Channel(
        name=name,
        unit=str(trace[name].attrs.get("units", "1")),
        data=data,
        noise=Noise(model, delay, relative),
        prefix=prefix,
        baseline=SCALE_WIDTH * float(np.abs(data[used]).max()),
    )
    return channel, {**priors, **replaced}


def _noise_given(noise: Any, known: Mapping[str, Any]) -> dict[str, Any]:
    """Check priors given in place of the noise's own."""
    if not isinstance(noise, Mapping):
        raise ValueError(
            f"noise = {noise!r}; give 'correlated', 'white', 'student' or a mapping of names to priors."
        )
    strange = sorted(set(noise) - set(known))
    if strange:
        raise ValueError(f"noise names {', '.join(strange)}; it may give priors for {', '.join(known)}.")
    for name, prior in noise.items():
        if not is_distribution(prior):
            scale = f"{prior:g}" if isinstance(prior, int | float) and prior > 0 else "1e-6"
            raise ValueError(
                f"noise.{name} = {prior!r}; it is always sought: give a frozen scipy.stats distribution, such as "
                f"stats.lognorm(0.1, scale={scale}), a tenth about that number."
            )
        if f"noise.{name}" in QUANTITIES:
            validate_prior(f"noise.{name}", prior)
    return dict(noise)


def _trace_model(
    bound: BoundStack,
    setup: PumpProbe,
    channels: tuple[Channel, ...],
    delay: Array,
    used: NDArray[np.bool_],
    centre: float,
    early: float,
) -> TraceModel:
    grid = delay_windows(delay[used], setup.pulse_rms, early)
    groups = [m for m in bound.materials] if not bound.ambient else ["ambient", *bound.materials]
    dark = [m for m, slots in zip(bound.materials, bound.media, strict=False) if "band_gap" in slots]
    layout = columns(groups, dark)
    middle = {
        slot.name: np.array([float(slot.prior.median())]) for slot in bound.slots if slot.prior is not None
    }
    middle = middle or {"time_zero": np.array([centre])}
    widths = np.array([_width(name) for name in layout.names])
    batch, zero = sample(bound, middle), np.full((1, 1), centre)
    ports = dict.fromkeys(PORTS[channel.name] for channel in channels)
    parts = {port: basis(batch, setup.beams, grid, zero, layout, 1, port) for port in ports}
    predicted, measured = 0.0, 0.0
    idle = _idle(layout, batch)
    expected = np.where(idle, 0.0, widths)[:, None]
    for channel in channels:
        rows = tie(take(parts[PORTS[channel.name]], channel.name), layout, bound, middle)[0]
        predicted += float(((rows * expected * channel.scale) ** 2).sum(axis=0).mean())
        measured += float((channel.data[used] ** 2).mean())
    size = SCALE_WIDTH * float(np.sqrt(measured))
    return TraceModel(
        bound=bound,
        beams=setup.beams,
        channels=channels,
        delay=delay,
        used=used,
        grid=grid,
        layout=layout,
        widths=widths * (size / np.sqrt(predicted)),
        pulse_rms=setup.pulse_rms,
        earliest=early,
        train=pulse_train(setup),
        size=size,
        idle=idle,
        clear=tuple(_is_clear(medium.n_probe) for medium in batch.media),
    )


def _idle(layout: Columns, batch: Sample) -> NDArray[np.bool_]:
    """Tell the imaginary parts of the coefficients of transparent media, in the order of ``layout.names``."""
    liquid = [batch.ambient.n_probe] * batch.ambient.is_liquid
    index = [*liquid, *(medium.n_probe for medium in batch.media)]
    clear = {layout.groups[group] for n, group in zip(index, layout.of_medium, strict=False) if _is_clear(n)}
    return np.array([name.endswith(".imag") and name.rsplit(".", 2)[0] in clear for name in layout.names])


def _is_clear(n: NDArray[np.complex128]) -> bool:
    return bool(np.all(n.imag < CLEAR * n.real))


def _width(name: str) -> float:
    if name == "displacement":
        return DISPLACEMENT_WIDTH
    return {"P": STRAIN_WIDTH, "Q": HEAT_WIDTH, "N": PAIR_WIDTH}[name.rsplit(".", 2)[1]]
