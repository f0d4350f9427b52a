"""The problem: a stack, a measurement and a trace, or several of them with shared unknowns."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.limits import warn_if_not_plane
from inverse.description.places import BoundStack, bind
from inverse.description.pumpprobe import PumpProbe
from inverse.description.quantities import check, quantity
from inverse.description.stack import Stack
from inverse.description.unknowns import Unknown, is_distribution
from inverse.inference.least_squares import least_squares
from inverse.inference.likelihood import HEAT_WIDTH, SCALE_WIDTH, STRAIN_WIDTH, Channel, TraceModel
from inverse.inference.noise import Noise, noise_priors
from inverse.inference.parameters import parameters
from inverse.inference.posterior import Member, Posterior
from inverse.inference.scans import relative_noise
from inverse.inference.tied import tie
from inverse.inference.reach import refuse_what_no_trace_can_tell
from inverse.inference.result import result_tree
from inverse.inference.sampling import problem_hash, sample_posterior
from inverse.response.basis import CHANNELS, PORTS, basis, columns, take
from inverse.response.inverse_laplace import time_grid
from inverse.response.media import sample
from inverse.response.pulse_train import pulse_train

if TYPE_CHECKING:
    import xarray as xr

    from inverse.inference.ensembles import EnsembleRun

__all__ = ["Inversion"]

Array = NDArray[np.float64]

OVERLAP = 2.5
"""Delays up to this many ps after time zero are left out by default: hot electrons there fit no simple model."""


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
        `inverse.inference.robust`). Or a mapping of ``white``, ``discrepancy``, ``correlation_time`` to priors that
        replace the defaults of the correlated model. Standard errors of repeated scans in the trace set the
        white noise per delay (`inverse.inference.scans`).

    Raises
    ------
    ValueError
        If a constant is missing, the trace is not usable, or an argument is not of these kinds.

    Notes
    -----
    The strain- and thermo-optic coefficients (one complex pair per material), the scale of the trace and a
    baseline per channel enter linearly and are eliminated in closed form with stated Gaussian priors.
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
        member, priors, fields, shared = _member(stack, setup, trace, time_zero, mask, noise)
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
            Minus infinity where impossible.

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
            If the shape is wrong, or the problem is joint (predict its parts).
        """
        import xarray as xr

        if len(self.posterior.members) > 1:
            raise ValueError("predict takes a problem of one trace; use it on each of joint.parts.")
        member = self.posterior.members[0]
        named = member.local(self.posterior.parameters.named(self._checked(values)))
        found = member.model.eliminated(named)
        weights = found.mean if seed is None else found.draw(np.random.default_rng(seed))
        delay = member.model.delay if delay is None else np.atleast_1d(np.asarray(delay, dtype=float))
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

    def result(self, run: EnsembleRun, seed: int, notes: dict[str, Any]) -> xr.DataTree:
        """Put a finished run into a DataTree, with warnings where the residuals are not the noise assumed."""
        from inverse.inference.model_checks import noise_warnings

        values = self.posterior.parameters.to_values(run.chain.reshape(-1, len(self.names)))
        warnings = [*notes.get("warnings", ()), *noise_warnings(self, values, seed=seed)]
        return result_tree(self, run, seed, {**notes, "warnings": warnings})

    def _checked(self, values: Any) -> Array:
        array = np.atleast_2d(np.asarray(values, dtype=float))
        if array.ndim != 2 or array.shape[1] != len(self.names):
            raise ValueError(
                f"values has shape {np.shape(values)}; give (n, {len(self.names)}) in the order "
                f"{', '.join(self.names)}."
            )
        return array


def _member(
    stack: Stack, setup: PumpProbe, trace: xr.Dataset, time_zero: Any, mask: Any, noise: Any
) -> tuple[Member, dict[str, Any], dict[str, str], frozenset[str]]:
    """Build one trace's model; return it with the priors, quantity names and shared names of its unknowns."""
    from inverse.description.look import first_look
    from inverse.description.trace_checks import check_trace

    check_trace(trace)
    bound = bind(stack, setup)
    slots = {slot.name: slot for slot in bound.slots if slot.prior is not None}
    priors = {name: slot.prior for name, slot in slots.items()}
    fields = {name: slot.field for name, slot in slots.items()}
    shared = {name for name, slot in slots.items() if slot.shared}
    name, zero, fixed = _time_zero(time_zero, trace)
    if isinstance(time_zero, Unknown):
        shared.add(name)
    if zero is not None:
        priors[name], fields[name] = zero, "time_zero"
    names = {inner: inner for inner in slots}
    if zero is not None:
        names["time_zero"] = name
    centre, early = (
        (fixed["time_zero"],) * 2 if zero is None else (float(zero.median()), float(zero.ppf(1e-9)))
    )
    delay = trace["delay"].values.astype(float)
    warn_if_not_plane(stack, setup, float(delay.max()) - centre)
    used = _used(mask, delay, centre, setup.pulse_rms)
    refuse_what_no_trace_can_tell(bound, float(delay[used].max()) - centre, setup.pulse_rms, setup.probe)
    look = first_look(trace)
    present = [c for c in CHANNELS if c in trace]
    channels = []
    for channel in present:
        prefix = "noise." if len(present) == 1 else f"noise.{channel}."
        built, own = _channel(trace, channel, used, noise, look.noise[channel], prefix)
        channels.append(built)
        for key, prior in own.items():
            priors[prefix + key], fields[prefix + key], names[prefix + key] = (
                prior,
                f"noise.{key}",
                prefix + key,
            )
    model = _trace_model(bound, setup, tuple(channels), delay, used, centre, early)
    return Member(model, "", names, fixed), priors, fields, frozenset(shared)


