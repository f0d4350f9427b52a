"""Where the uncertainty of each number comes from: noise, discrepancy, each prior, each fixed constant.

The problem made linear at its minimum (`inverse.inference.checks.linearised`) says what each error does to the
unknowns. Without constants the contributions add up to their covariance, ``C (F + 1) C = C``. Contributions are
standard uncertainties and combine as JCGM 100:2008, 5.1.2.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.wording import plain
from inverse.inference.checks.constants import (
    FixedConstant,
    moved,
)
from inverse.inference.checks.linearised import (
    STEP,
    Linearised,
    constant_ends,
    linearise,
)
from inverse.inference.derived import derived
from inverse.inference.minima.least_squares import refine

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion
    from inverse.inference.minima.least_squares import Fit

__all__ = ["budget", "constant_warnings", "weigh_constants"]

Array = NDArray[np.float64]

# Unknowns that a sentence names; those that a constant moves most.
_NAMED = 3


def budget(
    result: Any, *, quantities: Sequence[str] | None = None, refit: bool = True
) -> dict[str, dict[str, float]]:
    """Split the uncertainty of each number into what it comes from.

    Parameters
    ----------
    result : Fit or xarray.DataTree
        Of `Inversion.least_squares` or `Inversion.sample_posterior`. The split is made at the most probable minimum:
        of a posterior, the draw of the highest density, moved to its minimum.
    quantities : sequence of str, optional
        Unknowns other than noise and derived quantities; by default all of them that are finite.
    refit : bool
        Find the minimum again, one spread up and down, for each constant that moves an unknown by more than its
        standard deviation; without it such a constant's contribution is that of a straight line, and fast.

    Returns
    -------
    dict
        Quantity -> {source: standard uncertainty in the quantity's unit}. Sources: ``white noise``,
        ``discrepancy``, ``prior of <unknown>``, ``priors of the linear coefficients``, ``constant <name>``.
        `budget_table` presents it.

    Raises
    ------
    ValueError
        If `result` is neither kind, or a quantity is not of the problem.

    Notes
    -----
    Linear in everything: where a posterior is skewed or has several minima, the combined value differs from
    its standard deviation. A fixed constant contributes what its spread does to the estimate, although the
    posterior itself, for which it is known, does not contain it. A constant without a stated spread takes
    `inverse.inference.checks.constants.DEFAULT_RELATIVE_SPREAD`.

    References
    ----------
    JCGM 100:2008, Guide to the expression of uncertainty in measurement, 5.1.
    """
    inversion, z = _point(result)
    known = [name for name, v in _quantities(inversion, z[None]).items() if np.isfinite(v).all()]
    if isinstance(quantities, str):
        raise ValueError(f"quantities = {quantities!r}; give a list of names, such as [{quantities!r}].")
    asked = known if quantities is None else list(quantities)
    strange = [name for name in asked if name not in known]
    if strange:
        raise ValueError(f"No budget for {', '.join(strange)}; there is one for {', '.join(known)}.")
    linear = linearise(inversion, z, refit=refit)
    gradients, direct = _gradients(inversion, linear)
    return {name: _split(linear, gradients[name], direct[name]) for name in asked}


def constant_warnings(inversion: Inversion, fit: Fit, *, refit: bool = True) -> list[str]:
    """Say which fixed constants move an unknown by more than its standard deviation.

    Parameters
    ----------
    inversion : Inversion
    fit : Fit
        Its least-squares result.
    refit : bool
        As for `budget`.

    Returns
    -------
    list of str
        One sentence for each such constant, about the unknowns that it moves most; empty if there is none.
    """
    return weigh_constants(inversion, fit, refit=refit)[0]


def weigh_constants(
    inversion: Inversion, fit: Fit, *, refit: bool = True
) -> tuple[list[str], dict[str, float]]:
    """Say which fixed constants outweigh an interval, and what all of them would add to each quantity.

    Parameters
    ----------
    inversion, fit, refit
        As for `constant_warnings`.

    Returns
    -------
    warnings : list of str
    shares : dict
        Quantity -> root sum of squares of the constants' contributions, in its unit, as in `budget`.
    """
    linear = linearise(inversion, fit.best.z, refit=refit)
    ratios = np.abs(linear.shifts) / np.sqrt(linear.covariance.diagonal())[:, None]
    sd = dict(zip(fit.names, fit.sd, strict=True))
    warnings = []
    for constant, column in zip(linear.constants, ratios.T, strict=True):
        heavy = [i for i in np.argsort(-column) if column[i] > 1]
        moves = [(linear.names[i], float(column[i] * sd[linear.names[i]]), float(column[i])) for i in heavy]
        if moves:
            warnings.append(_warning(inversion, constant, moves))
    gradients, direct = _gradients(inversion, linear)
    shares = {name: float(np.linalg.norm(g @ linear.shifts + direct[name])) for name, g in gradients.items()}
    return warnings, {name: share for name, share in shares.items() if np.isfinite(share)}


def _point(result: Any) -> tuple[Inversion, Array]:
    """Return the problem and its minimum in standard normal variables."""
    if hasattr(result, "best") and hasattr(result, "inversion"):
        return _with_traces(result.inversion), np.asarray(result.best.z)
    if not (hasattr(result, "children") and "posterior" in result.children):
        raise ValueError(
            f"budget got {type(result).__name__}; give the result of Inversion.least_squares or sample_posterior."
        )
    from inverse.inference.result import rebuild

    inversion = rebuild(result)
    density = result["sample_stats"]["lp"].values
    place = np.unravel_index(int(np.argmax(density)), density.shape)
    values = np.array([[result["posterior"][name].values[place] for name in inversion.names]])
    physical = np.array([name not in inversion.noise_names for name in inversion.names])
    draw = inversion.posterior.parameters.to_z(values)[0]
    return inversion, refine(inversion.posterior, physical, draw).z


def _with_traces(inversion: Any) -> Inversion:
    if not hasattr(getattr(inversion, "posterior", None), "members"):
        raise ValueError("budget takes the fit of an Inversion; this fit is of another kind of problem.")
    return inversion


def _gradients(inversion: Inversion, linear: Linearised) -> tuple[dict[str, Array], dict[str, Array]]:
    """Return d(quantity)/dz, and what one spread of each constant does to a quantity at given unknowns."""
    physical = [inversion.names.index(name) for name in linear.names]
    steps = STEP * np.eye(linear.z.size)[physical]
    up, down = (_quantities(inversion, linear.z + sign * steps) for sign in (1, -1))
    with np.errstate(invalid="ignore"):
        slopes = {name: (up[name] - down[name]) / (2 * STEP) for name in up}
    direct = {name: np.zeros(len(linear.constants)) for name in up}
    for k, constant in enumerate(linear.constants):
        low, high = constant_ends(constant)
        below, above = (_quantities(inversion, linear.z[None], (constant.name, end)) for end in (low, high))
        with np.errstate(invalid="ignore"):
            for name in direct:
                direct[name][k] = (above[name] - below[name])[0] / (high - low)
    return slopes, direct


def _quantities(inversion: Inversion, z: Array, change: tuple[str, float] | None = None) -> dict[str, Array]:
    """Return the unknowns other than noise and what follows from them, shape (n,), one constant moved."""
    named = inversion.posterior.parameters.named(inversion.posterior.parameters.to_values(z))
    out = {name: v for name, v in named.items() if name not in inversion.noise_names}
    for member in inversion.posterior.members:
        bound, prefix = member.model.bound, f"{member.label}:" if member.label else ""
        local = member.local(named)
        fixed = moved(member, *change).fixed if change else {}
        found = derived(bound, {**local, **{name: np.full(len(z), v) for name, v in fixed.items()}})
        out |= {prefix + name: found[name] for name in derived(bound, local)}
    return out


def _split(linear: Linearised, gradient: Array, direct: Array) -> dict[str, float]:
    response = linear.covariance @ gradient
    out = {
        source: float(np.sqrt(max(float(response @ score @ response), 0.0)))
        for source, score in linear.scores.items()
    }
    out |= {f"prior of {name}": abs(float(r)) for name, r in zip(linear.names, response, strict=True)}
    shifts = gradient @ linear.shifts + direct
    return out | {f"constant {c.name}": abs(float(m)) for c, m in zip(linear.constants, shifts, strict=True)}


def _warning(inversion: Inversion, constant: FixedConstant, moves: Sequence[tuple[str, float, float]]) -> str:
    origin = "stated" if constant.stated else "assumed, as none was given"
    own = "" if constant.unit == "1" else f" {constant.unit}"
    units = {name: f" {unit}" if (unit := inversion.units[name]) != "1" else "" for name, _, _ in moves}
    (name, size, ratio), *others = moves[:_NAMED]
    said = [f"{name} by {plain(size)}{units[name]}, {plain(ratio)} times its standard deviation"]
    said += [f"{n} by {plain(s)}{units[n]} ({plain(r)} times)" for n, s, r in others]
    if len(moves) > _NAMED:
        said.append(f"{len(moves) - _NAMED} more by more than theirs")
    return (
        f"The fixed constant {constant.name} = {constant.value:.4g}{own} (standard uncertainty "
        f"{constant.spread:.2g}, {origin}) moves {', '.join(said)}; give it a prior, or say how well it is known."
    )
