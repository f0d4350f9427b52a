"""The measurement: wavelengths, pulse width, fluence, spots and the pulse train."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from inverse.description.quantities import check
from inverse.description.unknowns import checked

__all__ = ["INSTRUMENT", "Beam", "PumpProbe"]

LOCKIN_CHANNELS = ("in-phase", "out-of-phase")

INSTRUMENT = ("stage_scale", "overlap_drift")
"""Fields that may be unknown; each goes by its bare name."""


@dataclass(frozen=True)
class Beam:
    """A plane wave of light.

    Attributes
    ----------
    wavelength : float
        In vacuum, nm.
    angle : float
        Of incidence in the ambient, degrees.
    polarisation : {"s", "p"}
    """

    wavelength: float
    angle: float = 0.0
    polarisation: str = "s"


@dataclass(frozen=True)
class PumpProbe:
    """A pump-probe measurement.

    Parameters
    ----------
    pump, probe : float
        Vacuum wavelengths in nm.
    pulse_rms : float
        Rms width of the cross-correlation of pump and probe in ps (0.425 x its full width at half maximum).
    fluence : float
        Incident pump fluence in J/m2. A fit scales with the trace, so only `simulate` feels it.
    spot_radius, probe_spot_radius : float, optional
        Radii of the pump and the probe at 1/e2 of their peak intensity in um. With them the library warns where the
        one-dimensional picture ends; without the probe's it is taken as the pump's.
    probe_offset : float, optional
        Distance of the probe's centre from the pump's in um, for the channel ``beam_deflection``; see `deflection`.
    repetition_rate : float, optional
        Pulses per time in MHz.
    modulation_frequency : float, optional
        Frequency at which the pump is modulated and the lock-in listens, in MHz.
    pump_angle, probe_angle : float
        Angles of incidence in the ambient in degrees.
    pump_polarisation, probe_polarisation : {"s", "p"}
        Electric field across (s) or in (p) the plane of incidence.
    lockin_channel : {"in-phase", "out-of-phase"}, optional
        The trace is this output of a lock-in, with the heat that earlier pulses of the train leave: it needs
        `repetition_rate` and `modulation_frequency`. By default the trace is that of single pulses. The ratio of the
        two (`read_trace` with ``ratio=True``) is the in-phase channel over a constant: out of phase, a film on silicon
        changes by 3e-4 to 5e-3 of itself over 100 ps, at 0.5 to 10 MHz.
    stage_scale : float, frozen scipy.stats distribution or Unknown
        Scale error of the delay stage: the sample ages by ``(1 + stage_scale) (delay - time_zero)``. As an unknown,
        such as ``stats.norm(0, 1e-3)``, it goes into the interval of every time and thickness.
    overlap_drift : float, frozen scipy.stats distribution or Unknown
        In 1/ns: the signal is multiplied by ``1 + overlap_drift (delay - time_zero)``, as the spots of pump and probe
        part while the stage moves.

    Raises
    ------
    ValueError
        If a value is not a number or outside its range, or a lock-in's channel lacks its frequencies.

    Examples
    --------
    >>> from inverse import PumpProbe
    >>> PumpProbe(pump=400, probe=800, pulse_rms=0.3).probe
    800.0
    """

    pump: float
    probe: float
    pulse_rms: float
    fluence: float = 1.0
    spot_radius: float | None = None
    probe_spot_radius: float | None = None
    probe_offset: float | None = None
    repetition_rate: float | None = None
    modulation_frequency: float | None = None
    pump_angle: float = 0.0
    probe_angle: float = 0.0
    pump_polarisation: str = "s"
    probe_polarisation: str = "s"
    lockin_channel: str | None = None
    stage_scale: Any = 0.0
    overlap_drift: Any = 0.0

    def __post_init__(self) -> None:
        for field, name in (
            ("pump", "wavelength"),
            ("probe", "wavelength"),
            ("pulse_rms", "pulse_rms"),
            ("fluence", "fluence"),
            ("spot_radius", "spot_radius"),
            ("probe_spot_radius", "spot_radius"),
            ("probe_offset", "probe_offset"),
            ("repetition_rate", "repetition_rate"),
            ("modulation_frequency", "modulation_frequency"),
            ("pump_angle", "angle"),
            ("probe_angle", "angle"),
        ):
            value = getattr(self, field)
            if value is not None:
                where = "PumpProbe" if field == name else f"PumpProbe.{field}"
                object.__setattr__(self, field, check(name, value, where))
        for name in ("pump_polarisation", "probe_polarisation"):
            if getattr(self, name) not in ("s", "p"):
                raise ValueError(f"PumpProbe.{name} = {getattr(self, name)!r}; give 's' or 'p'.")
        for name in INSTRUMENT:
            checked(name, getattr(self, name), "PumpProbe")
        if self.lockin_channel is not None:
            self._check_train()

    @property
    def beams(self) -> tuple[Beam, Beam]:
        """Pump and probe."""
        return (
            Beam(self.pump, self.pump_angle, self.pump_polarisation),
            Beam(self.probe, self.probe_angle, self.probe_polarisation),
        )

    @property
    def deflection(self) -> float:
        """Angle by which the reflected beam turns away from the pump, over the phase that the probe sees, rad/rad.

        A phase ``phi(x)`` turns a beam by ``-(lambda / 2 pi) d phi / dx``. Under a Gaussian pump of radius w (1/e2 of
        the intensity) seen by a Gaussian probe of radius w', both means over the probe go as
        ``exp(-2 x^2 / (w^2 + w'^2))``, so that at the offset x the angle is

            (lambda / 2 pi) 4 x / (w^2 + w'^2)    times the mean phase.

        Raises
        ------
        ValueError
            If spot_radius or probe_offset is missing.
        """
        if self.spot_radius is None or not self.probe_offset:
            raise ValueError(
                "beam_deflection needs the spot_radius and the probe_offset of PumpProbe, in um; got "
                f"{self.spot_radius} and {self.probe_offset}."
            )
        width2 = self.spot_radius**2 + (self.probe_spot_radius or self.spot_radius) ** 2
        return float(1e-3 * self.probe / (2 * np.pi) * 4 * self.probe_offset / width2)

    def _check_train(self) -> None:
        if self.lockin_channel not in LOCKIN_CHANNELS:
            raise ValueError(
                f"PumpProbe.lockin_channel = {self.lockin_channel!r}; give one of {', '.join(LOCKIN_CHANNELS)}."
            )
        rate, modulation = self.repetition_rate, self.modulation_frequency
        if rate is None or not modulation or modulation > rate / 2:
            raise ValueError(
                f"PumpProbe.lockin_channel needs a repetition_rate and a modulation_frequency between 0 and half of "
                f"it, in MHz; got {rate} and {modulation}."
            )