def _time_zero(given: Any, trace: xr.Dataset) -> tuple[str, Any, dict[str, float]]:
    """Return name, prior (None if known) and the fixed value of time zero."""
    if isinstance(given, Unknown):
        return given.name, given.prior, {}
    if given is None:
        from scipy import stats

        from inverse.description.rising_edge import edge_prior

        centre, sd = edge_prior(trace)
        return "time_zero", stats.norm(centre, sd), {}
    if is_distribution(given):
        return "time_zero", given, {}
    return "time_zero", None, {"time_zero": check("time_zero", given)}


def _used(mask: Any, delay: Array, centre: float, pulse_rms: float) -> NDArray[np.bool_]:
    if mask is None:
        return np.ones(delay.size, dtype=bool)
    if isinstance(mask, str):
        if mask != "overlap":
            raise ValueError(
                f"mask={mask!r} is not known; give 'overlap', None, a pair of times in ps or a bool array."
            )
        mask = (-4 * pulse_rms - 0.3, OVERLAP)
    array = np.asarray(mask)
    if array.dtype == bool and array.shape == delay.shape:
        used = array.copy()
    elif array.shape == (2,) and array.dtype != bool and array[0] < array[1]:
        used = (delay - centre < array[0]) | (delay - centre > array[1])
    else:
        raise ValueError(
            f"mask has shape {array.shape} and type {array.dtype}; give a pair (start, stop) in ps relative to time "
            f"zero, start first, or {delay.size} booleans, True where a delay is fitted."
        )
    if used.sum() < 20:
        raise ValueError(
            f"The mask leaves {used.sum()} of {delay.size} delays; at least 20 are needed for a fit."
        )
    return used


def _channel(
    trace: xr.Dataset, name: str, used: NDArray[np.bool_], noise: Any, level: float, prefix: str
) -> tuple[Channel, dict[str, Any]]:
    model, replaced = (noise, {}) if isinstance(noise, str) else ("correlated", dict(noise))
    delay = trace["delay"].values.astype(float)[used]
    priors = noise_priors(model, level, delay)
    strange = sorted(set(replaced) - set(priors))
    if strange:
        raise ValueError(f"noise names {', '.join(strange)}; it may give priors for {', '.join(priors)}.")
    data = trace[name].values.astype(float)
    scatter, scans = trace.get(f"{name}_scatter"), trace.get(f"{name}_scans")
    relative = np.ones(delay.size)
    if scatter is not None:
        relative = relative_noise(scatter.values[used], None if scans is None else scans.values[used])
    channel = Channel(
        name=name,
        unit=str(trace[name].attrs.get("units", "1")),
        data=data,
        noise=Noise(model, delay, relative),
        prefix=prefix,
        baseline=SCALE_WIDTH * float(np.abs(data[used]).max()),
    )
    return channel, {**priors, **replaced}


def _trace_model(
    bound: BoundStack,
    setup: PumpProbe,
    channels: tuple[Channel, ...],
    delay: Array,
    used: NDArray[np.bool_],
    centre: float,
    early: float,
) -> TraceModel:
    grid = time_grid(delay[used], setup.pulse_rms, early)
    groups = [m for m in bound.materials] if not bound.ambient else ["ambient", *bound.materials]
    layout = columns(groups)
    middle = {
        slot.name: np.array([float(slot.prior.median())]) for slot in bound.slots if slot.prior is not None
    }
    middle = middle or {"time_zero": np.array([centre])}
    widths = np.array([_width(name) for name in layout.names])
    batch, zero = sample(bound, middle), np.full((1, 1), centre)
    ports = dict.fromkeys(PORTS[channel.name] for channel in channels)
    parts = {port: basis(batch, setup.beams, grid, zero, layout, 1, port) for port in ports}
    predicted, measured = 0.0, 0.0
    for channel in channels:
        rows = tie(take(parts[PORTS[channel.name]], channel.name), layout, bound, middle)[0]
        predicted += float(((rows * widths[:, None]) ** 2).sum(axis=0).mean())
        measured += float((channel.data[used] ** 2).mean())
    scale = SCALE_WIDTH * np.sqrt(measured / predicted)
    return TraceModel(
        bound=bound,
        beams=setup.beams,
        channels=channels,
        delay=delay,
        used=used,
        grid=grid,
        layout=layout,
        widths=widths * scale,
        pulse_rms=setup.pulse_rms,
        earliest=early,
        train=pulse_train(setup),
    )


def _width(name: str) -> float:
    if name == "displacement":
        return 1.0
    return STRAIN_WIDTH if ".P." in name else HEAT_WIDTH


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
