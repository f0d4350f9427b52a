"""What a site's draws say by themselves: their density with the prior and its Jacobian divided out, as a table.

Draws weighted by one over the prior's density are distributed as the likelihood. They are fitted by a mixture of
normals, cut where the prior's support ends, in the value or (for a bond so weak that only its stiffness is bounded) in
its inverse: near a perfect bond a trace depends linearly on the compliance, so the likelihood is close to normal in
it, and on the logarithmic scale it runs into a plateau towards zero compliance, with no bound.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from inverse.study.stiffness.tabulated import DEPTH, PER_WIDTH, Tabulated, trimmed

__all__ = ["Mixture", "fit_mixture", "site_likelihood"]

Array = NDArray[np.float64]

FEWEST_DRAWS = 50
_MOST_NORMALS = 3
_ROUNDS = 300
_NARROWEST = 0.02  # of the draws' standard deviation
_MOST_MISSING = 0.98
_LEAST_SHARE = 0.3  # of the draws that must be effective once weighted
_FAR = 40.0  # standard deviations
_FLAT = 0.03  # of a normal's width: closer to zero its density no longer changes


@dataclass(frozen=True)
class Mixture:
    """Normals whose weighted sum, within bounds, is a density.

    Attributes
    ----------
    weight, mean, sd : array, shape (normals,)
    """

    weight: Array
    mean: Array
    sd: Array

    def log(self, y: Array) -> Array:
        """Return the logarithm of the sum, shape of `y`."""
        each = -0.5 * ((y[..., None] - self.mean) / self.sd) ** 2 - np.log(self.sd * np.sqrt(2 * np.pi))
        top = each.max(axis=-1)
        return np.asarray(top + np.log((np.exp(each - top[..., None]) * self.weight).sum(axis=-1)))


def site_likelihood(draws: Array, prior: Any, *, logarithmic: bool) -> Tabulated:
    """Tabulate the likelihood of a quantity, or of its logarithm.

    Parameters
    ----------
    draws : array, shape (n,)
        Posterior draws of the quantity, at least 50.
    prior : frozen scipy.stats distribution or None
        The prior under which they were drawn; None for a flat one in the variable of the table.
    logarithmic : bool
        Tabulate over the natural logarithm.

    Returns
    -------
    Tabulated
        With a plateau to the left (right) where nothing bounds the logarithm from below (above).

    Raises
    ------
    ValueError
        If there are too few draws, or they are not finite, not positive or outside the prior.
    """
    values = _checked(np.asarray(draws, dtype=float).ravel(), prior, logarithmic)
    if prior is None:
        x = np.log(values) if logarithmic else values
        return _linear_table(fit_mixture(x, np.ones(x.size)))
    density, enough = prior.logpdf(values), _LEAST_SHARE * values.size
    direct, inverse = _inverse(density), _inverse(density + 2 * np.log(np.abs(values)))
    low, high = (float(b) for b in prior.support())
    if _effective(direct) >= max(enough, 0.9 * _effective(inverse) if logarithmic else 0.0):
        mixture = fit_mixture(values, direct, max(low, 0.0) if logarithmic else low, high)
        return _logarithmic_table(mixture) if logarithmic else _linear_table(mixture)
    if logarithmic and _effective(inverse) >= enough:
        turned = fit_mixture(1 / values, inverse, 1 / high, 1 / low if low > 0 else np.inf)
        return _logarithmic_table(turned).mirrored()
    return _divided_table(values, prior, logarithmic)


def fit_mixture(y: Array, weight: Array, low: float = -np.inf, high: float = np.inf) -> Mixture:
    """Fit one to three normals, cut at `low` and `high`, by expectation maximisation.

    Parameters
    ----------
    y, weight : array, shape (n,)
        Points and their weights.
    low, high : float
        Bounds within which the points were seen.

    Notes
    -----
    A normal is added while the Bayesian information criterion, at the weights' effective number, asks for it.
    Each step also counts the points that the bounds have hidden. Dempster, Laird and Rubin, J. R. Stat. Soc. B 39
    (1977) 1, treat truncated data so (from memory).
    """
    share = weight / weight.sum()
    centre = float(share @ y)
    scale = float(np.sqrt(share @ (y - centre) ** 2)) or max(abs(centre), 1.0) * 1e-9
    t, bounds = (y - centre) / scale, ((low - centre) / scale, (high - centre) / scale)
    best, lowest = None, np.inf
    for count in range(1, _MOST_NORMALS + 1):
        made, log_likelihood = _maximise(t, share, _guess(t, share, count), bounds)
        criterion = -2 * _effective(weight) * log_likelihood + (3 * count - 1) * np.log(_effective(weight))
        if criterion >= lowest:
            break
        best, lowest = made, criterion
    assert best is not None
    return Mixture(best.weight, centre + scale * best.mean, scale * best.sd)


def _checked(values: Array, prior: Any, logarithmic: bool) -> Array:
    distinct = np.unique(values).size
    if distinct < FEWEST_DRAWS:
        raise ValueError(
            f"got {values.size} draws, {distinct} of them distinct; at least {FEWEST_DRAWS} are needed to see a "
            "likelihood's shape."
        )
    if not np.isfinite(values).all():
        raise ValueError(
            f"{(~np.isfinite(values)).sum()} of {values.size} draws are not finite; compare the inverse quantity "
            "(the compliance in place of the stiffness) or leave the site out."
        )
    if logarithmic and (values <= 0).any():
        raise ValueError(
            f"{(values <= 0).sum()} of {values.size} draws are zero or negative, which have no logarithm; "
            "give scale='linear'."
        )
    if prior is not None and not np.isfinite(prior.logpdf(values)).all():
        raise ValueError(
            "some draws lie outside the prior's support; give the prior under which they were drawn."
        )
    return values


def _inverse(log_density: Array) -> Array:
    return np.exp(log_density.min() - log_density)


def _effective(weight: Array) -> float:
    return float(weight.sum() ** 2 / (weight @ weight))


def _guess(t: Array, share: Array, count: int) -> Mixture:
    """Cut the points at their largest gaps' side of equal shares: one normal for each part."""
    order = np.argsort(t)
    part = np.empty(t.size, dtype=int)
    part[order] = np.minimum((np.cumsum(share[order]) * count).astype(int), count - 1)
    mass = np.array([share[part == k].sum() for k in range(count)])
    mean = np.array([share[part == k] @ t[part == k] for k in range(count)]) / mass
    square = np.array([share[part == k] @ (t[part == k] - mean[k]) ** 2 for k in range(count)]) / mass
    return Mixture(mass, mean, np.maximum(np.sqrt(square), _NARROWEST))


