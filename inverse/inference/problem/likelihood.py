"""The likelihood of one trace: forward model, noise and elimination put together."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from inverse.description.sample.places import BoundStack
from inverse.inference.problem.elimination import Eliminated, eliminate
from inverse.inference.problem.noise import Noise
from inverse.inference.problem.robust import eliminate_student, gaussian_noise, student_residuals
from inverse.inference.problem.tied import tie
from inverse.response.basis import PORTS, Beams, Columns, basis, take
from inverse.response.instrument import drift
from inverse.response.inverse_laplace import TimeGrid
from inverse.response.media import Sample
from inverse.response.pulse_train import PulseTrain, residual
from inverse.response.spread import under_the_spot
from inverse.response.windows import Windows, delay_windows

__all__ = [
    "CLEAR",
    "DISPLACEMENT_WIDTH",
    "HEAT_WIDTH",
    "PAIR_WIDTH",
    "SCALE_WIDTH",
    "STRAIN_WIDTH",
    "Channel",
    "TraceModel",
]

Array = NDArray[np.float64]

STRAIN_WIDTH = 5.0
"""Prior width of real and imaginary part of dn/d(strain), dimensionless."""

HEAT_WIDTH = 5e-4
"""Prior width of real and imaginary part of dn/dT, 1/K."""

PAIR_WIDTH = 5.0
"""Prior width of real and imaginary part of dn per density of photo-carrier pairs, nm3. Free carriers of a tenth of the
electron's mass make 0.8 nm3 at 800 nm in n = 3.7, r_e lambda^2 / (2 pi n m); filled bands make more near the gap."""

DISPLACEMENT_WIDTH = 10.0
"""Prior width of the displacement's coefficient, which is the fluence itself, over that of a fluence that gives the
trace its size with optical coefficients as large as their widths. They may be ten times smaller, and the fluence as
much larger: a tight width here takes a trace that the displacement has part in for one of another film."""

SCALE_WIDTH = 3.0
"""Prior width of the trace's scale over the scale that these widths predict. It follows the unknowns: were it held, a
film whose interference makes every function smaller would be likelier for that alone, by as much per coefficient."""

CLEAR = 0.01
"""Below this ratio n''/n' a medium counts as transparent, and the imaginary parts of its coefficients do not join in
that prediction: they are about zero there, while a clear film shows them larger than anything else."""


@dataclass(frozen=True)
class Channel:
    """Data of one channel.

    Attributes
    ----------
    name : str
        ``reflectance_change`` or ``optical_phase``.
    unit : str
    data : array, shape (delays,)
        All points; the model's mask says which are fitted.
    noise : Noise
        On the fitted delays.
    prefix : str
        Of the noise unknowns, ``noise.`` or ``noise.optical_phase.``.
    baseline : float
        Prior width of the constant offset.
    scale : float
        Factor of its functions: of a beam's deflection over the phase.
    """

    name: str
    unit: str
    data: Array
    noise: Noise
    prefix: str
    baseline: float
    scale: float = 1.0

    def noise_values(self, values: Mapping[str, Array]) -> dict[str, Array]:
        """Pick this channel's noise values out of all values."""
        start = len(self.prefix)
        return {name[start:]: v for name, v in values.items() if name.startswith(self.prefix)}


