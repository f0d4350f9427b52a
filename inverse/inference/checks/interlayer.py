"""A weak bond or a thin layer: the layer that would act as a compliance does, and whether the trace tells them apart.

A layer of thickness d, density rho and stiffness c33, thin against the wavelength, is a spring of compliance
``d / c33`` and a mass ``rho d``. Between media of impedances Z1 and Z2 the reflection of a displacement wave is, to
first order in s d,

``R = [Z1 - Z2 + s (Z1 Z2 / K - m)] / [Z1 + Z2 + s (Z1 Z2 / K + m)]``,  ``1/K = d / c33``, ``m = rho d``,

so that in its numerator the layer acts as a compliance ``(d / c33) (1 - Z^2 / (Z1 Z2))``, ``Z^2 = rho c33``. The
layer that acts the same is therefore found by fitting it, not by ``c33 / K``, which would be half of it for SiO2
between Al and Si.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from inverse.description.material.properties import material
from inverse.description.sample.stack import Interface, Layer, Stack
from inverse.description.wording import plus_minus
from inverse.inference.checks.posterior_draws import PosteriorDraws
from inverse.inference.inversion import Inversion
from inverse.inference.minima.minimise import Minimum, minimise
from inverse.inference.minima.projection import Projected

__all__ = ["TOLD_APART", "Interlayer", "interlayers"]

Array = NDArray[np.float64]

TOLD_APART = 9.0
"""The two are told apart where -2 log likelihood differs by this: three standard deviations."""

# nm; the thinnest layer a Stack takes, and the thinnest a comparison starts from.
_THINNEST, _START = 0.1, 0.2


@dataclass(frozen=True)
class Interlayer:
    """The layer that acts as a compliance does.

    Attributes
    ----------
    name : str
        The compliance.
    compliance : float
        Its median, nm/GPa.
    material : str
        The layer's.
    thickness, sd : float
        Thickness of the layer that fits best in the spring's place, and its standard deviation to first order, nm.
    difference : float
        -2 log likelihood of the best fit with the layer less that with the spring, at the noise of the latter and
        with the priors of the other unknowns; negative where the layer fits better.
    verdict : {"inseparable", "bond", "layer"}
        What the trace prefers; ``inseparable`` where the difference is under `TOLD_APART`.
    """

    name: str
    compliance: float
    material: str
    thickness: float
    sd: float
    difference: float
    verdict: str

    @property
    def sentence(self) -> str:
        """The finding in words."""
        size = f"{plus_minus(self.thickness, self.sd)} nm of {self.material}"
        differs = f"-2 log likelihood differs by {abs(self.difference):.3g}"
        said = {
            "inseparable": f"may as well be an interlayer of {size}: the trace does not separate the two",
            "layer": f"is more likely an interlayer of {size}: the trace prefers it to a weak bond",
            "bond": f"is not an interlayer of {self.material}: the best one, {size}, fits worse",
        }
        return f"{self.name} = {self.compliance:.3g} nm/GPa {said[self.verdict]} ({differs})."


def interlayers(draws: PosteriorDraws, name: str) -> tuple[Interlayer, ...]:
    """Compare every unknown compliance of a problem of one trace with a thin layer in its place.

    A bond inside a `Repeat`, or that stands in several places, is left out: it would be as many layers.

    Parameters
    ----------
    draws : PosteriorDraws
    name : str
        Reference material of the layer.

    Raises
    ------
    ValueError
        If the material is not in the reference tables.
    """
    inversion = draws.inversion
    c33 = _stiffness(name)
    if len(inversion.parts) > 1:
        return ()
    found = []
    for position, slots in enumerate(inversion.posterior.members[0].model.bound.interfaces):
        unknown = slots["compliance"].name
        if unknown in inversion.names and _stands_once(inversion.stack, position):
            compliance = float(np.median(draws.flat[:, inversion.names.index(unknown)]))
            found.append(_compare(draws, position, unknown, compliance, name, c33 * compliance))
    return tuple(found)


def _stands_once(stack: Stack, position: int) -> bool:
    """Tell whether an interface is written once and lies in the sample once, not in a repeated group."""
    here = stack.interfaces[position]
    return all(sum(part is here for part in parts) == 1 for parts in (stack.parts, stack.interfaces))


def _stiffness(name: str) -> float:
    layer = material(name)
    return float(layer.density * layer.velocity**2)


def _compare(
    draws: PosteriorDraws, position: int, unknown: str, compliance: float, name: str, thickness: float
) -> Interlayer:
    """Fit the layer in the spring's place, from the spring's best values."""
    inversion = draws.inversion
    z = _best(draws)
    spring, _ = _fitted(inversion, z, unknown)
    known = inversion.posterior.parameters.named(inversion.posterior.parameters.to_values(z[None]))
    other = _with_layer(inversion, inversion.stack.interfaces[position], name, max(thickness, _START))
    own, renamed = _renamed(inversion, other, position)
    known = {**known, **{new: known[old] for new, old in renamed.items()}}
    fits = []
    for factor in (1.0, 3.0):
        start = {**known, own: np.array([factor * max(thickness, _START)])}
        points = other.posterior.parameters.to_z(np.stack([start[n] for n in other.names], axis=1))
        fits.append((*_fitted(other, points[0], own), points[0]))
    cost, minimum, point = min(fits, key=lambda f: f[0])
    found, sd = _thickness(other, own, minimum, point)
    verdict = "inseparable" if abs(cost - spring) < TOLD_APART else "bond" if cost > spring else "layer"
    return Interlayer(unknown, compliance, name, found, sd, cost - spring, verdict)


def _thickness(inversion: Inversion, own: str, minimum: Minimum, z: Array) -> tuple[float, float]:
    """Return the layer's thickness at a minimum and its standard deviation."""
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    i = inversion.names.index(own)
    step = np.sqrt(minimum.covariance[_place(inversion, own), _place(inversion, own)])
    at = z.copy()
    at[physical] = minimum.x
    near = np.stack([at, at, at])
    near[1:, i] += np.array([-1e-4, 1e-4])
    values = inversion.posterior.parameters.to_values(near)[:, i]
    return float(values[0]), float(step * (values[2] - values[1]) / 2e-4)