def _maximise(t: Array, share: Array, start: Mixture, bounds: tuple[float, float]) -> tuple[Mixture, float]:
    now, before = start, -np.inf
    for _ in range(_ROUNDS):
        made, log_likelihood = _step(t, share, now, bounds)
        if log_likelihood - before < 1e-7:
            break
        now, before = made, log_likelihood
    return now, log_likelihood


def _step(t: Array, share: Array, now: Mixture, bounds: tuple[float, float]) -> tuple[Mixture, float]:
    """Improve a mixture once; return it with the log likelihood of the one before."""
    d = t[:, None] - now.mean
    each = now.weight / now.sd * np.exp(-0.5 * (d / now.sd) ** 2) / np.sqrt(2 * np.pi) + 1e-300
    inside, first, second = _hidden(now, bounds)
    visible = max(float(now.weight @ inside), 1 - _MOST_MISSING)
    total = each.sum(axis=1)
    log_likelihood = float(share @ np.log(total)) - np.log(visible)
    belong = share[:, None] * each / total[:, None]
    unseen = now.weight / visible
    mass = belong.sum(axis=0) + unseen * (1 - inside)
    by = (np.einsum("nk,nk->k", belong, d) + unseen * first) / mass
    square = (np.einsum("nk,nk,nk->k", belong, d, d) + unseen * second) / mass - by**2
    sd = np.sqrt(np.maximum(square, _NARROWEST**2))
    return Mixture(mass / mass.sum(), now.mean + by, sd), log_likelihood


