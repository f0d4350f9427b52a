"""What earlier pulses of the train leave: the lock-in's in-phase and out-of-phase channels.

Pump pulses come every T, modulated as ``exp(i w t)``; the probe follows each by the delay t. The lock-in gives

    Z(t) = sum over m >= 0 of h(t + m T) exp(-i w m T) = h(t) + R(t),

h being the response to one pulse. By Poisson's sum ``Z(t) = (1/T) sum over n of H(i w_n) exp(i w_n t)``,
``w_n = w + 2 pi n / T``: the heat is evaluated at the modulation's side bands. R is smooth over tens of picoseconds, so
a pulse of T/400 serves for it, and its few hundred side bands; h itself, for the same pulse, is taken off again.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.pumpprobe import PumpProbe
from inverse.response.basis import Beams, Columns, arrival, basis, spectra
from inverse.response.inverse_laplace import LaplaceGrid, time_grid
from inverse.response.media import Sample

__all__ = ["PulseTrain", "pulse_train", "residual"]

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_FINENESS = 400  # the period over the rms width of the pulse that stands for the earlier ones
_CUTOFF = 6.0


@dataclass(frozen=True)
class PulseTrain:
    """A modulated train of pulses.

    Attributes
    ----------
    period : float
        ps.
    modulation : float
        Angular frequency, rad/ps.
    channel : str
        ``in-phase`` or ``out-of-phase``.
    """

    period: float
    modulation: float
    channel: str

    def channel_of(self, earlier: Complex) -> Array:
        """Return what earlier pulses leave in the channel."""
        return earlier.real if self.channel == "in-phase" else earlier.imag

    def detected(self, single: Array, earlier: Complex) -> Array:
        """Return the channel from the response to one pulse and what earlier ones leave of it."""
        return single + earlier.real if self.channel == "in-phase" else earlier.imag

    def with_earlier(self, single: NDArray[Any], earlier: NDArray[Any]) -> NDArray[Any]:
        """Append rows that earlier pulses leave to those of one pulse, which is in phase."""
        return np.concatenate([single if self.channel == "in-phase" else 0 * single, earlier])


def pulse_train(setup: PumpProbe) -> PulseTrain | None:
    """Return the train of a measurement, or None where the trace is that of single pulses."""
    if setup.lockin_channel is None or setup.repetition_rate is None or setup.modulation_frequency is None:
        return None
    return PulseTrain(
        1e6 / setup.repetition_rate, 2e-6 * np.pi * setup.modulation_frequency, setup.lockin_channel
    )


def residual(
    sample: Sample,
    beams: Beams,
    delay: Array,
    train: PulseTrain,
    time_zero: Array,
    layout: Columns,
    sets: int,
    port: str = "reflection",
) -> Complex:
    """Return what earlier pulses leave in every basis function.

    Parameters
    ----------
    sample : Sample
    beams : tuple of Beam or float
        Pump and probe; a vacuum wavelength in nm stands for normal incidence.
    delay : array, shape (delays,)
        ps.
    train : PulseTrain
    time_zero : array, shape (sets or 1, 1)
        ps.
    layout, sets, port
        As for `basis`.

    Returns
    -------
    complex array, shape (sets, functions, delays)
        R(t) of each real function of `basis`; its real part is in phase with the pump.

    Raises
    ------
    ValueError
        If the trace is longer than the period.
    """
    rms = train.period / _FINENESS
    if delay.max() - time_zero.min() > train.period - 8 * rms:
        raise ValueError(
            f"The trace ends {delay.max() - time_zero.min():g} ps after time zero, later than the next pulse of the "
            f"train ({train.period:g} ps); cut it, or mend the repetition rate."
        )
    single = basis(
        sample, beams, time_grid(delay, rms, float(time_zero.min())), time_zero, layout, sets, port
    )
    step = 2 * np.pi / train.period
    count = int(np.ceil(_CUTOFF / rms / step))
    above = _side_bands(train.modulation, step, count, rms)
    below = _side_bands(step - train.modulation, step, count, rms)
    total = np.zeros(single.shape, dtype=complex)
    for grid, conjugate in ((above, False), (below, True)):
        lines = spectra(sample, beams, grid, layout, sets, port) * arrival(grid, time_zero)[:, None]
        part = lines @ np.exp(grid.s.T * delay) / train.period
        total += np.conj(part) if conjugate else part
    return np.asarray(total - single, dtype=complex)


def _side_bands(first: float, step: float, count: int, rms: float) -> LaplaceGrid:
    s = np.asarray(1j * (first + step * np.arange(count))[None], dtype=complex)
    return LaplaceGrid(s, np.exp((s * rms) ** 2 / 2), 0.0)
