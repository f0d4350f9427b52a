"""Two windows for long traces, so that late delays do not ask for the pulse's frequencies to the end.

Echoes die; what is left late is heat and slow ringing. A near window holds every frequency up to a joint, a far one
reaches to the end with the low frequencies only. What the far window leaves out is measured, parameter set by
parameter set, before the joint: the part of the near signal above the far window's band. A set that still rings
there is computed in one whole window instead, and so is a stack whose echoes take longer than the stretch that is
watched, as they would not be foreseen.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, is_dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft, special

from inverse.response.inverse_laplace import TimeGrid, time_grid, window_grid
from inverse.response.media import Sample, layers

__all__ = ["Windows", "delay_windows", "rings_on", "subset"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]
Mask = NDArray[np.bool_]

# Frequencies of one whole window from which two are worth their trouble.
_LONG = 4096
_JOINT = 0.125  # of the trace's length
_STRETCH = 1.3  # window over delays
_BAND = 1.6  # rad/ps that the far window keeps untouched
_REACH = 20.0  # over the joint: rms width of the band's edge; its kernel, at 0.3 joints, is 1e-8
_EDGE = 6.0  # rms widths of the edge on either side
_QUIET = 1e-5  # of the peak
_WATCHED = (
    0.55,
    0.9,
)  # of the joint; what is filtered there has no part of the first echoes nor of the window's ends


@dataclass(frozen=True)
class Windows:
    """A near and a far window, and the whole one for sets that ring on.

    Attributes
    ----------
    near, far, whole : TimeGrid
        For delays up to the joint, after it, and all.
    early : bool array, shape (delays,)
        Which delays are near.
    delay : array, shape (delays,)
        ps.
    earliest, joint : float
        Earliest time zero, and the end of the near window, ps.
    left_out : array, shape (1, near frequencies)
        Share of each near frequency that the far window leaves out.
    """

    near: TimeGrid
    far: TimeGrid
    whole: TimeGrid
    early: Mask
    delay: Array
    earliest: float
    joint: float
    left_out: Array

    @property
    def block(self) -> int:
        """Parameter sets whose arrays stay in a core's cache together."""
        return self.near.block


def delay_windows(delay: Array, pulse_rms: float, earliest: float) -> TimeGrid | Windows:
    """Lay out one window, or two where that saves at least half of the frequencies.

    Parameters
    ----------
    delay : array, shape (delays,)
        ps, any order, any spacing.
    pulse_rms : float
        ps.
    earliest : float
        Earliest time zero that will be asked for, ps.
    """
    whole = time_grid(delay, pulse_rms, earliest)
    dense = whole.s[0].imag
    joint = earliest + _JOINT * (float(delay.max()) - earliest)
    early = delay <= joint
    band = _BAND + 2 * _EDGE * _REACH / (joint - earliest)
    if dense.size < _LONG or early.all() or _JOINT + band / dense[-1] > 0.5:
        return whole
    near = window_grid(delay[early], pulse_rms, whole.origin, _STRETCH * (joint - whole.origin), dense[-1])
    far = window_grid(delay[~early], pulse_rms, whole.origin, 2 * np.pi / dense[1], band)
    far = replace(far, pulse=far.pulse * _passed(far.s.imag, joint - earliest))
    return Windows(
        near, far, whole, early, delay, earliest, joint, 1 - _passed(near.s.imag, joint - earliest)
    )


def _passed(w: Array, joint: float) -> Array:
    """Share of each frequency that the far window keeps: a box smoothed by a Gaussian."""
    width = _REACH / joint
    return np.asarray(0.5 * special.erfc((w - _BAND - _EDGE * width) / (np.sqrt(2) * width)))


def rings_on(windows: Windows, sample: Sample, spectra: Complex, arrival: Complex, groups: int) -> Mask:
    """Tell which sets the far window would not do justice to, shape (sets,).

    Parameters
    ----------
    windows : Windows
    sample : Sample
    spectra : complex array, shape (sets, functions, frequencies)
        Of the near window: four functions per group, two per group with carriers, and two of the displacement.
    arrival : complex array, shape (sets, frequencies)
        A factor of all functions.
    groups : int
        Number of groups.
    """
    near = windows.near
    gamma, step = near.s[0, 0].real, 2 * np.pi / near.s[0, 1].imag / near.size
    time = step * np.arange(near.size)
    after = (time + near.origin - windows.earliest) / (windows.joint - windows.earliest)
    growth, counted, late = np.exp(gamma * time), after <= 1, (after > _WATCHED[0]) & (after < _WATCHED[1])
    loud = np.empty(len(spectra), dtype=bool)
    for i, functions in enumerate(spectra * arrival[:, None]):
        signal, above = (
            _peaks(fft.irfft(part, n=near.size, axis=-1)[:, where] * growth[where], groups)
            for part, where in ((functions, counted), (functions * windows.left_out, late))
        )
        loud[i] = np.any(above > _QUIET * signal)
    watched = (_WATCHED[1] - _WATCHED[0]) * (windows.joint - windows.earliest)
    return loud | (_flight_time(sample) > watched)


def _peaks(signals: Array, groups: int) -> Array:
    """Largest strain, heat, carriers' and displacement signal over all groups: what shares a width shares a scale."""
    size = np.abs(signals).max(axis=-1)
    strain, heat = size[: 4 * groups].reshape(-1, 2, 2).max(axis=(0, 2))
    return np.array([strain, heat, size[4 * groups : -2].max(initial=0.0), size[-2:].max()])


def _flight_time(sample: Sample) -> Array:
    """Twice through all layers, shape (sets or 1,)."""
    return np.asarray(sum((2 * m.thickness / m.velocity)[:, 0] for m in layers(sample.media)))


def subset(part: Any, chosen: Mask) -> Any:
    """Return the chosen parameter sets of a batch, whatever it is made of."""
    if isinstance(part, np.ndarray):
        return part[chosen] if len(part) == len(chosen) else part
    if isinstance(part, tuple):
        return tuple(subset(p, chosen) for p in part)
    if is_dataclass(part) and not isinstance(part, type):
        return replace(part, **{f.name: subset(getattr(part, f.name), chosen) for f in fields(part)})
    return part
