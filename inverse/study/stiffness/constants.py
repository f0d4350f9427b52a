"""Elastic constants from velocities, Brillouin shifts and echo times."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity
from inverse.elastic import BRANCHES, StiffnessTensor, constant_names, constants_reached
from inverse.study.stiffness.measurements import Measurement, velocities
from inverse.study.stiffness.velocity_posterior import velocity_posterior

if TYPE_CHECKING:
    import xarray as xr

    from inverse.inference.mcmc.ensembles import EnsembleRun
    from inverse.inference.minima.least_squares import Fit

__all__ = ["ConstantsInversion", "default_prior"]

Array = NDArray[np.float64]


def default_prior(constant: str) -> Any:
    """Return the prior of a constant that is given none, in GPa.

    Log-uniform from 1 to 2000 for c11, c22, ... c66; normal about 0 with 300 for the others, which may have
    either sign. This project's choice, wide against every crystal in its tables.

    Parameters
    ----------
    constant : str
        ``c11`` to ``c66``.
    """
    from scipy import stats

    diagonal = constant[1] == constant[2]
    return stats.loguniform(1.0, 2000.0) if diagonal else stats.norm(0.0, 300.0)


class ConstantsInversion:
    """Velocities of a crystal, and whatever carries them, to be explained by its elastic constants.

    Parameters
    ----------
    symmetry : str
        A key of `inverse.elastic.SYMMETRIES`: ``"cubic"``, ``"hexagonal"``, ``"trigonal_6"``, ...
    measurements : sequence of Measurement, mapping or pandas.DataFrame
        `Velocity`, `BrillouinShift` and `EchoTime` objects, or a table that
        `inverse.study.stiffness.measurements.velocities` reads.
    density : float, frozen scipy.stats distribution or Unknown
        g/cm3.
    priors : mapping, optional
        Constant -> number (known), frozen distribution or Unknown, GPa; `default_prior` for the others.

    Raises
    ------
    ValueError
        For measurements that are not usable or contradict each other, values out of range, or priors of
        constants that the symmetry does not have.

    Notes
    -----
    Unstable constants (Born) have probability zero. A measurement of an unknown branch has the mean of the
    likelihoods of the branches it may be: labels are marginalised, not guessed. Least squares takes the
    nearest branch in each of its minima.

    Examples
    --------
    >>> table = {
    ...     "direction": ["100", "100", "110"],
    ...     "branch": ["longitudinal", "transverse", "longitudinal"],
    ...     "velocity": [8.436, 5.846, 9.137],
    ...     "uncertainty": [0.01, 0.01, 0.01],
    ... }
    >>> fit = ConstantsInversion("cubic", table, density=2.3296).least_squares(seed=1)
    >>> [round(float(c)) for c in fit.values]  # c11, c12, c44 of silicon, GPa
    [166, 64, 80]
    """

    def __init__(
        self, symmetry: str, measurements: Any, *, density: Any, priors: Mapping[str, Any] | None = None
    ) -> None:
        given = dict(priors or {})
        strange = sorted(set(given) - set(constant_names(symmetry)))
        if strange:
            raise ValueError(
                f"priors names {', '.join(strange)}; the independent constants of a {symmetry} crystal are "
                f"{', '.join(constant_names(symmetry))}."
            )
        every = {name: given.get(name, None) for name in constant_names(symmetry)}
        self.symmetry = symmetry
        self.measurements: tuple[Measurement, ...] = _rows(measurements)
        self.density = density
        self.constants = {n: default_prior(n) if p is None else p for n, p in every.items()}
        self.posterior, self.fields = velocity_posterior(symmetry, self.measurements, density, self.constants)

    @classmethod
    def from_result(cls, result: xr.DataTree) -> ConstantsInversion:
        """Rebuild the problem from a result of its `sample_posterior`, data included.

        Raises
        ------
        ValueError
            If the result is of another kind.
        """
        from inverse.study.stiffness.result import rebuilt

        return cls(**rebuilt(result))

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the unknowns, in the order of every array of values."""
        return self.posterior.parameters.names

    @property
    def priors(self) -> dict[str, Any]:
        """Priors by name."""
        return dict(zip(self.names, self.posterior.parameters.priors, strict=True))

    @property
    def units(self) -> dict[str, str]:
        """Units by name."""
        return {name: quantity(field).unit for name, field in self.fields.items()}

    def log_prob(self, values: Any) -> Array:
        """Return the log posterior density, up to a constant.

        Parameters
        ----------
        values : array, shape (n, unknowns)
            In `names` order and public units.

        Returns
        -------
        array, shape (n,)
            Minus infinity where impossible, unstable or not a number.

        Raises
        ------
        ValueError
            If the shape is wrong.
        """
        return self.posterior.log_prob(self._checked(values))

    def predict(self, values: Any) -> Array:
        """Return what each measurement would give on each branch, in its own unit.

        Parameters
        ----------
        values : array, shape (n, unknowns)
            Stable ones.

        Returns
        -------
        array, shape (n, measurements, 3)
            Branches in the order of `inverse.elastic.BRANCHES`.

        Raises
        ------
        ValueError
            If the shape is wrong.
        """
        return self.posterior.predicted(self._checked(values))

    def tensor(self, values: Any) -> StiffnessTensor:
        """Return the stiffness tensors of values of shape (n, unknowns).

        Raises
        ------
        ValueError
            If the shape is wrong or a tensor is unstable.
        """
        return StiffnessTensor.from_vector(self.symmetry, self.posterior.vector(self._checked(values)))

    def reached(self, values: Any) -> tuple[str, ...]:
        """Say which constants the measurements reach near some values, and what that rests on.

        Parameters
        ----------
        values : array, shape (unknowns,)
            Stable ones, such as the best fit's. Each measurement counts with its likeliest branch there.

        Returns
        -------
        tuple of str
            Sentences of `inverse.elastic.constants_reached`, then one for each prior on which sizes rest.
        """
        row = self._checked(values)
        likeliest = self.posterior.label_probability(row)[0].argmax(axis=-1)
        seen = [(m.direction, BRANCHES[i]) for m, i in zip(self.measurements, likeliest, strict=True)]
        reach = constants_reached(
            StiffnessTensor.from_vector(self.symmetry, self.posterior.vector(row)[0]), seen
        )
        return (*reach.sentences, *_resting(self.fields))

    def least_squares(self, *, starts: int = 48, seed: int = 0) -> Fit:
        """Find the minima.

        Parameters
        ----------
        starts : int
            Starting points that are followed to their minimum.
        seed : int

        Returns
        -------
        Fit
            With the covariance of every minimum; `inverse.table` shows it.

        Raises
        ------
        ValueError
            If `starts` is below 1 or no stable constants come near the measurements.
        """
        from inverse.inference.minima.least_squares import Fit
        from inverse.study.stiffness.velocity_search import minima

        return Fit(self, self.names, minima(self.posterior, starts, seed), seed)

    def sample_posterior(self, *, seed: int, **options: Any) -> xr.DataTree:
        """Sample the posterior; see `inverse.inference.mcmc.sampling.sample_posterior` for the options.

        Bulk, shear and Young's modulus, Poisson's ratio (Hill) and the universal anisotropy are derived for
        every draw. The group ``labels`` holds the probability of each branch of each measurement.
        """
        from inverse.inference.mcmc.sampling import sample_posterior

        return sample_posterior(self, seed=seed, **options)

    def fingerprint(self) -> str:
        """Return a hash of data, model and priors, for checkpoints."""
        from inverse.study.stiffness.result import record

        return hashlib.sha256(json.dumps(record(self), sort_keys=True).encode()).hexdigest()

    def result(self, run: EnsembleRun, seed: int, fit: Fit, *, checks: bool = True) -> xr.DataTree:
        """Put a finished run into a DataTree, with warnings if there are to be checks."""
        from inverse.inference.checks.basins import minima_record
        from inverse.study.stiffness.result import constants_tree

        return constants_tree(self, run, seed, {"minima": minima_record(fit)}, checks=checks)

    def _checked(self, values: Any) -> Array:
        array = np.atleast_2d(np.asarray(values, dtype=float))
        if array.ndim != 2 or array.shape[1] != len(self.names):
            raise ValueError(
                f"values has shape {np.shape(values)}; give (n, {len(self.names)}) in the order "
                f"{', '.join(self.names)}."
            )
        return array


def _rows(given: Any) -> tuple[Measurement, ...]:
    is_table = isinstance(given, Mapping) or hasattr(given, "columns")
    return velocities(given) if is_table else tuple(given)


_RESTING = {
    "density": "velocities give constants over density",
    "thickness": "an echo time gives velocity over thickness",
    "n_real": "a Brillouin shift gives velocity times refractive index",
}


def _resting(fields: Mapping[str, str]) -> Sequence[str]:
    """Name the priors that set the size of what is reached."""
    said = []
    for field, reason in _RESTING.items():
        *most, last = [name for name, found in fields.items() if found == field] or [""]
        if last:
            named = f"priors of {', '.join(most)} and {last}" if most else f"prior of {last}"
            said.append(f"The size of what is reached rests on the {named}: {reason}.")
    return said
