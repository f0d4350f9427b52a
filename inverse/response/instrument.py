"""What the bench does to a trace: a stage whose scale is off, and an overlap of the spots that drifts with the delay.

A stage that says t while the sample ages by f t measures h(f t). In the coherent system a change of the unit of time is
the same thing: every constant is multiplied by f to the power at which time stands in its unit, so the model itself
needs no second time axis and stays exact. GPa, being the unit of stress, stays; density is GPa ps2/nm2.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from inverse.description.sample.places import BoundStack
from inverse.response.media import Ambient, Medium, Sample, sample

__all__ = ["drift", "in_stage_time", "measured_sample", "stage_factor"]

Array = NDArray[np.float64]
_Part = TypeVar("_Part", Medium, Ambient)

# Powers of f, minus those of time in each unit.
_MEDIUM = {
    "density": -2,
    "velocity": 1,
    "conductivity": 1,
    "lattice_conductivity": 1,
    "inverse_coupling": -1,
    "loss_time": -1,
    "quality_frequency": 1,
}
_AMBIENT = {"density": -2, "velocity": 1, "conductivity": 1}


def stage_factor(bound: BoundStack, values: Mapping[str, Array]) -> Array | None:
    """Return elapsed time over the stage's, shape (sets or 1, 1); None where the stage is right."""
    if "stage_scale" not in bound.instrument:
        return None
    return 1.0 + np.atleast_1d(np.asarray(bound.instrument["stage_scale"].fill(values), dtype=float))[:, None]


def in_stage_time(sample: Sample, factor: Array) -> Sample:
    """Measure a sample's constants in the stage's time.

    Parameters
    ----------
    sample : Sample
    factor : array, shape (sets or 1, 1)
        Elapsed time over the time that the stage says.

    Returns
    -------
    Sample
        Its trace h'(t) is h(factor x t).
    """
    changed: dict[int, Medium] = {}
    for medium in sample.media:
        changed.setdefault(id(medium), _scaled(medium, _MEDIUM, factor))
    return replace(
        sample,
        media=tuple(changed[id(m)] for m in sample.media),
        resistance=tuple(r / factor for r in sample.resistance),
        ambient=_scaled(sample.ambient, _AMBIENT, factor),
        imperfections=tuple(replace(i, mass=i.mass / factor**2) for i in sample.imperfections),
    )


def _scaled(part: _Part, powers: Mapping[str, int], factor: Array) -> _Part:
    if isinstance(part, Medium) and part.carriers is not None:
        c = part.carriers
        slow = replace(
            c, diffusivity=c.diffusivity * factor, rate=c.rate * factor, surface=c.surface * factor
        )
        part = replace(part, carriers=slow)
    if isinstance(part, Medium) and part.initial is not None:
        part = replace(part, initial=replace(part.initial, rate=part.initial.rate * factor))
    present = {name: power for name, power in powers.items() if getattr(part, name) is not None}
    return replace(part, **{name: getattr(part, name) * factor**power for name, power in present.items()})


def drift(bound: BoundStack, values: Mapping[str, Array], elapsed: Array) -> Array:
    """Return what the overlap of the spots makes of the signal.

    Parameters
    ----------
    bound : BoundStack
    values : mapping
        Unknown name -> array of shape (sets,).
    elapsed : array, shape (sets or 1, delays)
        Delay after time zero, ps.

    Returns
    -------
    array, shape (sets or 1, 1, delays)
        ``1 + overlap_drift x elapsed``; of shape (1, 1, 1) where there is no drift.
    """
    if "overlap_drift" not in bound.instrument:
        return np.ones((1, 1, 1))
    slope = np.atleast_1d(np.asarray(bound.instrument["overlap_drift"].fill(values), dtype=float))[:, None]
    return (1.0 + 1e-3 * slope * elapsed)[:, None, :]


def measured_sample(bound: BoundStack, values: Mapping[str, Array]) -> Sample:
    """Return the batch of stacks that a bench with this stage sees; see `sample` and `in_stage_time`."""
    batch = sample(bound, values)
    factor = stage_factor(bound, values)
    return batch if factor is None else in_stage_time(batch, factor)