def _renamed(inversion: Inversion, other: Inversion, position: int) -> tuple[str, dict[str, str]]:
    """Name the layer's thickness, and give the old name of every unknown whose place has a new one."""
    old, new = (i.posterior.members[0].model.bound for i in (inversion, other))
    media = [m for i, m in enumerate(new.media) if i != position + 1]
    bonds = [b for i, b in enumerate(new.interfaces) if i != position + 1]
    pairs = [*zip(media, old.media, strict=True), *zip(bonds, old.interfaces, strict=True)]
    names = {
        slot.name: before[field].name
        for after, before in pairs
        for field, slot in after.items()
        if slot.prior is not None
    }
    return new.media[position + 1]["thickness"].name, names


def _best(draws: PosteriorDraws) -> Array:
    """Most probable of a hundred draws: the start of a minimisation, no estimate."""
    few = draws.thinned(100)
    z = few.z
    return np.asarray(z[int(np.argmax(few.inversion.posterior(z)))])


def _fitted(inversion: Inversion, z: Array, own: str) -> tuple[float, Minimum]:
    """Minimise at given noise; the cost is without the prior of the compliance or of the thickness in its place."""
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    found = minimise(
        Projected(inversion.posterior, physical, z), z[physical], typical=1.0, max_evaluations=60
    )
    return found.cost - float(found.x[_place(inversion, own)]) ** 2, found


def _place(inversion: Inversion, name: str) -> int:
    return [n for n in inversion.names if n not in inversion.noise_names].index(name)


def _with_layer(inversion: Inversion, spring: Interface, name: str, thickness: float) -> Inversion:
    """Replace the spring by a layer that is welded on both sides and keeps the bond's heat conductance."""
    from scipy import stats

    bond = Interface(boundary_conductance=spring.boundary_conductance, roughness=spring.roughness)
    layer = Layer(name, thickness=stats.loguniform(_THINNEST, 1e4 * thickness))
    stack = inversion.stack
    parts = [p for part in stack.parts for p in ((bond, layer) if part is spring else (part,))]
    changed = stack.of(*parts)
    return Inversion(changed, inversion.setup, inversion.trace, **inversion.arguments)
