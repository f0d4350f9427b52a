"""How warm the sample gets: the steady heating of the pulse train, and the peak after each pulse.

Steady, a Gaussian spot of radius w and absorbed power P on layers: each Hankel component obeys ``T'' = k^2 T``, so that
the recursion of the model serves with ``q = k`` and the admittance ``kappa k``, and

    T(0) = (1 / 2 pi) * integral of P exp(-k^2 w^2 / 8) Z(k) k dk,    Z = temperature / flux of plane waves,

which is ``P / (sqrt(2 pi) kappa w)`` on a half-space. Each pulse adds its own peak, of the fluence on the axis
``2 P / (pi w^2 f)``, from the one-dimensional model.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.description.pumpprobe import Beam, PumpProbe
from inverse.description.quantities import check
from inverse.description.sample.places import bind
from inverse.description.sample.stack import Stack
from inverse.response.inverse_laplace import time_grid
from inverse.response.light import absorption, light_field
from inverse.response.media import Sample, sample
from inverse.response.recursion import Ends, ascend, descend, surface_amplitude
from inverse.response.strain_map import temperatures

__all__ = ["ELECTRONS", "LATTICE", "Heating", "HeatingWarning", "heating"]

Array = NDArray[np.float64]

LATTICE = 50.0
"""Rise of the lattice in K above which the linear model is in doubt: most heat capacities, conductivities and indices
change by some per cent."""

ELECTRONS = 300.0
"""Rise of the electrons in K above which the linear model is in doubt: their heat capacity, proportional to their
temperature, has doubled."""


class HeatingWarning(UserWarning):
    """The sample gets so warm that a linear model of it is in doubt."""


@dataclass(frozen=True)
class Heating:
    """Rise of temperature over the surroundings on the axis of the pump, in K.

    Attributes
    ----------
    absorbed : float
        Absorbed fraction of the pump.
    fluence : float
        Incident, on the axis, of one pulse, J/m2.
    steady : float
        Of the warmest face, averaged over the pulses.
    lattice, electrons : float
        Highest rise after one pulse; equal where there is one temperature.
    """

    absorbed: float
    fluence: float
    steady: float
    lattice: float
    electrons: float

    @property
    def warnings(self) -> tuple[str, ...]:
        """Why the linear model is in doubt, in words."""
        warm = self.steady + self.lattice
        said = (
            (
                warm > LATTICE,
                f"the lattice warms by {self.steady:.3g} K steadily and by {self.lattice:.3g} K after each pulse "
                f"(together over {LATTICE:g} K): constants change with temperature; lower the power or widen the spot",
            ),
            (
                self.electrons > ELECTRONS and self.electrons > 1.001 * self.lattice,
                f"the electrons warm by {self.electrons:.3g} K (over {ELECTRONS:g} K): their heat capacity and their "
                "coupling change with temperature; lower the power or widen the spot",
            ),
        )
        return tuple(text for hot, text in said if hot)


def heating(stack: Stack, setup: PumpProbe, *, power: float) -> Heating:
    """Compute how warm the sample gets, and warn where the linear model is in doubt.

    Parameters
    ----------
    stack : Stack
        Unknowns count with their medians.
    setup : PumpProbe
        With ``spot_radius`` and ``repetition_rate``; its ``fluence`` is not used.
    power : float
        Average power of the pump on the sample, mW.

    Returns
    -------
    Heating

    Raises
    ------
    ValueError
        If the spot or the repetition rate is missing, or the stack is free below: what carries the steady heat of a
        membrane away is its frame.
    """
    power = check("power", power, "heating")
    if not isinstance(setup, PumpProbe):
        raise ValueError(
            f"heating takes a Stack first, then a PumpProbe, and got a {type(setup).__name__} second."
        )
    if setup.spot_radius is None or setup.repetition_rate is None:
        raise ValueError("heating needs PumpProbe(spot_radius=..., repetition_rate=...), in um and MHz.")
    batch = _sample(stack, setup)
    profiles = _absorbed(batch, setup.beams[0])
    radius = 1e3 * setup.spot_radius
    # In coherent units 1 mW is 1e3 GPa nm^3/ps and 1 MHz is 1e-6/ps.
    fluence = 2e9 * power / (np.pi * radius**2 * setup.repetition_rate)
    steady = 1e3 * power * _steady(batch, [float(f.item()) for f in profiles], radius)
    lattice, electrons = _peak(batch, setup)
    found = Heating(
        absorbed=float(np.sum(profiles)),
        fluence=fluence,
        steady=steady,
        lattice=fluence * lattice,
        electrons=fluence * electrons,
    )
    for text in found.warnings:
        warnings.warn(f"The model is linear, but {text}.", HeatingWarning, stacklevel=2)
    return found


def _sample(stack: Stack, setup: PumpProbe) -> Sample:
    bound = bind(stack, setup)
    batch = sample(bound, {name: np.array([float(prior.median())]) for name, prior in bound.priors.items()})
    if batch.backing is not None:
        raise ValueError(
            f"heating got {stack}, which is free below: its steady temperature depends on what holds it at the edge."
        )
    return batch


def _absorbed(batch: Sample, beam: Beam) -> list[Array]:
    """Absorbed fraction of each medium."""
    light = light_field(*batch.light("pump"), beam, batch.ambient.n_pump)
    return [absorption(light, j).fraction() for j in range(len(batch.media))]


def _steady(batch: Sample, fractions: list[float], radius: float) -> float:
    """Steady rise of the warmest face per absorbed unit of power, each medium's share put in at its top."""
    # In ln k the integrand is smooth and dies off at both ends, so equal steps converge fast.
    logarithm = np.linspace(np.log(1e-7), np.log(7.0), 600)
    k = np.sqrt(8) / radius * np.exp(logarithm)
    warmth = _faces(batch, fractions, k[None].astype(complex)).real
    integrand = np.exp(-((k * radius) ** 2) / 8) * k**2 * warmth / (2 * np.pi)
    return float(np.trapezoid(integrand, logarithm, axis=1).max())


def _faces(batch: Sample, fractions: list[float], k: NDArray[np.complex128]) -> Array:
    """Temperature of the top of every medium per unit power in a Hankel component, shape (media, components)."""
    media = batch.media
    y = [m.conductivity * k for m in media]
    decay = [np.exp(-k * m.thickness) for m in media[:-1]]
    none = np.zeros((1, 1), dtype=complex)
    # Heat put in at a medium's top is a step of the flux there.
    ends = [Ends(none, np.full((1, 1), -share, dtype=complex), none, none) for share in fractions]
    below = ascend(y, decay, batch.resistance, ends)
    load = 0.0 if batch.ambient.conductivity is None else batch.ambient.conductivity * k
    down, up = descend(surface_amplitude(y[0], below, ends[0], load), decay, below)
    return np.concatenate([a + b * e for a, b, e in zip(down, up, [*decay, none], strict=True)])


def _peak(batch: Sample, setup: PumpProbe) -> tuple[float, float]:
    """Highest rise of lattice and electrons at the top of any medium per unit fluence."""
    delay = np.concatenate(
        [np.linspace(-1, 4, 101) * setup.pulse_rms, np.geomspace(4 * setup.pulse_rms, 50.0, 200)]
    )
    grid = time_grid(delay, setup.pulse_rms, earliest=0.0)
    rises = [temperatures(batch, setup.beams, grid, j, np.zeros(1)) for j in range(len(batch.media))]
    return max(float(lattice.max()) for lattice, _ in rises), max(float(hot.max()) for _, hot in rises)
