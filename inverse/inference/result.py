"""The result of sampling: a DataTree in ArviZ's schema that rebuilds the problem."""

from __future__ import annotations

import json
from collections.abc import Callable
from importlib.metadata import PackageNotFoundError, version
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.quantities import quantity
from inverse.description.records import decode, encode
from inverse.description.unknowns import describe_prior
from inverse.inference.derived import derived
from inverse.inference.mcmc.ensembles import EnsembleRun
from inverse.inference.problem.parameters import Parameters

if TYPE_CHECKING:
    import xarray as xr

    from inverse.inference.inversion import Inversion

__all__ = [
    "named_variables",
    "prior_draws",
    "problem_record",
    "rebuild",
    "result_tree",
    "sampled_tree",
    "variable_attrs",
]

Array = NDArray[np.float64]

_PREDICTIVE = 50
"""Posterior predictive draws per ensemble."""

_PRIOR = 2000
_PRIOR_ROUNDS = 50

_LP = "log posterior in the standard normal variables of the priors"


def result_tree(inversion: Inversion, run: EnsembleRun, seed: int, notes: dict[str, Any]) -> xr.DataTree:
    """Put a finished run into a DataTree.

    Parameters
    ----------
    inversion : Inversion
    run : EnsembleRun
        Of the standard normal variables of the priors.
    seed : int
    notes : dict
        More entries for the JSON attribute ``inverse``.
    """

    def groups(values: Array, pick: NDArray[np.intp]) -> dict[str, Any]:
        found = _data_groups(inversion)
        if len(inversion.parts) == 1:
            predicted = _predictive(inversion, values[:, pick], seed)
            found["posterior_predictive"], found["coefficients"] = predicted
        return found

    return sampled_tree(
        inversion.posterior.parameters,
        run,
        seed,
        lambda values: named_variables(inversion, values, ("chain", "draw")),
        groups,
        {**_information(inversion), **notes},
    )


def sampled_tree(
    parameters: Parameters,
    run: EnsembleRun,
    seed: int,
    variables: Callable[[Array], dict[str, Any]],
    groups: Callable[[Array, NDArray[np.intp]], dict[str, Any]],
    information: dict[str, Any],
    possible: Callable[[Array], NDArray[np.bool_]] | None = None,
) -> xr.DataTree:
    """Lay out any finished run of the standard normal variables of priors as a DataTree.

    Parameters
    ----------
    parameters : Parameters
        Names and priors of the unknowns that were sampled.
    run : EnsembleRun
    seed : int
    variables : callable
        Values of shape (chain, draw, unknowns) -> name -> (dims, array, attrs), derived quantities included.
    groups : callable
        The same values, and the draws picked for predictions -> the other groups, such as observed_data.
    information : dict
        JSON attribute ``inverse``, to which seed, versions and convergence are added.
    possible : callable, optional
        Values of shape (n, unknowns) -> which of them the model admits; others are left out of the prior.
    """
    import xarray as xr

    draws = run.walker_major()
    z = np.stack([draws.values[name] for name in parameters.names], axis=-1)
    chains, count, size = z.shape
    values = parameters.to_values(z.reshape(-1, size)).reshape(z.shape)
    coords = {"walker": ("draw", draws.walker), "step": ("draw", draws.step)}
    rng = np.random.default_rng(np.random.SeedSequence(seed).spawn(1)[0])
    pick = rng.choice(count, min(_PREDICTIVE, count), replace=False)
    prior = prior_draws(parameters, rng, possible)[None]
    tree = xr.DataTree.from_dict(
        {
            "posterior": xr.Dataset(
                variables(values), coords={"chain": np.arange(chains), "draw": np.arange(count), **coords}
            ),
            "sample_stats": xr.Dataset({"lp": (("chain", "draw"), draws.log_prob, {"long_name": _LP})}),
            "prior": xr.Dataset(variables(prior)),
            **groups(values, pick),
        }
    )
    tree.attrs["inverse"] = json.dumps({**_run_information(run, seed), **information})
    return tree


def prior_draws(
    parameters: Parameters, rng: np.random.Generator, possible: Callable[[Array], NDArray[np.bool_]] | None
) -> Array:
    """Draw values of shape (up to 2000, unknowns) from the priors, only what is possible."""
    kept: list[Array] = []
    for _ in range(_PRIOR_ROUNDS):
        values = parameters.to_values(rng.standard_normal((_PRIOR, len(parameters.names))))
        kept.append(values if possible is None else values[possible(values)])
        if sum(map(len, kept)) >= _PRIOR:
            break
    return np.concatenate(kept)[:_PRIOR]


def rebuild(result: xr.DataTree) -> Inversion:
    """Rebuild the problem from its result, data included.

    Parameters
    ----------
    result : xarray.DataTree
        From `sample_posterior` or `load`.

    Raises
    ------
    ValueError
        If the result is not one of traces.
    """
    from inverse.inference.inversion import Inversion

    record = json.loads(result.attrs["inverse"])["record"]
    if "parts" not in record:
        raise ValueError(
            f"This is a result of {', '.join(record)}, not of traces; constants are rebuilt by "
            "ConstantsInversion.from_result, and their table and warnings say what the data added."
        )
    shared: dict[str, Any] = {}
    parts = []
    for entry in record["parts"]:
        arguments = {key: decode(value, shared) for key, value in entry["arguments"].items()}
        if entry["arguments"]["mask"] is not None and isinstance(arguments["mask"], tuple):
            arguments["mask"] = np.array(arguments["mask"])
        stack, setup = decode(entry["stack"], shared), decode(entry["setup"], shared)
        parts.append(Inversion(stack, setup, _trace(result, entry["label"]), **arguments))
    return parts[0] if len(parts) == 1 else Inversion.joint(parts, [e["label"] for e in record["parts"]])


