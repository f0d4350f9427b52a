"""How much probability each minimum holds in the draws, whether the ensembles agree, and what may be hidden."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from inverse.description.unknowns import rebuild_prior
from inverse.description.wording import percent, plus_minus
from inverse.inference.checks.posterior_draws import sampled_values
from inverse.inference.mcmc.convergence import effective_sample_size
from inverse.inference.minima.least_squares import Fit
from inverse.inference.problem.parameters import parameters

__all__ = ["BasinShare", "BasinShares", "basins", "minima_record"]

Array = NDArray[np.float64]

FAR = 5.0
"""Draws further than this from every minimum (Mahalanobis distance over root unknowns) belong to none for sure."""

_FEW_PASSAGES = 10
_BETTER = 2.0


@dataclass(frozen=True)
class BasinShare:
    """One minimum and the probability it holds.

    Attributes
    ----------
    values : mapping of str to float
        Unknowns at the minimum.
    approximate : float
        Share in the normal approximations of least squares.
    probability, error : float
        Share of the draws, and its Monte Carlo standard error.
    by_ensemble, errors : array, shape (ensembles,)
        The same for each ensemble.
    """

    values: Mapping[str, float]
    approximate: float
    probability: float
    error: float
    by_ensemble: Array
    errors: Array


@dataclass(frozen=True, repr=False)
class BasinShares:
    """The minima of a result and the probability each holds, in the order of least squares.

    Attributes
    ----------
    minima : tuple of BasinShare
        None is left out, whatever it holds.
    passages : int
        Times a walker went from one basin to another.
    warnings : tuple of str
    """

    minima: tuple[BasinShare, ...]
    passages: int
    warnings: tuple[str, ...]

    def __str__(self) -> str:
        """Write a line per minimum, then the warnings."""
        rows = [
            f"minimum {i + 1}: {_share(m.probability, m.error)} of the draws "
            f"(ensembles {', '.join(percent(p, 3) for p in m.by_ensemble)}; "
            f"least squares {percent(m.approximate, 3)}) at {_at(m.values)}"
            for i, m in enumerate(self.minima)
        ]
        return "\n".join([*rows, *self.warnings])

    __repr__ = __str__


def minima_record(fit: Fit) -> list[dict[str, Any]]:
    """Describe the minima of a fit as plain JSON data, for the result."""
    return [
        {
            "values": dict(zip(fit.names, map(float, b.values), strict=True)),
            "weight": float(b.weight),
            "log_posterior": float(b.log_posterior),
            "z": b.z.tolist(),
            "covariance_z": b.covariance_z.tolist(),
        }
        for b in fit.minima
    ]


def basins(result: Any) -> BasinShares:
    """Report how much probability each minimum of a problem holds.

    Parameters
    ----------
    result : xarray.DataTree
        From `sample_posterior` or `load`.

    Returns
    -------
    BasinShares
        Prints a line per minimum.

    Raises
    ------
    ValueError
        If the result has no draws or no record of minima.

    Notes
    -----
    A draw belongs to the minimum that is nearest in the Mahalanobis distance of the normal approximation there,
    noise unknowns apart.
    """
    minima = _minima(result)
    names = tuple(minima[0]["values"])
    posterior = result["posterior"].to_dataset()
    priors = {name: rebuild_prior(json.loads(posterior[name].attrs["prior"])) for name in names}
    values = sampled_values(result, names)
    chains, draws, size = values.shape
    physical = np.array([posterior[name].attrs.get("role") != "noise" for name in names])
    physical = physical if physical.any() else np.ones(size, dtype=bool)
    z = parameters(priors).to_z(values.reshape(-1, size))[:, physical]
    distance = np.stack([_distance(z, minimum, physical) for minimum in minima])
    label = distance.argmin(axis=0).reshape(chains, draws)
    lp = np.asarray(result["sample_stats"]["lp"].transpose("chain", "draw"), dtype=float)
    shares = tuple(_one(minimum, label == i, lp) for i, minimum in enumerate(minima))
    passages = _passages(label, posterior)
    far = float(np.mean(distance.min(axis=0) > FAR))
    warned = [*_disagreement(shares), *_stuck(shares, passages), *_hidden(minima, label, lp, far)]
    return BasinShares(shares, passages, tuple(warned))


def _minima(result: Any) -> list[dict[str, Any]]:
    if "posterior" not in getattr(result, "children", ()) or "inverse" not in result.attrs:
        raise ValueError(f"basins takes the result of sample_posterior, not {type(result).__name__}.")
    minima = json.loads(result.attrs["inverse"]).get("minima", [])
    if not minima or "covariance_z" not in minima[0]:
        raise ValueError("The result holds no record of minima; sample again with this version.")
    return list(minima)


def _distance(z: Array, minimum: Mapping[str, Any], physical: NDArray[np.bool_]) -> Array:
    covariance = np.array(minimum["covariance_z"])[np.ix_(physical, physical)]
    delta = z - np.array(minimum["z"])[physical]
    square = np.einsum("ni,ij,nj->n", delta, np.linalg.pinv(covariance, hermitian=True), delta)
    return np.sqrt(np.maximum(square, 0) / physical.sum())


def _one(minimum: Mapping[str, Any], inside: NDArray[np.bool_], lp: Array) -> BasinShare:
    share = inside.mean(axis=1)
    errors = np.array([_error(row, log) for row, log in zip(inside, lp, strict=True)])
    between = float(share.std(ddof=1) / np.sqrt(share.size)) if share.size > 1 else 0.0
    within = float(np.sqrt((errors**2).sum()) / errors.size)
    return BasinShare(
        minimum["values"], float(minimum["weight"]), float(share.mean()), max(between, within), share, errors
    )


def _error(inside: NDArray[np.bool_], lp: Array) -> float:
    """Return the standard error of a share in one ensemble, as if one more draw lay on either side."""
    size = effective_sample_size(inside[None].astype(float))
    if not np.isfinite(size):
        size = effective_sample_size(lp[None])
    size = size if np.isfinite(size) else float(inside.size)
    share = (inside.mean() * size + 1) / (size + 2)
    return float(np.sqrt(share * (1 - share) / size))


def _passages(label: NDArray[np.int_], posterior: Any) -> int:
    """Count the steps at which a walker's basin changes; draws stand walker after walker."""
    changed = np.diff(label, axis=1) != 0
    if "walker" in posterior.coords:
        changed &= np.diff(np.asarray(posterior["walker"]))[None] == 0
    return int(changed.sum())


