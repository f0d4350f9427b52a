"""What a trace must be before anything is done with it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import xarray as xr

CHANNELS = ("reflectance_change", "optical_phase", "transmission_change", "beam_deflection")
MINIMUM_POINTS = 20
_LONGEST_STEP = 10.0  # ps: no echo survives a coarser sampling


class TraceError(ValueError):
    """A trace that cannot be used as it stands; the message gives the mend."""


def check_trace(trace: xr.Dataset, *, measured: bool = True) -> xr.Dataset:
    """Check any Dataset a user brings and return it unchanged.

    Parameters
    ----------
    trace : xarray.Dataset
        Channels on a coordinate ``delay`` (ps).
    measured : bool
        Whether to ask, beyond well-formed numbers, for at least 20 delays and a signal that changes.

    Returns
    -------
    xarray.Dataset
        The same object.

    Raises
    ------
    TraceError
        If there is no delay or no channel; if a number is NaN or infinite; if delays are unsorted,
        repeated or look
        like another unit than ps; if a channel is complex; if there are too few points or a signal is constant.
    """
    import xarray as xr

    if not isinstance(trace, xr.Dataset):
        raise TraceError(
            f"a trace is an xarray Dataset, got {type(trace).__name__}; use read_trace or make_trace"
        )
    if "delay" not in trace.coords:
        raise TraceError(
            f"the trace has no coordinate 'delay' (it has {sorted(map(str, trace.coords))}); use make_trace"
        )
    delay = np.asarray(trace["delay"].values, dtype=float)
    signals = {}
    for name in channels_of(trace):
        if trace[name].dims != ("delay",):
            raise TraceError(
                f"{name} has dimensions {trace[name].dims}; expected ('delay',): one trace per Dataset"
            )
        refuse_unreal(name, trace[name].values)
        signals[name] = np.asarray(trace[name].values, dtype=float)
    for name, values in {"delay": delay, **signals}.items():
        refuse_non_finite(name, values)
    refuse_disorder(delay)
    refuse_other_time_unit(str(trace["delay"].attrs.get("units", "ps")), delay, measured)
    if measured:
        refuse_poor(signals)
    return trace


def channels_of(trace: xr.Dataset) -> tuple[str, ...]:
    """Names of the channels in a trace, in the order reflectance, phase, transmission.

    Raises
    ------
    TraceError
        If there is none.
    """
    found = tuple(name for name in CHANNELS if name in trace.data_vars)
    if not found:
        raise TraceError(
            f"the trace has none of the channels {', '.join(CHANNELS)} (it has "
            f"{sorted(map(str, trace.data_vars))}); "
            "rename the variable or use make_trace"
        )
    return found


def refuse_unreal(name: str, values: Any) -> None:
    """Refuse truth values, and complex numbers, whose imaginary part a cast to float would drop."""
    if np.asarray(values).dtype == bool:
        raise TraceError(f"{name} is True or False; give the numbers that were measured")
    if np.iscomplexobj(values):
        raise TraceError(
            f"{name} is complex; give real numbers: of a complex dr/r, 2 x its real part is reflectance_change and its "
            "imaginary part is optical_phase"
        )


def refuse_non_finite(name: str, values: NDArray[np.float64]) -> None:
    """Refuse NaN and infinite numbers."""
    for label, bad in (("NaN", np.isnan(values)), ("infinite", np.isinf(values))):
        if bad.any():
            raise TraceError(
                f"{name} has {np.count_nonzero(bad)} {label} value(s), the first at point {np.argmax(bad)} "
                "(from 0); "
                "drop those points from every channel (read_trace: repair=('drop_nan',) drops NaN rows and "
                "counts them)"
            )


def refuse_disorder(delay: NDArray[np.float64]) -> None:
    """Refuse delays that do not strictly increase."""
    step = np.diff(delay)
    back, same = np.count_nonzero(step < 0), np.count_nonzero(step == 0)
    if delay.size > 1 and back == step.size:
        raise TraceError(
            "the delays run downwards; pass repair=('sort',) to read_trace, or reverse the arrays"
        )
    if back:
        first = int(np.argmax(step < 0))
        raise TraceError(
            f"the delays are unsorted: they step back {back} time(s), first from {delay[first]:g} to "
            f"{delay[first + 1]:g} ps; pass repair=('sort',) to read_trace, or, if the stage ran several "
            "scans, name the "
            "scan column (columns={'scan': ...})"
        )
    if same:
        first = int(np.argmax(step == 0))
        raise TraceError(
            f"{same} delay(s) are repeated, first {delay[first]:g} ps; pass repair=('average_repeats',) to "
            "read_trace, "
            "or name the scan column"
        )


def refuse_other_time_unit(unit: str, delay: NDArray[np.float64], measured: bool = True) -> None:
    """Refuse delays that are not, or do not look like, picoseconds."""
    if unit != "ps":
        raise TraceError(
            f"the delay's units attribute is {unit!r}; convert the coordinate to ps and set it to 'ps'"
        )
    if delay.size < 2:
        return
    span, step = delay[-1] - delay[0], float(np.median(np.diff(delay)))
    if span < 1e-6:
        raise TraceError(
            f"the delays span {span:.3g} ps, which looks like seconds; pass delay_unit='s' or convert to ps"
        )
    if measured and span < 1.0:
        raise TraceError(
            f"the delays span {span:.3g} ps, which looks like nanoseconds; pass delay_unit='ns' or convert "
            "to ps"
        )
    if measured and step > _LONGEST_STEP:
        raise TraceError(
            f"the median step between delays is {step:.4g} ps, which looks like femtoseconds (more than "
            f"{_LONGEST_STEP:g} ps "
            "cannot show an echo); pass delay_unit='fs' or convert to ps"
        )


def refuse_poor(signals: Mapping[str, NDArray[np.float64]]) -> None:
    """Refuse a trace with too few points or a constant channel."""
    for name, values in signals.items():
        if values.size < MINIMUM_POINTS:
            raise TraceError(
                f"the trace has {values.size} points; at least {MINIMUM_POINTS} are needed to infer anything"
            )
        if np.ptp(values) == 0.0:
            raise TraceError(
                f"{name} is constant ({values[0]:g} at every delay): no signal was recorded, or it is "
                "another column"
            )
