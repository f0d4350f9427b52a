"""The problem: a stack, a measurement and a trace, or several of them with shared unknowns."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.arguments import checked_delay, checked_seed
from inverse.description.pumpprobe import PumpProbe
from inverse.description.quantities import quantity
from inverse.description.sample.optic_slots import eliminated_numbers
from inverse.description.sample.stack import Stack
from inverse.description.unknowns import prior_text
from inverse.inference.mcmc.sampling import problem_hash, sample_posterior
from inverse.inference.minima.least_squares import least_squares
from inverse.inference.problem.parameters import parameters
from inverse.inference.problem.posterior import Member, Posterior
from inverse.inference.problem.trace_problem import trace_member
from inverse.inference.result import result_tree

if TYPE_CHECKING:
    import xarray as xr

    from inverse.inference.mcmc.ensembles import EnsembleRun
    from inverse.inference.minima.least_squares import Fit

__all__ = ["Inversion"]

Array = NDArray[np.float64]


class Inversion:
    """A trace to be explained by a stack.

    Parameters
    ----------
    stack : Stack
    setup : PumpProbe
    trace : xarray.Dataset
        As `read_trace` gives it: ``reflectance_change`` and/or ``optical_phase`` on ``delay``.
    time_zero : float, frozen scipy.stats distribution or Unknown, optional
        ps. By default a normal prior from the rising edge of the trace.
    mask : "overlap", None, (float, float) or bool array
        ``"overlap"`` leaves out the pulse overlap and the 2.5 ps after it; a pair leaves out the delays between
        two times relative to time zero; an array is True where a delay is fitted; None fits all.
    noise : {"correlated", "white", "student"} or mapping
        Noise model: white noise and a correlated discrepancy; white noise alone; or, where some delays are outliers,
        the correlated model with white noise of Student's t distribution (approximate, see
        `inverse.inference.problem.robust`). Or a mapping of ``white``, ``discrepancy``, ``correlation_time`` to
        priors that replace the defaults of the correlated model. Standard errors of repeated scans in the trace set the
        white noise per delay (`inverse.inference.problem.scans`).

    Raises
    ------
    ValueError
        If a constant is missing, the trace is not usable, or an argument is not of these kinds.

    Notes
    -----
    The strain- and thermo-optic coefficients (one complex pair per material), the scale of the trace and a
    baseline per channel enter linearly and are eliminated in closed form with stated Gaussian priors: numbers given
    for ``dn_dstrain`` and ``dn_dT`` are for `simulate`; only a pair with a prior in it takes part in a fit.
    """

    def __init__(
        self,
        stack: Stack,
        setup: PumpProbe,
        trace: xr.Dataset,
        *,
        time_zero: Any = None,
        mask: Any = "overlap",
        noise: Any = "correlated",
    ) -> None:
        member, priors, fields, shared = trace_member(stack, setup, trace, time_zero, mask, noise)
        self._assemble([member], priors, fields)
        self.shared = shared
        self.stack, self.setup, self.trace = stack, setup, trace
        self.arguments = {"time_zero": time_zero, "mask": mask, "noise": noise}
        self.parts: tuple[Inversion, ...] = (self,)

    @classmethod
    def joint(cls, inversions: Sequence[Inversion], labels: Sequence[str] | None = None) -> Inversion:
        """Join problems; the same `Unknown` (or its name) in several is one unknown of all.

        Parameters
        ----------
        inversions : sequence of Inversion
        labels : sequence of str, optional
            Prefix of each problem's own unknowns: ``label:Al.thickness``. By default 1, 2, ...

        Raises
        ------
        ValueError
            If there is nothing to join, labels repeat, or one name has two priors.
        """
        if isinstance(inversions, Inversion):
            raise ValueError("joint takes a sequence of Inversion, such as [a, b], and got one alone.")
        inversions = list(inversions)
        for given in inversions:
            if not isinstance(given, Inversion):
                raise ValueError(
                    f"joint takes a sequence of Inversion, and got a {type(given).__name__} in it."
                )
        parts = [p for i in inversions for p in i.parts]
        labels = [str(i + 1) for i in range(len(parts))] if labels is None else list(labels)
        if len(parts) < 2 or len(set(labels)) != len(parts):
            raise ValueError(
                f"joint got {len(parts)} problems and labels {labels}; give two or more, one label each."
            )
        members, priors, fields = _join(parts, labels)
        joined = cls.__new__(cls)
        joined._assemble(members, priors, fields)
        joined.shared = frozenset(name for part in parts for name in part.shared)
        joined.parts = tuple(parts)
        return joined

    def _assemble(
        self, members: Sequence[Member], priors: Mapping[str, Any], fields: Mapping[str, str]
    ) -> None:
        limits = [quantity(fields[name]) for name in priors]
        self.fields = dict(fields)
        self.posterior = Posterior(
            parameters(priors),
            tuple(members),
            np.array([q.low for q in limits]),
            np.array([q.high for q in limits]),
        )

    def __repr__(self) -> str:
        """Say what is explained by what, and the priors."""
        noise = len(self.noise_names)
        head = f"Inversion of {' and '.join(map(_described, self.parts))}: {len(self.names)} unknowns, {noise} of noise"
        width = max(map(len, self.names))
        units = {name: "" if unit == "1" else f" {unit}" for name, unit in self.units.items()}
        rows = (f"  {name:{width}}  {prior_text(p)}{units[name]}" for name, p in self.priors.items())
        return "\n".join([head, *rows])

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
        out = {name: quantity(field).unit for name, field in self.fields.items()}
        for member in self.posterior.members:
            for channel in member.model.channels:
                for key in ("white", "discrepancy"):
                    if channel.prefix + key in member.names:
                        out[member.names[channel.prefix + key]] = channel.unit
        return out

    @property
    def noise_names(self) -> tuple[str, ...]:
        """Names of the unknowns that describe the noise."""
        return tuple(n for n in self.names if self.fields[n].startswith("noise."))

    def log_prob(self, values: Any) -> Array:
        """Return the log posterior density.

        Parameters
        ----------
        values : array, shape (n, unknowns)
            In `names` order and public units.

        Returns
        -------
        array, shape (n,)
            Minus infinity where impossible: outside a prior's support or a quantity's range, or not a number.

        Raises
        ------
        ValueError
            If the shape is wrong.
        """
        return self.posterior.log_prob(self._checked(values))

    def predict(self, values: Any, delay: Any = None, *, seed: int | None = None) -> xr.Dataset:
        """Return the traces that values predict, linear coefficients at their conditional mean.

        Parameters
        ----------
        values : array, shape (n, unknowns)
        delay : array, optional
            ps; by default the trace's.
        seed : int, optional
            Draw the coefficients from their conditional distribution instead.

        Returns
        -------
        xarray.Dataset
            Channels on (sample, delay).

        Raises
        ------
        ValueError
            If the shape is wrong, a value is impossible under its prior, there is no delay, or the problem is joint
            (predict its parts).
        """
        import xarray as xr

        if len(self.posterior.members) > 1:
            raise ValueError("predict takes a problem of one trace; use it on each of joint.parts.")
        member = self.posterior.members[0]
        named = member.local(self.posterior.parameters.named(self._possible(values)))
        found = member.model.eliminated(named)
        weights = found.mean if seed is None else found.draw(np.random.default_rng(checked_seed(seed)))
        delay = member.model.delay if delay is None else checked_delay(delay)
        traces = member.model.predict(named, weights, delay)
        units = {c.name: c.unit for c in member.model.channels}
        return xr.Dataset(
            {name: (("sample", "delay"), rows, {"units": units[name]}) for name, rows in traces.items()},
            coords={"delay": ("delay", delay, {"units": "ps"})},
        )

    least_squares = least_squares
    sample_posterior = sample_posterior

    def fingerprint(self) -> str:
        """Return a hash of data, model and priors, for checkpoints."""
        return problem_hash(self)

    def noise_warnings(self, values: Any, *, seed: int = 0) -> list[str]:
        """Say where the residuals at draws of the posterior do not look like the noise of the noise model.

        Parameters
        ----------
        values : array, shape (draws, unknowns)
            Of which up to 100 are used.
        seed : int

        Returns
        -------
        list of str
            One sentence per problem.
        """
        from inverse.inference.checks.model_checks import noise_warnings

        return noise_warnings(self, self._checked(values), seed=seed)

    def result(self, run: EnsembleRun, seed: int, fit: Fit, *, checks: bool = True) -> xr.DataTree:
        """Put a finished run into a DataTree, with its minima and, if there are to be checks, warnings.

        Warnings tell which unknowns the data press against an end of their prior, where the residuals are not the noise
        assumed, which eliminated coefficients lie far out in their
        priors, and which fixed constants outweigh an interval.
        """
        from inverse.inference.checks.basins import minima_record
        from inverse.inference.checks.budget import weigh_constants
        from inverse.inference.checks.coefficients import coefficient_warnings
        from inverse.inference.checks.edges import edge_warnings

        warnings: list[str] = []
        shares: dict[str, float] = {}
        if checks:
            values = self.posterior.parameters.to_values(run.chain.reshape(-1, len(self.names)))
            heavy, shares = weigh_constants(self, fit)
            warnings = [
                *edge_warnings(self, values),
                *self.noise_warnings(values, seed=seed),
                *coefficient_warnings(self, fit.values),
                *heavy,
            ]
            numbers = (text for part in self.parts for text in eliminated_numbers(part.stack))
            warnings += dict.fromkeys(numbers)
        notes = {"minima": minima_record(fit), "warnings": warnings, "constant_shares": shares}
        return result_tree(self, run, seed, notes)

    def _checked(self, values: Any) -> Array:
        try:
            array = np.atleast_2d(np.asarray(values, dtype=float))
        except (TypeError, ValueError):
            raise ValueError(
                f"values is a {type(values).__name__} that is not an array of numbers; give one of shape "
                f"(n, {len(self.names)}) in the order {', '.join(self.names)}."
            ) from None
        if array.ndim != 2 or array.shape[1] != len(self.names):
            raise ValueError(
                f"values has shape {np.shape(values)}; give (n, {len(self.names)}) in the order "
                f"{', '.join(self.names)}."
            )
        return array

    def _possible(self, values: Any) -> Array:
        array = self._checked(values)
        outside = np.argwhere(~self.posterior.possible(array))
        if outside.size:
            row, column = outside[0]
            name = self.names[column]
            low, high = self.priors[name].support()
            low = max(low, self.posterior.low[column])
            high = min(high, self.posterior.high[column])
            raise ValueError(
                f"{name} = {array[row, column]:g} in row {row} of values is impossible: its prior goes from {low:g} "
                f"to {high:g} {self.units[name]}. Give values inside, or a wider prior."
            )
        return array


def _described(part: Inversion) -> str:
    channels = " and ".join(channel.name for channel in part.posterior.members[0].model.channels)
    return f"{part.stack}, {part.trace.sizes['delay']} delays of {channels}"


def _join(
    parts: Sequence[Inversion], labels: Sequence[str]
) -> tuple[list[Member], dict[str, Any], dict[str, str]]:
    """Rename what is a problem's own; an unknown made by `Unknown` keeps its name and is shared."""
    members: list[Member] = []
    priors: dict[str, Any] = {}
    fields: dict[str, str] = {}
    for part, label in zip(parts, labels, strict=True):
        (member,) = part.posterior.members
        outer = {name: name if name in part.shared else f"{label}:{name}" for name in part.names}
        for name, prior in part.priors.items():
            if outer[name] in priors and priors[outer[name]] is not prior:
                raise ValueError(
                    f"The shared unknown '{outer[name]}' has two priors; use one Unknown object in all problems."
                )
            priors[outer[name]], fields[outer[name]] = prior, part.fields[name]
        names = {inner: outer[name] for inner, name in member.names.items()}
        members.append(Member(member.model, label, names, member.fixed))
    return members, priors, fields
