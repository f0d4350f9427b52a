"""A layer whose thickness differs under the spot: the mean of the traces, weighted by a normal distribution.

The probe adds up light from everywhere under its spot, so the trace is the mean over the thicknesses there. Gauss and
Hermite's quadrature takes thirteen of them; it is good to 1e-4 as long as an echo is not shifted by more than
about twice the pulse's rms width.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from inverse.description.sample.places import BoundStack
from inverse.response.instrument import measured_sample
from inverse.response.media import Sample

__all__ = ["under_the_spot"]

Array = NDArray[np.float64]

_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(13)


def under_the_spot(bound: BoundStack, values: Mapping[str, Array]) -> list[tuple[float, Sample]]:
    """Return the samples under the spot with their weights; one of weight 1 where every layer is even.

    Parameters
    ----------
    bound : BoundStack
    values : mapping
        Unknown name -> array of shape (sets,).
    """
    batch = measured_sample(bound, values)
    uneven = {id(slots): slots["thickness_spread"] for slots in bound.media if "thickness_spread" in slots}
    if not uneven:
        return [(1.0, batch)]
    if len(uneven) > 1:
        raise ValueError(
            f"{', '.join(slot.name for slot in uneven.values())}: one layer of a stack may have a thickness_spread, "
            "or a layer and its repetitions, which then vary together."
        )
    ((_, slot),) = uneven.items()
    rms = np.atleast_1d(np.asarray(slot.fill(values), dtype=float))[:, None]
    here = [id(slots) in uneven for slots in bound.media]
    return [
        (float(weight), _thicker(batch, here, rms * x))
        for x, weight in zip(_NODES, _WEIGHTS / _WEIGHTS.sum(), strict=True)
    ]


def _thicker(batch: Sample, here: list[bool], by: Array) -> Sample:
    media = tuple(
        replace(m, thickness=np.maximum(m.thickness + by, 0.01 * m.thickness)) if at else m
        for m, at in zip(batch.media, here, strict=False)
    )
    return replace(batch, media=media)
