"""A trace model whose basis is linear in its unknowns, so that every answer follows by hand."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import SimpleNamespace
from typing import Any

import numpy as np
from scipy import stats

from inverse.description.sample.places import BoundStack, Slot
from inverse.inference.problem.likelihood import Channel, TraceModel
from inverse.inference.problem.noise import Noise
from inverse.inference.problem.parameters import parameters
from inverse.inference.problem.posterior import Member, Posterior
from inverse.response.basis import Columns
from inverse.response.inverse_laplace import time_grid


@dataclass(frozen=True)
class LinearModel(TraceModel):
    """The signal is c (start + a first + b second + (k - 2) third); c is eliminated, k a constant of 2(0.1)."""

    shapes: np.ndarray = field(kw_only=True)

    def functions(self, values, grid=None):
        start, first, second, third = self.shapes
        a, b = values["film.velocity"][:, None], values["film.density"][:, None]
        k = np.asarray(values.get("film.heat_capacity", 2.0)).reshape(-1, 1)
        rows = (start + a * first + b * second + (k - 2.0) * third)[:, None] * self.widths[:, None]
        (channel,) = self.channels
        offset = np.full((len(a), 1, start.size), channel.baseline)
        return {channel.name: np.concatenate([rows, offset], axis=1)}


def linear_problem(
    delay: np.ndarray,
    shapes: np.ndarray,
    data: np.ndarray,
    noise: Mapping[str, Any],
    *,
    width: float = 100.0,
    model: str | None = None,
) -> SimpleNamespace:
    """Put the model into what an `Inversion` offers; noise holds numbers where known, else priors."""
    model = model or ("correlated" if "discrepancy" in noise else "white")
    channel = Channel(
        "reflectance_change", "1", data, Noise(model, delay, np.ones(delay.size)), "noise.", baseline=1e-9
    )
    constant = Slot("film.heat_capacity", "heat_capacity", 2.0, None, "a table", 0.1)
    trace_model = LinearModel(
        bound=BoundStack((), (), {"heat_capacity": constant}, (), ()),
        beams=(400.0, 800.0),
        channels=(channel,),
        delay=delay,
        used=np.ones(delay.size, dtype=bool),
        grid=time_grid(delay, 0.3, 0.0),
        layout=Columns((), (), ("scale",)),
        widths=np.array([width]),
        pulse_rms=0.3,
        earliest=0.0,
        shapes=shapes,
    )
    own = {f"noise.{name}": value for name, value in noise.items()}
    priors = {"film.velocity": stats.norm(0, 1), "film.density": stats.norm(0, 1)}
    priors |= {name: value for name, value in own.items() if not isinstance(value, float)}
    fixed = {name: value for name, value in own.items() if isinstance(value, float)}
    member = Member(trace_model, "", {name: name for name in priors}, fixed)
    unbounded = np.full(len(priors), np.inf)
    return SimpleNamespace(
        names=tuple(priors),
        noise_names=tuple(name for name in priors if name.startswith("noise.")),
        units=dict.fromkeys(priors, "1"),
        posterior=Posterior(parameters(priors), (member,), -unbounded, unbounded),
    )
