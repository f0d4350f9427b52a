"""The posterior of elastic constants as a DataTree, in the schema of every other result."""

from __future__ import annotations

import json
from dataclasses import fields
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity
from inverse.description.records import decode, encode
from inverse.elastic import BRANCHES, StiffnessTensor, averages
from inverse.inference.mcmc.ensembles import EnsembleRun
from inverse.inference.result import sampled_tree, variable_attrs
from inverse.study.stiffness.measurements import BrillouinShift, EchoTime, Measurement, Velocity

if TYPE_CHECKING:
    import xarray as xr

    from inverse.study.stiffness.constants import ConstantsInversion

__all__ = ["constants_tree", "engineering_moduli", "rebuilt", "record"]

Array = NDArray[np.float64]

_KINDS: dict[str, type[Measurement]] = {c.__name__: c for c in (Velocity, BrillouinShift, EchoTime)}
_NARROWED = 1.1
_LABEL_DRAWS = 2000
_SURE = 0.95


def constants_tree(
    problem: ConstantsInversion, run: EnsembleRun, seed: int, notes: dict[str, Any], *, checks: bool
) -> xr.DataTree:
    """Put a finished run into a DataTree.

    Parameters
    ----------
    problem : ConstantsInversion
    run : EnsembleRun
        Of the standard normal variables of the priors.
    seed : int
    notes : dict
        More entries for the JSON attribute ``inverse``.
    checks : bool
        Look for warnings.
    """
    tree = sampled_tree(
        problem.posterior.parameters,
        run,
        seed,
        lambda values: _variables(problem, values),
        lambda values, pick: _groups(problem, values, pick),
        {"stack": f"{problem.symmetry} crystal", "noise": _NOISE, "record": record(problem), **notes},
        problem.posterior.possible,
    )
    information = json.loads(tree.attrs["inverse"])
    best = np.array([float(tree["posterior"][name].median()) for name in problem.names])
    centre = best if problem.posterior.possible(best[None])[0] else _likeliest(tree, problem.names)
    information["reached"] = list(problem.reached(centre))
    information["warnings"] = _warnings(tree, problem, centre, information["reached"]) if checks else []
    information["constants"] = _known(problem)
    tree.attrs["inverse"] = json.dumps(information)
    return tree


_NOISE = {"model": "independent normal errors of the stated uncertainties"}


def engineering_moduli(tensor: StiffnessTensor) -> dict[str, Array]:
    """Return moduli of the polycrystal (Hill) and anisotropy by quantity, each of the batch's shape."""
    hill = averages(tensor)
    return {
        "bulk_modulus": hill.bulk,
        "shear_modulus": hill.shear,
        "young_modulus": hill.young,
        "poisson_ratio": hill.poisson,
        "universal_anisotropy": hill.universal_anisotropy,
    }


def record(problem: ConstantsInversion) -> dict[str, Any]:
    """Describe a problem, data included, as plain JSON data."""
    return {
        "constants_inversion": {
            "symmetry": problem.symmetry,
            "density": encode(problem.density),
            "priors": encode(problem.constants),
            "measurements": [
                {"kind": type(m).__name__, "fields": encode({f.name: getattr(m, f.name) for f in fields(m)})}
                for m in problem.measurements
            ],
        }
    }


def rebuilt(result: xr.DataTree) -> dict[str, Any]:
    """Return the arguments of the problem whose result this is.

    Raises
    ------
    ValueError
        If the result is of another kind.
    """
    entry = json.loads(result.attrs.get("inverse", "{}")).get("record", {}).get("constants_inversion")
    if entry is None:
        raise ValueError(
            "The result is not one of ConstantsInversion.sample_posterior; traces are rebuilt by rebuild."
        )
    shared: dict[str, Any] = {}
    return {
        "symmetry": entry["symmetry"],
        "density": decode(entry["density"], shared),
        "priors": decode(entry["priors"], shared),
        "measurements": [_KINDS[m["kind"]](**decode(m["fields"], shared)) for m in entry["measurements"]],
    }


def _variables(problem: ConstantsInversion, values: Array) -> dict[str, Any]:
    dims = ("chain", "draw")
    flat = values.reshape(-1, values.shape[-1])
    out = {
        name: (
            dims,
            values[..., i],
            {
                **variable_attrs(problem.fields[name], problem.units[name], problem.priors[name]),
                "constrained": int(problem.fields[name] in problem.constants),
            },
        )
        for i, name in enumerate(problem.names)
    }
    for name, array in engineering_moduli(problem.tensor(flat)).items():
        out[name] = (dims, array.reshape(values.shape[:-1]), variable_attrs(name, quantity(name).unit, None))
    return out