@dataclass(frozen=True)
class TraceModel:
    """Everything needed to compute the likelihood of one trace; plain data, picklable.

    Attributes
    ----------
    bound : BoundStack
    beams : tuple of Beam
        Pump and probe.
    channels : tuple of Channel
    delay : array
        All delays, ps.
    used : bool array
        Which delays are fitted.
    grid : TimeGrid or Windows
        For the fitted delays.
    layout : Columns
    widths : array
        Prior widths of the coefficients at the prior's centre, in the order of ``layout.names``.
    pulse_rms : float
        ps.
    earliest : float
        Earliest time zero the grid admits, ps.
    train : PulseTrain, optional
        Where the trace is a lock-in's channel.
    size : float, optional
        Root of the mean square that the prior's widths shall predict, wherever the unknowns are: all widths are scaled
        to it together. Without it they stay as they are.
    idle : bool array, optional
        Functions that do not count in that prediction.
    clear : tuple of bool
        Which media are transparent to the probe, top to bottom.
    """

    bound: BoundStack
    beams: Beams
    channels: tuple[Channel, ...]
    delay: Array
    used: NDArray[np.bool_]
    grid: TimeGrid | Windows
    layout: Columns
    widths: Array
    pulse_rms: float
    earliest: float
    train: PulseTrain | None = None
    size: float | None = None
    idle: NDArray[np.bool_] | None = None
    clear: tuple[bool, ...] = ()

    @property
    def coefficient_names(self) -> tuple[str, ...]:
        """Names of the eliminated coefficients; one baseline per channel stands last."""
        return (*self.layout.names, *(f"baseline.{c.name}" for c in self.channels))

    @property
    def coefficient_widths(self) -> Array:
        """Prior widths at the prior's centre in the order of `coefficient_names`."""
        return np.concatenate([self.widths, [c.baseline for c in self.channels]])

    def coefficient_scales(self, values: Mapping[str, Array]) -> Array:
        """Return the prior widths where the unknowns have these values, shape (sets, coefficients)."""
        blocks = [self.factor(block) for block, _ in self._blocks(values)]
        out = np.repeat(self.coefficient_widths[None], sum(map(len, blocks)), axis=0)
        out[:, : len(self.widths)] *= np.concatenate(blocks)[:, None]
        return out

    @property
    def count(self) -> int:
        """Number of fitted data."""
        return int(self.used.sum()) * len(self.channels)

    def log_likelihood(self, values: Mapping[str, Array]) -> Array:
        """Return the marginal log likelihood of a batch, shape (sets,)."""
        return np.concatenate([self._eliminate(block).log_likelihood for block, _ in self._blocks(values)])

    def eliminated(self, values: Mapping[str, Array]) -> Eliminated:
        """Return likelihood and coefficients of a batch."""
        parts = [self._eliminate(block) for block, _ in self._blocks(values)]
        return Eliminated(
            np.concatenate([p.log_likelihood for p in parts]),
            np.concatenate([p.mean for p in parts]),
            np.concatenate([p.factor for p in parts]),
        )

    def functions(
        self, values: Mapping[str, Array], grid: TimeGrid | Windows | None = None
    ) -> dict[str, Array]:
        """Return per channel the basis functions times their prior widths, baseline last.

        Parameters
        ----------
        values : mapping
            Unknown name -> array of shape (sets,).
        grid : TimeGrid or Windows, optional
            Other delays than the fitted ones.

        Returns
        -------
        dict
            Channel name -> array of shape (sets, coefficients of all channels, delays).
        """
        rows = self._rows(values, grid or self.grid)
        factor = self.factor(values, rows if grid is None else None)[:, None, None]
        out = {}
        for i, channel in enumerate(self.channels):
            offsets = np.zeros((len(factor), len(self.channels), rows[channel.name].shape[2]))
            offsets[:, i] = channel.baseline
            out[channel.name] = np.concatenate([rows[channel.name] * factor, offsets], axis=1)
        return out

    def factor(self, values: Mapping[str, Array], rows: Mapping[str, Array] | None = None) -> Array:
        """Return what the prior widths are multiplied by where the unknowns have these values, shape (sets,)."""
        if self.size is None:
            return np.ones(len(next(iter(values.values()))))
        rows = self._rows(values, self.grid) if rows is None else rows
        busy = [f if self.idle is None else f[:, ~self.idle] for f in rows.values()]
        squares = [np.einsum("bcn,bcn->b", f, f) / f.shape[2] for f in busy]
        return np.asarray(self.size / np.sqrt(np.sum(squares, axis=0)))

    def _rows(self, values: Mapping[str, Array], grid: TimeGrid | Windows) -> dict[str, Array]:
        """Return per channel the basis functions times their prior widths at the prior's centre."""
        sets = len(next(iter(values.values())))
        batches = under_the_spot(self.bound, values)
        ports = dict.fromkeys(PORTS[c.name] for c in self.channels)
        seen = {port: self._mean(port, batches, values, grid, sets) for port in ports}
        scale = self.widths[:, None]
        return {
            c.name: scale * c.scale * tie(take(seen[PORTS[c.name]], c.name), self.layout, self.bound, values)
            for c in self.channels
        }

    def _mean(
        self,
        port: str,
        batches: Sequence[tuple[float, Sample]],
        values: Mapping[str, Array],
        grid: TimeGrid | Windows,
        sets: int,
    ) -> Array:
        """Return the basis of a port, averaged over what lies under the spot."""
        if len(batches) == 1:
            return self._seen(port, batches[0][1], values, grid, sets)
        return np.sum([w * self._seen(port, batch, values, grid, sets) for w, batch in batches], axis=0)

    def _seen(
        self, port: str, batch: Sample, values: Mapping[str, Array], grid: TimeGrid | Windows, sets: int
    ) -> Array:
        """Return the basis of a port as the bench measures it."""
        zero = values["time_zero"][:, None]
        parts = basis(batch, self.beams, grid, zero, self.layout, sets, port)
        if self.train is not None:
            earlier = residual(batch, self.beams, grid.delay, self.train, zero, self.layout, sets, port)
            parts = self.train.detected(parts, earlier)
        if "overlap_drift" in self.bound.instrument:
            parts = parts * drift(self.bound, values, grid.delay - zero)
        return parts

    def at(self, delay: Array) -> TimeGrid | Windows:
        """Return a grid for other delays."""
        return delay_windows(delay, self.pulse_rms, self.earliest)

    def predict(self, values: Mapping[str, Array], coefficients: Array, delay: Array) -> dict[str, Array]:
        """Return per channel the traces of given coefficients (in prior widths), shape (sets, delays)."""
        grid = self.at(delay)
        pieces: dict[str, list[Array]] = {c.name: [] for c in self.channels}
        for block, rows in self._blocks(values):
            for name, functions in self.functions(block, grid).items():
                pieces[name].append(np.einsum("bc,bcn->bn", coefficients[rows], functions))
        return {name: np.concatenate(p) for name, p in pieces.items()}

    def whitened(self, values: Mapping[str, float], functions: Mapping[str, Array]) -> tuple[Array, Array]:
        """Return whitened basis (data, coefficients) and data (data,) of one parameter set, prior rows last.

        Parameters
        ----------
        values : mapping
            Holds the noise values as scalars.
        functions : mapping
            Channel name -> (coefficients, fitted delays), one set out of `functions`.
        """
        size = len(self.coefficient_names)
        rows = []
        for channel in self.channels:
            noise = {k: float(v) for k, v in channel.noise_values(values).items()}  # type: ignore[arg-type]
            stacked = np.concatenate([functions[channel.name], channel.data[None, self.used]])
            rows.append(channel.noise.whiten(stacked, noise))
        white = np.concatenate(rows, axis=1)
        prior = np.concatenate([np.eye(size), np.zeros((1, size))])
        white = np.concatenate([white, prior], axis=1)
        return white[:-1].T, white[-1]

    def whitened_changes(self, values: Mapping[str, float], changes: Mapping[str, Array]) -> Array:
        """Return what changes of the basis functions, (unknowns, coefficients, delays), make of `whitened`'s basis.

        Returns
        -------
        array, shape (unknowns, coefficients, data)
        """
        rows = []
        for channel in self.channels:
            noise = {k: float(v) for k, v in channel.noise_values(values).items()}  # type: ignore[arg-type]
            change = changes[channel.name]
            white = channel.noise.whiten(change.reshape(-1, change.shape[2]), noise)
            rows.append(white.reshape(*change.shape[:2], -1))
        size = len(self.coefficient_names)
        return np.concatenate([*rows, np.zeros((*rows[0].shape[:2], size))], axis=2)

    def residual(self, values: Mapping[str, float], functions: Mapping[str, Array]) -> Array:
        """Return whitened residuals of one parameter set with the coefficients eliminated; arguments as `whitened`."""
        if self.has_outliers:
            return student_residuals(self.channels, self.used, functions, values)
        a, y = self.whitened(values, functions)
        try:
            q, _ = np.linalg.qr(a)
        except np.linalg.LinAlgError:
            return np.full(y.size, np.nan)
        return np.asarray(y - q @ (q.T @ y))

    def marginal(self, functions: Mapping[str, Array], values: Mapping[str, Array]) -> Eliminated:
        """Eliminate the coefficients of a batch whose `functions` are known."""
        if self.has_outliers:
            return eliminate_student(self.channels, self.used, functions, values)
        gram, log_det = self.gram(functions, values)
        return eliminate(gram, log_det, self.count)

    def as_gaussian(self, values: Mapping[str, Array]) -> TraceModel:
        """Return the model whose Gaussian noise has the curvature of its own at one parameter set."""
        if not self.has_outliers:
            return self
        functions = {name: f[0] for name, f in self.functions(values).items()}
        scalars = {name: float(v[0]) for name, v in values.items()}
        noises = gaussian_noise(self.channels, self.used, functions, scalars)
        channels = (replace(c, noise=noise) for c, noise in zip(self.channels, noises, strict=True))
        return replace(self, channels=tuple(channels))

    @property
    def has_outliers(self) -> bool:
        """Tell whether the white noise is of Student's t distribution."""
        return self.channels[0].noise.model == "student"

    def gram(self, functions: Mapping[str, Array], values: Mapping[str, Array]) -> tuple[Array, Array]:
        """Return the Gram matrix of scaled basis and data, and log det K, summed over channels."""
        total: Array | float = 0.0
        log_det: Array | float = 0.0
        for channel in self.channels:
            rows = functions[channel.name]
            data = np.broadcast_to(channel.data[self.used], (len(rows), 1, rows.shape[2]))
            g, d = channel.noise.gram(np.concatenate([rows, data], axis=1), channel.noise_values(values))
            total, log_det = total + g, log_det + d
        return np.asarray(total), np.asarray(log_det)

    def _eliminate(self, values: Mapping[str, Array]) -> Eliminated:
        with np.errstate(all="ignore"):
            return self.marginal(self.functions(values), values)

    def _blocks(self, values: Mapping[str, Array]) -> Iterator[tuple[dict[str, Array], slice]]:
        sets = len(next(iter(values.values())))
        # Of equal size: what is laid out once per block costs as much for a few sets as for many.
        count = -(-sets // self.grid.block)
        edges = [sets * i // count for i in range(count + 1)]
        for rows in map(slice, edges, edges[1:]):
            yield {name: np.asarray(v)[rows] for name, v in values.items()}, rows
