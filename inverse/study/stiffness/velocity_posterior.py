"""The posterior density of elastic constants and of what else stands between them and the measurements."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity
from inverse.description.sample.places import Slot
from inverse.description.unknowns import Unknown, checked, is_unknown
from inverse.elastic import BRANCHES, BranchModuli, branch_moduli, constant_names
from inverse.elastic.stability import is_stable
from inverse.elastic.symmetry import basis
from inverse.elastic.voigt import voigt_to_mandel
from inverse.inference.problem.parameters import Parameters, parameters
from inverse.study.stiffness.measurements import Measurement, named

__all__ = ["VelocityPosterior", "velocity_posterior"]

Array = NDArray[np.float64]

# A stiffness with a modulus under this fraction of its mean one pulls least squares back, this strongly.
_MARGIN = 1e-3
_PULL = 1e4


@dataclass(frozen=True, eq=False)
class VelocityPosterior:
    """Log posterior density of constants; picklable, called with standard normal variables.

    A measurement predicts ``factor * v^power`` for each branch, v = sqrt(modulus / density). Where the label
    admits several branches the likelihood is their mean: the label is marginalised. Unstable constants have
    probability zero.

    Attributes
    ----------
    parameters : Parameters
    low, high : array, shape (unknowns,)
        Values outside are impossible whatever the prior's tail says.
    constants : tuple of Slot
        In the order of `constant_names`.
    density : tuple of Slot
        Per measurement.
    factors : tuple of tuple of Slot
        Per measurement: what multiplies its `fixed`.
    moduli : BranchModuli
    names : tuple of str
        Of the measurements, k of them.
    fixed, power, value, uncertainty : array, shape (k,)
    log_weight : array, shape (k, 3)
        Prior of each branch; -inf where the label excludes it.
    """

    parameters: Parameters
    low: Array
    high: Array
    constants: tuple[Slot, ...]
    density: tuple[Slot, ...]
    factors: tuple[tuple[Slot, ...], ...]
    moduli: BranchModuli
    names: tuple[str, ...]
    fixed: Array
    power: Array
    value: Array
    uncertainty: Array
    log_weight: Array

    def __call__(self, z: Array) -> Array:
        """Return the log posterior of standard normal variables, shape (n,)."""
        with np.errstate(all="ignore"):
            prior = -0.5 * (z * z).sum(axis=1) - 0.5 * z.shape[1] * np.log(2 * np.pi)
            return np.asarray(prior + self.log_likelihood(self.parameters.to_values(z)))

    def log_prob(self, values: Array) -> Array:
        """Return the log posterior density of values, shape (n,), up to the mass that stability leaves."""
        total = self.parameters.log_prior(values) + self.log_likelihood(values)
        return np.where(np.isnan(total), -np.inf, total)

    def log_likelihood(self, values: Array) -> Array:
        """Return the log likelihood of values of shape (n, unknowns); -inf where impossible."""
        out = np.full(len(values), -np.inf)
        kept = self.possible(values)
        if kept.any():
            out[kept] = np.logaddexp.reduce(self._log_terms(values[kept]), axis=-1).sum(axis=-1)
        return out

    def possible(self, values: Array) -> NDArray[np.bool_]:
        """Tell which values are within their ranges and stable, shape (n,)."""
        inside = (np.isfinite(values) & (values >= self.low) & (values <= self.high)).all(axis=1)
        out = np.asarray(inside)
        out[inside] = is_stable(self.stiffness(values[inside]))
        return out

    def vector(self, values: Array) -> Array:
        """Return the independent constants in GPa, shape (n, constants)."""
        named_values = self.parameters.named(values)
        return np.stack([_filled(slot, named_values, len(values)) for slot in self.constants], axis=1)

    def stiffness(self, values: Array) -> Array:
        """Return Voigt matrices in GPa, shape (n, 6, 6), stable or not."""
        return np.tensordot(self.vector(values), basis(self.moduli.symmetry), axes=1)

    def predicted(self, values: Array) -> Array:
        """Return what each measurement would give on each branch, shape (n, k, 3), in its unit."""
        named_values = self.parameters.named(values)
        density = np.stack([_filled(slot, named_values, len(values)) for slot in self.density], axis=1)
        factor = np.tile(self.fixed, (len(values), 1))
        for column, slots in enumerate(self.factors):
            for slot in slots:
                factor[:, column] *= _filled(slot, named_values, len(values))
        square = self.moduli(self.vector(values)) / density[..., None]
        # Of an unstable tensor a mirror image, so that least squares finds its way back.
        velocity = np.sign(square) * np.sqrt(np.abs(square))
        return np.asarray(factor[..., None] * velocity ** self.power[:, None])

    def label_probability(self, values: Array) -> Array:
        """Return the probability of each branch of each measurement, shape (n, k, 3)."""
        terms = self._log_terms(values)
        return np.asarray(np.exp(terms - np.logaddexp.reduce(terms, axis=-1)[..., None]))

    def residuals(self, z: Array) -> Array:
        """Return residuals of unit variance, shape (n, k + 1 + unknowns), of the nearest branch each.

        Measurements, then a pull back to stability (zero in it), then the prior.
        """
        values = self.parameters.to_values(z)
        with np.errstate(all="ignore"):
            deviation = (self.predicted(values) - self.value[:, None]) / self.uncertainty[:, None]
            allowed = np.where(np.isfinite(self.log_weight), np.abs(deviation), np.inf)
            nearest = np.argmin(np.nan_to_num(allowed, nan=np.inf), axis=-1)[..., None]
            measured = np.take_along_axis(deviation, nearest, axis=-1)[..., 0]
            parts = np.concatenate([measured, self._pull(values)[:, None], z], axis=1)
        return np.nan_to_num(parts, nan=1e10, posinf=1e10, neginf=-1e10)

    def _pull(self, values: Array) -> Array:
        finite = np.nan_to_num(self.stiffness(values), nan=0.0, posinf=1e6, neginf=-1e6)
        size = np.linalg.eigvalsh(voigt_to_mandel(finite))
        return np.asarray(_PULL * np.maximum(0.0, _MARGIN - size[:, 0] / np.abs(size).mean(axis=1)))

    def _log_terms(self, values: Array) -> Array:
        deviation = (self.predicted(values) - self.value[:, None]) / self.uncertainty[:, None]
        norm = np.log(self.uncertainty[:, None]) + 0.5 * np.log(2 * np.pi)
        return np.asarray(self.log_weight - 0.5 * deviation**2 - norm)


def _filled(slot: Slot, values: Mapping[str, Array], size: int) -> Array:
    return np.broadcast_to(values.get(slot.name, np.asarray(slot.value)), (size,))


def velocity_posterior(
    symmetry: str, measurements: Sequence[Measurement], density: Any, priors: Mapping[str, Any]
) -> tuple[VelocityPosterior, dict[str, str]]:
    """Put constants, measurements and priors together.

    Parameters
    ----------
    symmetry : str
        A key of `inverse.elastic.SYMMETRIES`.
    measurements : sequence of Measurement
    density : float, frozen scipy.stats distribution or Unknown
        g/cm3, of every measurement that has none of its own.
    priors : mapping
        Constant -> number (known), frozen distribution or Unknown, GPa; one for each.

    Returns
    -------
    posterior : VelocityPosterior
    fields : dict
        Unknown -> quantity.

    Raises
    ------
    ValueError
        For what `named` refuses, values out of range, one name with two priors, or nothing unknown.
    """
    names, directions = named(measurements, symmetry)
    constants = tuple(_slot(name, name, priors[name], "") for name in constant_names(symmetry))
    common = _slot("density", "density", density, "")
    own = tuple(
        common if m.density is None else _slot(f"{name}.density", "density", m.density, name)
        for m, name in zip(measurements, names, strict=True)
    )
    factors = tuple(
        tuple(_slot(f"{name}.{field}", field, value, name) for field, value in m.unknowns().items())
        for m, name in zip(measurements, names, strict=True)
    )
    unknown = _unknowns((*constants, *own, *(slot for group in factors for slot in group)))
    fields = {name: slot.field for name, slot in unknown.items()}
    limits = [quantity(field) for field in fields.values()]
    built = VelocityPosterior(
        parameters=parameters({name: slot.prior for name, slot in unknown.items()}),
        low=np.array([q.low for q in limits]),
        high=np.array([q.high for q in limits]),
        constants=constants,
        density=own,
        factors=factors,
        moduli=branch_moduli(symmetry, directions),
        names=names,
        fixed=np.array([m.factor() for m in measurements]),
        power=np.array([m.power for m in measurements]),
        value=np.array([m.value for m in measurements]),
        uncertainty=np.array([m.uncertainty for m in measurements]),
        log_weight=np.array([_log_weight(m.branch) for m in measurements]),
    )
    return built, fields


def _slot(name: str, field: str, value: Any, where: str) -> Slot:
    checked(field, value, where)
    if isinstance(value, Unknown):
        return Slot(value.name, field, np.nan, value.prior, shared=True)
    if is_unknown(value):
        return Slot(name, field, np.nan, value)
    return Slot(name, field, float(value), None, "given by the user")


def _unknowns(slots: Sequence[Slot]) -> dict[str, Slot]:
    found: dict[str, Slot] = {}
    for slot in slots:
        if slot.prior is None:
            continue
        first = found.setdefault(slot.name, slot)
        if (first.prior, first.field) != (slot.prior, slot.field):
            raise ValueError(
                f"The name '{slot.name}' stands for a {first.field} and a {slot.field} with two priors; use "
                "one Unknown object for one thing, and other names for others."
            )
    if not found:
        raise ValueError(
            "Every constant is a number, so nothing is sought; give priors for the unknown ones."
        )
    return found


def _log_weight(branches: tuple[str, ...]) -> Array:
    admitted = np.array([name in branches for name in BRANCHES])
    return np.where(admitted, -np.log(len(branches)), -np.inf)
