"""The measurement: wavelengths, pulse width and fluence."""

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

    def __post_init__(self) -> None:
        for field, name in (
            ("pump", "wavelength"),
            ("probe", "wavelength"),
            ("pulse_rms", "pulse_rms"),
            ("fluence", "fluence"),
        ):
            object.__setattr__(self, field, check(name, getattr(self, field), f"PumpProbe.{field}"))
