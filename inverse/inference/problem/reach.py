"""Whether a trace can hold what is asked of it: echoes that fit in its length and are longer than its pulse."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from inverse.description.sample.places import BoundStack, Slot, Slots

__all__ = ["refuse_a_trace_before_the_pulse", "refuse_what_no_trace_can_tell"]

_FEWEST_AFTER = 20
"""Delays after time zero: fewer tell nothing of a stack."""

_OPAQUE = 3.0
"""Amplitude decays of the probe across a layer above which only its echo tells its thickness."""

_RESOLVED = 2.0
"""Round trips shorter than this many pulse widths leave no echo to be told from the pulse."""


def refuse_a_trace_before_the_pulse(delay: NDArray[np.float64], time_zero: float) -> None:
    """Refuse a trace that has ended, or nearly, when the pump comes.

    Parameters
    ----------
    delay : array, shape (delays,)
        Of the fitted data, ps.
    time_zero : float
        Given, or the median of its prior, ps.

    Raises
    ------
    ValueError
        If fewer than 20 fitted delays come after time zero.
    """
    after = int((delay > time_zero).sum())
    if after < _FEWEST_AFTER:
        raise ValueError(
            f"Time zero is at {time_zero:g} ps (given, or the median of its prior), and {after} of the {delay.size} "
            f"fitted delays, from {delay.min():g} to {delay.max():g} ps, come after it; at least {_FEWEST_AFTER} must. "
            "Give the time_zero of this trace in ps, or leave it out to have it found."
        )


def refuse_what_no_trace_can_tell(bound: BoundStack, last: float, pulse_rms: float, probe: float) -> None:
    """Refuse a trace in which no unknown thickness could leave its echo.

    Parameters
    ----------
    bound : BoundStack
    last : float
        Latest fitted delay after time zero, ps.
    pulse_rms : float
        ps.
    probe : float
        Wavelength, nm.

    Raises
    ------
    ValueError
        If every layer of unknown thickness is surely too thin for the pulse, or the top layer is opaque and its
        first echo surely comes after the trace has ended ("surely" by 99 % of the priors).
    """
    unknown = {
        name: slots
        for name, slots in zip(bound.names, bound.media, strict=True)
        if "thickness" in slots and slots["thickness"].prior is not None
    }
    if not unknown:
        return
    longest = {name: _round_trip(slots, 0.99) for name, slots in unknown.items()}
    name = max(longest, key=lambda n: longest[n])
    if longest[name] < _RESOLVED * pulse_rms:
        raise ValueError(
            f"{name} is thinner than its echo: by its priors the round trip is at most {longest[name]:.2g} ps, but "
            f"echoes closer than {_RESOLVED * pulse_rms:.2g} ps melt into a pulse of {pulse_rms:g} ps rms. Give its "
            "thickness as a number, or measure with a shorter pulse."
        )
    top, slots = bound.names[0], bound.media[0]
    shortest = _round_trip(slots, 0.01) if top in unknown else 0.0
    if shortest > last and _decays(slots, probe) > _OPAQUE:
        raise ValueError(
            f"The trace is too short to hold one echo: it ends {last:.3g} ps after time zero, and by its priors the "
            f"round trip of {top} takes at least {shortest:.3g} ps. Measure longer, or give {top}.thickness as a "
            "number."
        )


def _quantile(slot: Slot, probability: float) -> float:
    return slot.value if slot.prior is None else float(slot.prior.ppf(probability))


def _round_trip(slots: Slots, probability: float) -> float:
    """Round trip that is shorter (longer) in 99 % of the thickness prior, at the matching end of the velocity's."""
    return 2 * _quantile(slots["thickness"], probability) / _quantile(slots["velocity"], 1 - probability)


def _decays(slots: Slots, probe: float) -> float:
    """Amplitude decays of the probe across the thinnest layer the prior admits."""
    return 2 * np.pi / probe * _quantile(slots["n_imag_probe"], 0.5) * _quantile(slots["thickness"], 0.01)
