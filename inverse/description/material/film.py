"""Priors that admit that a deposited film is not the bulk."""

from __future__ import annotations

from typing import Any

import numpy as np

from inverse.description.material.properties import Material, material
from inverse.description.unknowns import is_unknown

__all__ = ["film_prior"]

_FILM_WIDTH = {
    "velocity": 0.03,
    "density": 0.03,
    "heat_capacity": 0.05,
    "thermal_stress_coefficient": 0.15,
    "conductivity": 0.5,
    "electron_heat_capacity": 0.2,
    "electron_phonon_coupling": float(np.log(2.0)),
}
_FILM_NORMAL = ("velocity", "density", "heat_capacity")
_FILM_FACTOR = {"conductivity": 0.7}


def film_prior(given: Material | str, field: str) -> Any:
    """Return a prior for a deposited film's property that admits its difference from the bulk.

    The widths are this project's default choice, not a published result: velocity and density normal with
    3 %, heat capacity normal with 5 %, thermal stress coefficient lognormal with 15 %, conductivity
    lognormal about 0.7 of the bulk with a factor of e^0.5, electron heat capacity lognormal with 20 %,
    electron-phonon coupling lognormal with a factor of two. Where the sources of the reference table are
    further apart than that, their relative spread is the width.

    Parameters
    ----------
    given : Material or str
        A material, or the name of a reference material that needs no orientation.
    field : str
        One of the fields above.

    Returns
    -------
    scipy.stats frozen distribution
        In the field's unit.

    Raises
    ------
    ValueError
        If the field has no film prior, or the material has no number for it.

    Examples
    --------
    >>> prior = film_prior("Al", "velocity")
    >>> round(float(prior.mean()), 2), round(float(prior.std()), 2)
    (6.42, 0.19)
    """
    from scipy import stats

    base = given if isinstance(given, Material) else material(given)
    if field not in _FILM_WIDTH:
        raise ValueError(f"There is no film prior for {field!r}; there is one for {', '.join(_FILM_WIDTH)}.")
    value = getattr(base, field)
    if value is None or is_unknown(value):
        raise ValueError(f"{base.name}.{field} is {value!r}; a film prior needs a number to start from.")
    width = max(_FILM_WIDTH[field], base.spread.get(field, 0.0) / abs(value))
    if field in _FILM_NORMAL:
        return stats.norm(value, width * value)
    return stats.lognorm(width, scale=_FILM_FACTOR.get(field, 1.0) * value)
