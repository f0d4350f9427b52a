"""A first look at a trace: time zero, noise, echoes and round trip, before any model."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from html import escape
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from inverse.description.trace.arrivals import Echo, Estimate, Train, find_train, slow_background
from inverse.description.trace.checks import TraceError, channels_of, check_trace
from inverse.description.trace.oscillation import Oscillation, find_oscillation
from inverse.description.trace.rising_edge import Edge, edge_prior, find_edge, white_noise

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["Echo", "Estimate", "FirstLook", "edge_prior", "first_look"]

_Floats = NDArray[np.float64]
_DOMINANT = 0.8  # share of an oscillation that leaves no separate echoes


@dataclass(frozen=True)
class FirstLook:
    """What a trace says by itself.

    Attributes
    ----------
    time_zero : Estimate or None
        Delay at half height of the rising edge, ps; None if the trace does not show it.
    noise : mapping of channel to float
        White noise level in the channel's unit.
    drift : mapping of channel to Estimate
        Slope of the signal before the edge, per ps; channels with fewer than five points there are left out.
    channel : str
        Channel of `echoes` and `round_trip`.
    echoes : tuple of Echo
        Arrivals after time zero in that channel.
    round_trip : Estimate or None
        Time between an echo and its repetition, ps.
    reason : str
        Why there is no round trip; empty where there is one.
    candidates : tuple of Estimate
        The round trip and other times the arrivals could mean, ps: more than one where arrivals do not
        make one train.
    oscillation : Estimate or None
        Frequency, THz.
    index_times_velocity : Estimate or None
        oscillation x probe / 2, nm/ps: refractive index times sound velocity if the light is scattered by
        sound at normal
        incidence; None without `probe` or oscillation.
    warnings : tuple of str
        What to keep in mind.
    """

    time_zero: Estimate | None
    noise: Mapping[str, float]
    drift: Mapping[str, Estimate]
    channel: str
    echoes: tuple[Echo, ...]
    round_trip: Estimate | None
    reason: str
    candidates: tuple[Estimate, ...]
    oscillation: Estimate | None
    index_times_velocity: Estimate | None
    warnings: tuple[str, ...]

    @property
    def arrivals(self) -> _Floats:
        """Arrival times of the echoes after time zero, ps, shape (echoes,)."""
        return np.array([echo.arrival.value for echo in self.echoes])

    def rows(self) -> list[tuple[str, str]]:
        """Name and value of each line of the table."""
        lines = [
            ("time zero", str(self.time_zero or "not seen")),
            ("round trip", str(self.round_trip or self.reason)),
            (
                "echoes",
                ", ".join(f"{e.arrival} ({'+' if e.sign > 0 else '-'})" for e in self.echoes[:6]) or "none",
            ),
        ]
        if len(self.candidates) > 1:
            lines.append(("candidates", ", ".join(str(c) for c in self.candidates)))
        if self.oscillation:
            lines.append(("oscillation", str(self.oscillation)))
        if self.index_times_velocity:
            lines.append(("index x velocity", str(self.index_times_velocity)))
        lines += [(f"noise, {name}", f"{level:.3g}") for name, level in self.noise.items()]
        return lines + [("warning", text) for text in self.warnings]

    def __repr__(self) -> str:
        rows = self.rows()
        width = max(len(name) for name, _ in rows)
        return "\n".join(
            [f"First look ({self.channel})", *(f"  {name:<{width}}  {value}" for name, value in rows)]
        )

    def _repr_html_(self) -> str:
        body = "".join(f"<tr><th>{escape(n)}</th><td>{escape(v)}</td></tr>" for n, v in self.rows())
        return f"<table><caption>First look ({escape(self.channel)})</caption>{body}</table>"


def first_look(trace: xr.Dataset, *, probe: float | None = None) -> FirstLook:
    """Look at a trace without a model.

    Parameters
    ----------
    trace : xarray.Dataset
        A trace; see `read_trace`.
    probe : float, optional
        Probe wavelength in vacuum, nm, to turn an oscillation into index times velocity.

    Returns
    -------
    FirstLook
        Time zero, noise, drift, echoes, round trip, oscillation and warnings.

    Raises
    ------
    TraceError
        If the trace is not well formed, or `probe` is not a wavelength in nm.

    Notes
    -----
    The round trip is 2 d / v of a film whose echo is seen: the uppermost opaque one. An interface delays
    an echo by a
    fraction of its width, and the uncertainty says so. Strain launched at the film's buried side arrives
    at half of it.
    """
    check_trace(trace)
    if probe is not None and not 100.0 <= probe <= 20000.0:
        raise TraceError(f"probe is {probe:g}; expected a wavelength in nm between 100 and 20000")
    delay = np.asarray(trace["delay"].values, dtype=float)
    signals = {name: np.asarray(trace[name].values, dtype=float) for name in channels_of(trace)}
    warnings: list[str] = []
    edge = _edge_or_warning(trace, warnings)
    looks = {name: _look(delay, signal, edge) for name, signal in signals.items()}
    channel = next((name for name, look in looks.items() if look.train.round_trip), next(iter(looks)))
    train = looks[channel].train
    found = [look.oscillation for look in looks.values() if look.oscillation]
    oscillation = max(found, key=lambda o: o.share).frequency if found else None
    drift = {name: d for name in signals if (d := _drift(delay, signals[name], edge)) is not None}
    warnings += _drift_warnings(drift, looks, delay) + _train_warnings(train)
    if oscillation:
        warnings.append(
            f"rings at {oscillation}: light scattered by sound in a transparent layer, or a film as a whole"
        )
    reason = "" if train.round_trip and edge else _reason(looks[channel], edge)
    return FirstLook(
        time_zero=Estimate(edge.centre, edge.uncertainty) if edge else None,
        noise={name: look.noise for name, look in looks.items()},
        drift=drift,
        channel=channel,
        echoes=train.echoes,
        round_trip=train.round_trip if edge else None,
        reason=reason,
        candidates=_candidates(train) if edge else (),
        oscillation=oscillation,
        index_times_velocity=_index_times_velocity(oscillation, probe),
        warnings=tuple(warnings),
    )


@dataclass(frozen=True)
class _Look:
    """One channel: noise, train, oscillation, and how far the trace reaches after time zero, ps."""

    noise: float
    train: Train
    oscillation: Oscillation | None
    start: float
    end: float
    scale: float


def _edge_or_warning(trace: xr.Dataset, warnings: list[str]) -> Edge | None:
    try:
        return find_edge(trace)
    except TraceError as error:
        warnings.append(f"time zero not seen: {error}; echo times are delays as they stand")
        return None


def _look(delay: _Floats, signal: _Floats, edge: Edge | None) -> _Look:
    zero, rise, zero_sd = (edge.centre, edge.rise, edge.uncertainty) if edge else (0.0, 0.0, 1e3)
    start = float(np.clip(1.5 * rise, 2.0, 6.0)) if edge else float(delay[0])
    after = delay - zero > start
    if np.count_nonzero(after) < 10:
        return _Look(white_noise(delay, signal), Train(), None, start, float(delay[-1]) - zero, 0.0)
    time, tail = delay[after] - zero, signal[after]
    noise = white_noise(time, tail)
    scale = max(1.5 * float(np.median(np.diff(time))), 0.4 * min(rise, 4.0), 0.4)
    oscillation = find_oscillation(time, tail)
    train = Train()
    if oscillation is None or oscillation.share < _DOMINANT:
        train = find_train(time, tail - slow_background(time, tail), noise, scale, zero_sd)
    return _Look(noise, train, oscillation, start, float(time[-1]), scale)


def _reason(look: _Look, edge: Edge | None) -> str:
    if edge is None:
        return "time zero is not seen, so no echo can be counted from it"
    if look.oscillation and look.oscillation.share >= _DOMINANT:
        return f"the trace rings at {look.oscillation.frequency}; no separate echo"
    if look.end - look.start < 12.0 * max(look.scale, 0.4):
        return f"the trace ends {look.end:.1f} ps after time zero, before one echo could be seen"
    return (
        f"no echo above the noise between {look.start:.1f} and {look.end:.1f} ps after time zero: "
        "it is weaker, earlier, or the trace ends before it"
    )


def _drift(delay: _Floats, signal: _Floats, edge: Edge | None) -> Estimate | None:
    """Slope before the edge by ordinary least squares."""
    before = delay < edge.centre - 2.0 * edge.rise if edge else np.zeros(delay.size, bool)
    if np.count_nonzero(before) < 5:
        return None
    time, values = delay[before] - delay[before].mean(), signal[before]
    power = float(time @ time)
    slope = float(time @ values) / power
    scatter = values - values.mean() - slope * time
    error = np.sqrt(float(scatter @ scatter) / (time.size - 2) / power)
    return Estimate(slope, float(error), "per ps")


def _drift_warnings(drift: Mapping[str, Estimate], looks: Mapping[str, _Look], delay: _Floats) -> list[str]:
    found = []
    for name, slope in drift.items():
        total = abs(slope.value) * float(delay[-1] - delay[0])
        if abs(slope.value) > 4.0 * slope.uncertainty and total > 3.0 * looks[name].noise:
            found.append(f"{name} drifts before the pulse, by {total:.2g} over the whole trace at that rate")
    return found


def _train_warnings(train: Train) -> list[str]:
    found = []
    if train.earlier:
        times = ", ".join(str(train.echoes[i].arrival) for i in train.earlier)
        found.append(
            f"earlier arrival at {times}: strain launched at a buried interface, or a thinner layer above"
        )
    if train.others:
        times = ", ".join(str(train.echoes[i].arrival) for i in train.others[:4])
        found.append(f"arrivals at {times} are no repetition of the first: more than one layer echoes")
    if train.round_trip and len(train.members) == 1:
        found.append("the echo is not seen a second time: the round trip rests on time zero")
    return found


def _candidates(train: Train) -> tuple[Estimate, ...]:
    """List the round trip, the first earlier arrival, and the first other one less the echo and by itself."""
    if train.round_trip is None:
        return ()
    times = [train.round_trip, *(train.echoes[i].arrival for i in train.earlier[:1])]
    if train.others:
        first, other = train.echoes[train.members[0]].arrival, train.echoes[train.others[0]].arrival
        between = Estimate(other.value - first.value, float(np.hypot(other.uncertainty, first.uncertainty)))
        times += [between, other]
    return tuple(times)


def _index_times_velocity(oscillation: Estimate | None, probe: float | None) -> Estimate | None:
    if oscillation is None or probe is None:
        return None
    return Estimate(oscillation.value * probe / 2.0, oscillation.uncertainty * probe / 2.0, "nm/ps")
