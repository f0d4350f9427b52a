"""Constants a problem takes as known, and how well it may be taken that they are known."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from inverse.description.material.reference_values import DEFAULT_SPREAD
from inverse.description.quantities import QUANTITIES, quantity
from inverse.description.sample.slots import DEFAULT, Slot
from inverse.response.windows import delay_windows

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion
    from inverse.inference.problem.posterior import Member, Posterior

__all__ = [
    "DEFAULT_RELATIVE_SPREAD",
    "FixedConstant",
    "fixed_constants",
    "member_constants",
    "moved",
    "with_constant",
]

DEFAULT_RELATIVE_SPREAD = {
    **{field: spread for field, spread in DEFAULT_SPREAD.items() if field in QUANTITIES},
    "n_real": DEFAULT_SPREAD["n"],
    "n_imag": DEFAULT_SPREAD["n"],
    "thickness": 0.02,
    "density_ratio": 0.02,
    "compliance": 0.3,
    "boundary_conductance": 0.2,
    "attenuation_time": 0.3,
    "attenuation_exponent": 0.1,
    "quality_factor": 0.3,
    "electron_gruneisen": 0.2,
    "lattice_share": 0.3,
    "band_gap": 0.02,
    "deformation_potential": 0.2,
    "carrier_diffusivity": 0.3,
    "carrier_lifetime": 0.3,
    "surface_recombination": 0.5,
    "initial_stress": 0.2,
    "initial_stress_lifetime": 0.3,
    "pulse_rms": 0.05,
}
"""Relative standard uncertainty of a number that came without one, a choice of this project.

Material fields take the least spread of the reference tables. A perfect bond, ideal contact and absent losses
(0 or inf) are choices of a model, not uncertain numbers, and have none.
"""

TIME_ZERO_SPREAD = 0.1
"""Standard uncertainty of a time zero given as a number, over the rms width of the pulse; a choice as well."""


@dataclass(frozen=True)
class FixedConstant:
    """A number that was taken as known.

    Attributes
    ----------
    name : str
        Such as ``Al.heat_capacity``, ``pulse_rms`` or ``time_zero``.
    field : str
        Quantity.
    value, spread : float
        Value and standard uncertainty in `unit`.
    unit : str
    stated : bool
        The spread came with the number; otherwise it is the default of `DEFAULT_RELATIVE_SPREAD`.
    """

    name: str
    field: str
    value: float
    spread: float
    unit: str
    stated: bool


def fixed_constants(inversion: Inversion) -> tuple[FixedConstant, ...]:
    """List the uncertain numbers of a problem, each name once, in the order of the stack.

    Parameters
    ----------
    inversion : Inversion

    Returns
    -------
    tuple of FixedConstant
        With a spread above zero. The same name in several traces of a joint problem is one constant.
    """
    found = (c for member in inversion.posterior.members for c in member_constants(member).values())
    names: dict[str, FixedConstant] = {}
    for constant in found:
        names.setdefault(constant.name, constant)
    return tuple(names.values())


def member_constants(member: Member) -> dict[str, FixedConstant]:
    """Return the uncertain numbers of one trace's model by name."""
    return {c.name: c for c in _all(member) if c.spread > 0 and np.isfinite(c.value)}


def _all(member: Member) -> Iterator[FixedConstant]:
    for slot in member.model.bound.slots:
        if slot.prior is None and slot.source != DEFAULT:
            yield _of_slot(slot)
    width = member.model.pulse_rms
    yield FixedConstant(
        "pulse_rms", "pulse_rms", width, DEFAULT_RELATIVE_SPREAD["pulse_rms"] * width, "ps", False
    )
    if "time_zero" in member.fixed:
        yield FixedConstant(
            "time_zero", "time_zero", member.fixed["time_zero"], TIME_ZERO_SPREAD * width, "ps", False
        )


def _of_slot(slot: Slot) -> FixedConstant:
    spread = slot.spread or DEFAULT_RELATIVE_SPREAD.get(slot.field, 0.0) * abs(slot.value)
    return FixedConstant(
        slot.name, slot.field, slot.value, spread, QUANTITIES[slot.field].unit, slot.spread > 0
    )


def with_constant(posterior: Posterior, name: str, spreads: float) -> Posterior:
    """Return a problem in which one constant is moved by some of its spreads."""
    return replace(posterior, members=tuple(moved(member, name, spreads) for member in posterior.members))


def moved(member: Member, name: str, spreads: float) -> Member:
    """Return a trace's model in which one constant, if it has it, is moved by some of its spreads."""
    constant = member_constants(member).get(name)
    if constant is None:
        return member
    value = _value_at(constant, spreads)
    if name != "pulse_rms":
        return replace(member, fixed={**member.fixed, name: value})
    model = member.model
    grid = delay_windows(model.delay[model.used], value, model.earliest)
    return replace(member, model=replace(model, pulse_rms=value, grid=grid))


def _value_at(constant: FixedConstant, spreads: float) -> float:
    """Return a constant moved by some of its spreads, by a factor if it is known to no better than a third."""
    q = quantity(constant.field)
    if constant.value > 0 and constant.spread > constant.value / 3:
        return float(constant.value * np.exp(spreads * constant.spread / constant.value))
    return float(np.clip(constant.value + spreads * constant.spread, q.low, q.high))