def _hidden(now: Mixture, bounds: tuple[float, float]) -> tuple[Array, Array, Array]:
    """Return each normal's share within the bounds, and its first two moments about its mean outside them."""
    a, b = ((bound - now.mean) / now.sd for bound in bounds)
    inside = ndtr(b) - ndtr(a)
    phi_a, phi_b = (np.exp(-0.5 * np.minimum(e * e, 1e4)) / np.sqrt(2 * np.pi) for e in (a, b))
    tail = np.where(np.isfinite(b), b, 0.0) * phi_b - np.where(np.isfinite(a), a, 0.0) * phi_a
    return inside, now.sd * (phi_b - phi_a), now.sd**2 * (1 - inside + tail)


def _divided_table(values: Array, prior: Any, logarithmic: bool) -> Tabulated:
    """Divide a mixture fitted to the draws themselves by the prior: for a prior that pulls so hard that weights fail.

    Where the quotient still rises at the end of the range, the draws say nothing of what lies beyond, and it is held
    constant from six standard deviations on.
    """
    x = np.log(values) if logarithmic else values
    mixture, middle, sd = fit_mixture(x, np.ones(x.size)), float(x.mean()), float(x.std())

    def log_quotient(at: Array) -> Array:
        y = np.exp(at) if logarithmic else at
        with np.errstate(divide="ignore", invalid="ignore"):
            log = mixture.log(at) - prior.logpdf(y) - (at if logarithmic else 0.0)
        return np.where(np.isfinite(log), log, -np.inf)

    grid = np.linspace(middle - _FAR * sd, middle + _FAR * sd, 2001)
    log = log_quotient(grid)
    rises = bool(log[0] > log[1]), bool(log[-1] > log[-2])
    low, high = (middle + side * (6 if up else _FAR) * sd for side, up in zip((-1, 1), rises, strict=True))
    inside = log[(grid >= low) & (grid <= high)]
    width = max(float((inside > inside.max() - 0.5).sum()) * (grid[1] - grid[0]) / 2, float(mixture.sd.min()))
    fine = np.linspace(low, high, min(int((high - low) / width * PER_WIDTH) + 2, 4000))
    log = log_quotient(fine) - inside.max()
    ends = [float(value) if up else -np.inf for value, up in zip((log[0], log[-1]), rises, strict=True)]
    return trimmed(Tabulated(float(low), float(fine[1] - fine[0]), log, ends[0], ends[1], width))


def _linear_table(mixture: Mixture) -> Tabulated:
    reach = np.sqrt(2 * DEPTH)
    width = float(mixture.sd.min())
    low, high = (mixture.mean - reach * mixture.sd).min(), (mixture.mean + reach * mixture.sd).max()
    return _tabulate(mixture, float(low), float(high), width, logarithmic=False)


def _logarithmic_table(mixture: Mixture) -> Tabulated:
    """Tabulate over the logarithm, from where the density no longer changes or from the first normal's far end."""
    reach = np.sqrt(2 * DEPTH)
    ends = mixture.mean + reach * mixture.sd
    counted = mixture.weight > 1e-3
    starts = np.where(
        mixture.mean - reach * mixture.sd > 0, mixture.mean - reach * mixture.sd, _FLAT * mixture.sd
    )
    width = float((mixture.sd / (np.maximum(mixture.mean, 0) + 2 * mixture.sd))[counted].min())
    low, high = float(np.log(starts.min())), float(np.log(ends.max()))
    return _tabulate(mixture, low, high, width, logarithmic=True)


def _tabulate(mixture: Mixture, low: float, high: float, width: float, *, logarithmic: bool) -> Tabulated:
    step = max(width / PER_WIDTH, (high - low) / 4000)
    x = np.linspace(low, high + step, int((high - low) / step) + 2)
    step = float(x[1] - x[0])
    log = mixture.log(np.exp(x) if logarithmic else x)
    left = float(mixture.log(np.zeros(1))[0]) if logarithmic else -np.inf
    return trimmed(Tabulated(low, step, log - log.max(), left - float(log.max()), -np.inf, width))
