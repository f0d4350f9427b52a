"""The interlayer that would act as a difference of compliances does: a verdict must not credit the bond alone."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.inference.derived import SILICA

__all__ = ["EquivalentLayer", "equivalent_layer"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class EquivalentLayer:
    """A thin welded interlayer in the place of a compliance.

    Attributes
    ----------
    name : str
    per_compliance : float
        Its thickness over the compliance, nm per nm/GPa = GPa.
    exact : bool
        The layer's inertia between the two media is counted. Otherwise `per_compliance` is its c33 alone, and the
        thickness is the least possible.
    """

    name: str
    per_compliance: float
    exact: bool


def equivalent_layer(
    results: Any, quantity: str, interlayer: tuple[str, float, float]
) -> EquivalentLayer | None:
    """Find the interlayer of a comparison.

    Parameters
    ----------
    results : xarray.Dataset or mapping
        As for `compare_splits`.
    quantity : str
    interlayer : (str, float, float)
        Name, density (g/cm3) and velocity (nm/ps).

    Returns
    -------
    EquivalentLayer or None
        None where the quantity is no bond's, or where results of a stack say that no such layer acts as a compliance
        (its impedance is not below both neighbours').

    Raises
    ------
    ValueError
        If `interlayer` is not a name and two positive numbers.

    Notes
    -----
    The factor is ``c33 / sqrt((1 - Z^2 / Z1^2) (1 - Z^2 / Z2^2))``, see `inverse.inference.derived`; it is taken from
    the results, which hold ``equivalent_thickness`` of fused silica, as its median over all draws.
    """
    name, density, velocity = _checked(interlayer)
    place, _, field = quantity.rpartition(".")
    if "|" not in place or field not in ("compliance", "stiffness"):
        return None
    known = list(_ratios(results, place)) if interlayer == SILICA else []
    if known:
        factors = np.concatenate(known)
        return EquivalentLayer(name, float(np.median(factors)), exact=True) if factors.size else None
    return EquivalentLayer(name, density * velocity**2, exact=False)


def _checked(interlayer: Any) -> tuple[str, float, float]:
    try:
        name, density, velocity = interlayer
        good = isinstance(name, str) and bool(np.isfinite([density, velocity]).all())
        good = good and density > 0 and velocity > 0
    except (TypeError, ValueError):
        good = False
    if not good:
        raise ValueError(
            f"interlayer={interlayer!r}; give name, density in g/cm3 and velocity in nm/ps, such as {SILICA}."
        )
    return name, float(density), float(velocity)


def _ratios(results: Any, place: str) -> Iterator[Array]:
    """Give equivalent thickness over compliance for each part of the results; empty where there is no such layer."""
    for variables in _parts(results):
        compliance, thickness = f"{place}.compliance", f"{place}.equivalent_thickness"
        if compliance in variables:
            yield _ratio(variables, compliance, thickness)


def _parts(results: Any) -> Iterator[Any]:
    if hasattr(results, "data_vars"):
        yield results
    elif isinstance(results, Mapping):
        yield from (r["posterior"] for r in results.values() if "posterior" in getattr(r, "children", ()))


def _ratio(variables: Any, compliance: str, thickness: str) -> Array:
    if thickness not in variables:
        return np.empty(0)
    ratio = np.asarray(variables[thickness].values / variables[compliance].values, dtype=float).ravel()
    return ratio[np.isfinite(ratio)]
