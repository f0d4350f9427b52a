"""A problem that fits and samples in milliseconds: one compliance, measured directly with normal noise."""

from __future__ import annotations

import json
import os
import time
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import xarray as xr
from scipy import stats

from inverse.description.unknowns import describe_prior
from inverse.inference.problem.parameters import parameters

PRIOR = stats.halfcauchy(scale=0.05)
NAME = "Al|Si.compliance"


class ToyInversion:
    """What `batch` asks of a problem: the mean of the trace is the compliance, its scatter the noise."""

    names = (NAME,)
    noise_names = ()
    fields, units, priors = {NAME: "compliance"}, {NAME: "nm/GPa"}, {NAME: PRIOR}

    def __init__(self, trace: xr.Dataset, row: dict) -> None:
        self.start = time.time()
        values = trace["reflectance_change"].values
        if np.isnan(values).any():
            raise ValueError(f"reflectance_change is NaN at {int(np.isnan(values).sum())} delays; drop them.")
        if trace["delay"].attrs.get("units", "ps") != "ps":
            raise ValueError(f"delays are in {trace['delay'].attrs['units']}; convert them to ps.")
        self.seen, self.sd = float(values.mean()), float(values.std() / np.sqrt(values.size))
        self.row, self.posterior = row, SimpleNamespace(parameters=parameters({NAME: PRIOR}))

    def least_squares(self, *, starts: int, seed: int, points: list) -> SimpleNamespace:
        sleep = self.row.get("sleep", 0)
        if sleep == "dead":
            os._exit(3)
        time.sleep(sleep)
        basin = SimpleNamespace(values=np.array([self.seen]), log_posterior=float(len(points)))
        return SimpleNamespace(names=self.names, minima=[basin], best=basin)

    def noise_warnings(self, values, *, seed) -> list[str]:
        return [f"{len(values)} draws were looked at."] if self.row.get("look") else []

    def sample_posterior(self, *, seed, fit, ess, ensembles, max_steps, checks, progress) -> xr.DataTree:
        progress({"steps": 1})
        rng = np.random.default_rng(seed)
        grid = PRIOR.ppf((np.arange(4000) + 0.5) / 4000)
        near = np.linspace(max(self.seen - 6 * self.sd, 1e-9), self.seen + 6 * self.sd, 4000)
        values = np.sort(np.concatenate([grid, near]))
        log = -0.5 * ((values - self.seen) / self.sd) ** 2 + PRIOR.logpdf(values)
        weight = np.exp(log - log.max()) * np.gradient(values)
        draws = rng.choice(values, (2, 500), p=weight / weight.sum()) * np.exp(
            1e-3 * rng.standard_normal((2, 500))
        )
        attrs = {"units": "nm/GPa", "long_name": "compliance", "symbol": "1/K", "role": "unknown"}
        attrs["prior"] = json.dumps(describe_prior(PRIOR))
        derived = {"units": "GPa/nm", "long_name": "stiffness", "symbol": "K", "role": "derived", "prior": ""}
        fresh = PRIOR.rvs((1, 500), random_state=rng)
        dims = ("chain", "draw")
        tree = xr.DataTree.from_dict(
            {
                "posterior": xr.Dataset(
                    {NAME: (dims, draws, attrs), "Al|Si.stiffness": (dims, 1 / draws, derived)}
                ),
                "prior": xr.Dataset({NAME: (dims, fresh), "Al|Si.stiffness": (dims, 1 / fresh)}),
            }
        )
        converged = max_steps > 10
        message = "" if converged else "10 steps did not suffice"
        if "note" in self.row:
            Path(self.row["note"]).write_text(f"{self.start!r} {time.time()!r}")
        tree.attrs["inverse"] = json.dumps({"convergence": {"converged": converged, "message": message}})
        return tree


def toy(trace: xr.Dataset, row: dict) -> ToyInversion:
    return ToyInversion(trace, row)


def other_toy(trace: xr.Dataset, row: dict) -> ToyInversion:
    return ToyInversion(trace, row)


def toy_trace(compliance: float, seed: int, relative: float = 0.1, points: int = 50) -> xr.Dataset:
    rng = np.random.default_rng(seed)
    values = compliance * (1 + relative * rng.standard_normal(points))
    return xr.Dataset(
        {"reflectance_change": ("delay", values)},
        coords={"delay": ("delay", np.arange(points) * 0.1, {"units": "ps"})},
    )


def toy_traces(count: int) -> dict[str, xr.Dataset]:
    return {f"W{k // 4}-{k % 4}": toy_trace(0.1 + 0.001 * k, k) for k in range(count)}