def problem_record(inversion: Inversion) -> dict[str, Any]:
    """Describe a problem, data apart, as plain JSON data."""
    return {
        "parts": [
            {
                "label": member.label,
                "stack": encode(part.stack),
                "setup": encode(part.setup),
                "arguments": {key: encode(value) for key, value in part.arguments.items()},
            }
            for part, member in zip(inversion.parts, inversion.posterior.members, strict=True)
        ]
    }


def named_variables(inversion: Inversion, values: Array, dims: tuple[str, ...]) -> dict[str, Any]:
    """Name the unknowns and what follows from them.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (..., unknowns)
        Public units.
    dims : tuple of str
        Of all axes but the last.

    Returns
    -------
    dict
        Name -> (dims, array, attrs), as xarray takes them.
    """
    named = {name: values[..., i] for i, name in enumerate(inversion.names)}
    out = {
        name: (
            dims,
            array,
            variable_attrs(inversion.fields[name], inversion.units[name], inversion.priors[name]),
        )
        for name, array in named.items()
    }
    for member in inversion.posterior.members:
        local = {inner: named[outer] for inner, outer in member.names.items()}
        prefix = f"{member.label}:" if member.label else ""
        for name, array in derived(member.model.bound, local).items():
            q = quantity(name)
            out[prefix + name] = (dims, array, variable_attrs(q.name, q.unit, None))
    return out


def variable_attrs(field: str, unit: str, prior: Any) -> dict[str, Any]:
    """Return the attrs of a variable of a result; without a prior it is a derived quantity."""
    q = quantity(field)
    return {
        "units": unit,
        "long_name": q.meaning,
        "symbol": q.symbol,
        "role": "derived" if prior is None else "noise" if field.startswith("noise.") else "unknown",
        "prior": "" if prior is None else json.dumps(describe_prior(prior)),
        "low": q.low,
        "high": q.high,
    }


def _data_groups(inversion: Inversion) -> dict[str, Any]:
    import xarray as xr

    groups = {}
    for part, member in zip(inversion.parts, inversion.posterior.members, strict=True):
        suffix = f"_{member.label}" if member.label else ""
        groups[f"observed_data{suffix}"] = part.trace
        groups[f"constant_data{suffix}"] = xr.Dataset(
            {
                "used": (
                    "delay",
                    member.model.used.astype("i1"),
                    {"long_name": "1 where the delay was fitted"},
                )
            },
            coords={"delay": part.trace["delay"]},
        )
    return groups


def _trace(result: xr.DataTree, label: str) -> xr.Dataset:
    return result[f"observed_data{'_' + label if label else ''}"].to_dataset()


def _predictive(inversion: Inversion, values: Array, seed: int) -> tuple[xr.Dataset, xr.Dataset]:
    """Draw traces (without white noise) and the linear coefficients."""
    import xarray as xr

    (member,) = inversion.posterior.members
    model = member.model
    chains, count, size = values.shape
    named = member.local(inversion.posterior.parameters.named(values.reshape(-1, size)))
    weights = model.eliminated(named).draw(np.random.default_rng(seed))
    traces = model.predict(named, weights, model.delay)
    shape = ("chain", "draw", "delay")
    predicted = xr.Dataset(
        {
            c.name: (shape, traces[c.name].reshape(chains, count, -1), {"units": c.unit})
            for c in model.channels
        },
        coords={"delay": ("delay", model.delay, {"units": "ps"})},
    )
    scaled = (weights * model.coefficient_scales(named)).reshape(chains, count, -1)
    coefficients = xr.Dataset(
        {
            name.replace("/", " per "): (
                ("chain", "draw"),
                scaled[..., i],
                {"long_name": "fluence x coefficient"},
            )
            for i, name in enumerate(_coefficient_names(model))
        }
    )
    return predicted, coefficients


def _coefficient_names(model: Any) -> tuple[str, ...]:
    return tuple(model.coefficient_names)


def _information(inversion: Inversion) -> dict[str, Any]:
    models = [m.model for m in inversion.posterior.members]
    constants = {f"{c['place']}.{c['field']}": c for m in models for c in m.bound.constants}
    return {
        "stack": "; ".join(str(part.stack) for part in inversion.parts),
        "noise": {
            "model": models[0].channels[0].noise.model,
            "coefficients": {
                name: float(width)
                for m in models
                for name, width in zip(m.coefficient_names, m.coefficient_widths, strict=True)
            },
        },
        "constants": list(constants.values()),
        "record": problem_record(inversion),
    }


def _run_information(run: EnsembleRun, seed: int) -> dict[str, Any]:
    return {
        "seed": seed,
        "versions": _versions(),
        "ensembles": int(run.chain.shape[0]),
        "convergence": {
            "converged": bool(run.converged),
            "interrupted": bool(run.interrupted),
            "message": run.message,
            "steps": int(run.steps_total),
            "burn_in": int(run.burn_in),
            "thin": int(run.thin),
            "acceptance": [round(float(a), 4) for a in run.acceptance],
            "autocorrelation_time": dict(zip(run.names, map(float, run.autocorrelation_time), strict=True)),
            "rejected_evaluations": int(run.rejected_evaluations),
        },
    }


def _versions() -> dict[str, str]:
    out = {}
    for package in ("inverse-ultrasonics", "numpy", "scipy", "emcee", "xarray"):
        try:
            out[package] = version(package)
        except PackageNotFoundError:
            out[package] = "not installed"
    return out