def _disagreement(shares: Sequence[BasinShare]) -> list[str]:
    from scipy.special import chdtrc

    out = []
    for i, s in enumerate(shares):
        chi_square = float((((s.by_ensemble - s.by_ensemble.mean()) / s.errors) ** 2).sum())
        if len(s.errors) > 1 and chdtrc(len(s.errors) - 1, chi_square) < 0.01:
            low, high = s.by_ensemble.min(), s.by_ensemble.max()
            out.append(
                f"The ensembles disagree on minimum {i + 1}: from {percent(low)} to {percent(high)} of their "
                "draws; sample longer before trusting any share."
            )
    return out


def _stuck(shares: Sequence[BasinShare], passages: int) -> list[str]:
    held = sum(s.probability > 0 for s in shares)
    if held < 2 or passages >= _FEW_PASSAGES:
        return []
    return [
        f"Walkers went from one minimum to another {passages} times in all: the shares are still those of the starting "
        "points."
    ]


def _hidden(minima: Sequence[Mapping[str, Any]], label: NDArray[np.int_], lp: Array, far: float) -> list[str]:
    out = []
    for i, minimum in enumerate(minima):
        inside = lp[label == i]
        better = inside.max() - minimum["log_posterior"] if inside.size else 0.0
        if better > _BETTER:
            out.append(
                f"Draws near minimum {i + 1} are better than it by {better:.1f} in log posterior: there is a minimum "
                "that least squares did not find; give it more starts."
            )
    if far > 0.01:
        out.append(
            f"{percent(far)} of the draws lie more than {FAR:.0f} deviations from every minimum: another minimum, "
            "or a posterior far from normal."
        )
    return out


def _share(probability: float, error: float) -> str:
    if probability == 0:
        return f"under {percent(3 * error, 1)}"
    return f"{plus_minus(100 * probability, 100 * error)} %"


def _at(values: Mapping[str, float]) -> str:
    return ", ".join(f"{name} {value:.4g}" for name, value in values.items() if not name.startswith("noise."))