def _groups(problem: ConstantsInversion, values: Array, pick: NDArray[np.intp]) -> dict[str, Any]:
    import xarray as xr

    posterior = problem.posterior
    flat = values.reshape(-1, values.shape[-1])
    sparse = flat[:: max(1, len(flat) // _LABEL_DRAWS)]
    labels = posterior.label_probability(sparse).mean(axis=0)
    place = {"measurement": list(posterior.names)}
    shown = values[:, pick]
    return {
        "observed_data": _observed(problem),
        "posterior_predictive": xr.Dataset(
            {"value": (("chain", "draw", "measurement"), _predicted(problem, shown))}, coords=place
        ),
        "labels": xr.Dataset(
            {"probability": (("measurement", "branch"), labels, {"units": "1"})},
            coords={**place, "branch": list(BRANCHES)},
        ),
    }


def _predicted(problem: ConstantsInversion, values: Array) -> Array:
    """Predict each measurement on the likeliest branch of each draw, without noise."""
    flat = values.reshape(-1, values.shape[-1])
    branch = problem.posterior.label_probability(flat).argmax(axis=-1)[..., None]
    found = np.take_along_axis(problem.posterior.predicted(flat), branch, axis=-1)[..., 0]
    return np.asarray(found.reshape(*values.shape[:-1], -1))


def _observed(problem: ConstantsInversion) -> xr.Dataset:
    import xarray as xr

    posterior = problem.posterior
    rows = problem.measurements
    texts = {
        "kind": [type(m).__name__ for m in rows],
        "unit": [quantity(m.field).unit for m in rows],
        "label": [" or ".join(m.branch) for m in rows],
    }
    return xr.Dataset(
        {
            "value": ("measurement", posterior.value, {"long_name": "measured value, in `unit`"}),
            "uncertainty": ("measurement", posterior.uncertainty, {"long_name": "standard, in `unit`"}),
            "direction": (("measurement", "axis"), posterior.moduli.directions, {"units": "1"}),
        },
        coords={
            "measurement": list(posterior.names),
            "axis": ["x", "y", "z"],
            **{name: ("measurement", text) for name, text in texts.items()},
        },
    )


def _likeliest(tree: xr.DataTree, names: tuple[str, ...]) -> Array:
    at = int(np.argmax(tree["sample_stats"]["lp"].to_numpy()))
    return np.array([float(tree["posterior"][name].to_numpy().ravel()[at]) for name in names])


def _warnings(tree: xr.DataTree, problem: ConstantsInversion, centre: Array, reached: list[str]) -> list[str]:
    """Say what is not reached, and what the data leave as wide as priors and stability do."""
    out = [s for s in reached if "not reached" in s or "reached only" in s or "rests on" in s]
    before, after = tree["prior"].to_dataset(), tree["posterior"].to_dataset()
    same = [n for n in problem.names if _width(before[n]) < _NARROWED * _width(after[n])]
    if same:
        out.append(
            f"{', '.join(same)}: prior only, no narrower than the prior among stable constants; "
            "what is stated is the prior's."
        )
    unsure = _unsure(problem, centre, tree["labels"].to_dataset()["probability"].to_numpy())
    if unsure:
        out.append(f"The branch of {', '.join(unsure)} stays uncertain; the intervals allow for it.")
    return out


def _unsure(problem: ConstantsInversion, centre: Array, probability: Array) -> list[str]:
    """Name measurements whose branch is open, unless the branches in question coincide."""
    predicted = problem.posterior.predicted(centre[None])[0]
    likeliest = np.take_along_axis(predicted, probability.argmax(axis=-1)[:, None], axis=-1)
    alike = np.abs(predicted - likeliest) < 0.1 * problem.posterior.uncertainty[:, None]
    sure = np.where(alike, probability, 0.0).sum(axis=-1)
    return [name for name, share in zip(problem.posterior.names, sure, strict=True) if share < _SURE]


def _width(draws: xr.DataArray) -> float:
    low, high = np.quantile(draws.to_numpy(), [0.16, 0.84])
    return float(high - low)


def _known(problem: ConstantsInversion) -> list[dict[str, Any]]:
    """List every number that was taken as known."""
    posterior = problem.posterior
    slots = [*posterior.constants, *posterior.density, *(s for group in posterior.factors for s in group)]
    known = {slot.name: slot for slot in slots if slot.prior is None}
    return [
        {
            "place": name.rpartition(".")[0],
            "field": slot.field,
            "value": slot.value,
            "unit": quantity(slot.field).unit,
            "source": slot.source,
            "spread": 0.0,
        }
        for name, slot in known.items()
    ]
