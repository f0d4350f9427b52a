"""The measurement: wavelengths, pulse width, fluence, spots and the pulse train."""

from __future__ import annotations

from dataclasses import dataclass

from inverse.description.quantities import check

__all__ = ["PumpProbe"]


@dataclass(frozen=True)
class PumpProbe:
    """A pump-probe measurement at normal incidence.

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
    repetition_rate : float, optional
        Pulses per time in MHz.
    modulation_frequency : float, optional
        Frequency at which the pump is modulated and the lock-in listens, in MHz.

    Raises
    ------
    ValueError
        If a value is not a number or outside its range.

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
    repetition_rate: float | None = None
    modulation_frequency: float | None = None

    def __post_init__(self) -> None:
        for field, name in (
            ("pump", "wavelength"),
            ("probe", "wavelength"),
            ("pulse_rms", "pulse_rms"),
            ("fluence", "fluence"),
            ("spot_radius", "spot_radius"),
            ("probe_spot_radius", "spot_radius"),
            ("repetition_rate", "repetition_rate"),
            ("modulation_frequency", "modulation_frequency"),
        ):
            value = getattr(self, field)
            if value is not None:
                object.__setattr__(self, field, check(name, value, f"PumpProbe.{field}"))
