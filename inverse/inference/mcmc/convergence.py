"""How far a set of ensembles has come: burn-in, effective sample size, split R-hat and drift.

The walkers of one ensemble are not independent chains, so a chain here is a whole ensemble. Its draws are
laid out walker after walker (walker-major); laid out step after step, successive draws would belong to
different walkers and the effective sample size would come out tens of times too large. Because halves of a
walker-major chain compare walkers and not times, the drift from the first to the last third of the steps is
checked separately.

References
----------
Vehtari, Gelman, Simpson, Carpenter and Buerkner, Bayesian Analysis 16 (2021) 667: rank-normalised split
R-hat, bulk and tail effective sample size. Geyer, Statistical Science 7 (1992) 473: initial positive and
monotone sequences. Sokal, Monte Carlo Methods in Statistical Mechanics (1997): automatic windowing of the
autocorrelation time. All three from memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft
from scipy.special import ndtri

TAIL_QUANTILES = (0.05, 0.95)
SOKAL_WINDOW = 5.0
BURN_IN_TIMES = 5.0
MOST_BURN_IN = 0.5
MOST_DRIFT = 3.5
FEWEST_STEPS = 100
DISAGREEMENT = 1.1


def walker_major(values: np.ndarray) -> np.ndarray:
    """Lay one chain per ensemble, walker after walker.

    Parameters
    ----------
    values : ndarray, shape (ensembles, steps, walkers)

    Returns
    -------
    ndarray, shape (ensembles, walkers * steps)
    """
    ensembles, steps, walkers = values.shape
    return values.transpose(0, 2, 1).reshape(ensembles, walkers * steps)


def split_chains(chains: np.ndarray) -> np.ndarray:
    """Cut every chain in two halves; the middle draw of an odd number is left out."""
    half = chains.shape[1] // 2
    return np.concatenate([chains[:, :half], chains[:, chains.shape[1] - half :]])


def rank_normalise(values: np.ndarray) -> np.ndarray:
    """Replace values by normal scores of their average ranks, z = Phi^-1((r - 3/8) / (S + 1/4))."""
    flat = values.ravel()
    order = np.argsort(flat)
    ordered = flat[order]
    is_first = np.concatenate([[True], ordered[1:] != ordered[:-1]])
    edges = np.append(np.flatnonzero(is_first), flat.size)
    average_rank = 0.5 * (edges[:-1] + edges[1:] + 1)
    scores = np.empty(flat.size)
    scores[order] = np.repeat(ndtri((average_rank - 0.375) / (flat.size + 0.25)), np.diff(edges))
    return scores.reshape(values.shape)


def _mean_autocovariance(chains: np.ndarray) -> np.ndarray:
    """Autocovariance at every lag (sum over pairs, over the number of draws), averaged over chains."""
    draws = chains.shape[1]
    length = fft.next_fast_len(2 * draws, real=True)
    spectrum = fft.rfft(chains - chains.mean(axis=1, keepdims=True), n=length, axis=1)
    power = (spectrum.real**2 + spectrum.imag**2).mean(axis=0)
    return fft.irfft(power, n=length)[:draws] / draws


def effective_sample_size(chains: np.ndarray) -> float:
    """Effective sample size of the mean of several chains, by Geyer's initial monotone sequence.

    Parameters
    ----------
    chains : ndarray, shape (chains, draws)
        Taken as they are: neither split nor rank-normalised.

    Returns
    -------
    float
        S / tau with tau = -1 + 2 sum of the paired autocorrelations; NaN for fewer than 4 draws or values not
        finite.
    """
    chains = np.asarray(chains, dtype=float)
    count, draws = chains.shape
    if draws < 4 or not np.isfinite(chains).all():
        return np.nan
    if np.ptp(chains) < np.finfo(float).resolution:
        return float(chains.size)
    covariance = _mean_autocovariance(chains)
    within = covariance[0] * draws / (draws - 1)
    total = covariance[0] + (chains.mean(axis=1).var(ddof=1) if count > 1 else 0.0)
    correlation = 1.0 - (within - covariance) / total
    correlation[0] = 1.0
    shortest = 1.0 / np.log10(chains.size)
    return chains.size / max(_geyer_time(correlation), shortest)


def _geyer_time(correlation: np.ndarray) -> float:
    """Autocorrelation time from sums of neighbouring lags, cut where they turn negative and made monotone."""
    pairs = correlation[: correlation.size // 2 * 2].reshape(-1, 2).sum(axis=1)
    last = (correlation.size - 3) // 2
    negative = np.flatnonzero(pairs[:last] <= 0.0)
    last = int(negative[0]) if negative.size else last
    monotone = np.minimum.accumulate(pairs[:last])
    return float(-1.0 + 2.0 * monotone.sum() + max(correlation[2 * last], 0.0))


def bulk_ess(chains: np.ndarray) -> float:
    """Effective sample size of the rank-normalised split chains, for the location of a posterior."""
    return effective_sample_size(rank_normalise(split_chains(chains)))


def tail_ess(chains: np.ndarray) -> float:
    """Smaller effective sample size of the indicators of the 5 % and 95 % quantiles, for interval ends."""
    halves = split_chains(chains)
    limits = np.quantile(chains, TAIL_QUANTILES)
    return float(min(effective_sample_size(halves <= limit) for limit in limits))


def _plain_rhat(chains: np.ndarray) -> float:
    """Ratio of the spread of all draws to the spread within chains, R^2 = (B / W + n - 1) / n."""
    draws = chains.shape[1]
    within = chains.var(axis=1, ddof=1).mean()
    if within == 0.0:
        return np.nan
    between = draws * chains.mean(axis=1).var(ddof=1)
    return float(np.sqrt((between / within + draws - 1) / draws))


def split_rhat(chains: np.ndarray) -> float:
    """Rank-normalised split R-hat: the larger one of the values (location) and the folded values (spread)."""
    if chains.shape[1] < 4:
        return np.nan
    halves = split_chains(chains)
    folded = np.abs(halves - np.median(halves))
    return max(_plain_rhat(rank_normalise(halves)), _plain_rhat(rank_normalise(folded)))


def integrated_time(values: np.ndarray) -> float:
    """Integrated autocorrelation time along the steps, averaged over walkers and ensembles.

    Parameters
    ----------
    values : ndarray, shape (ensembles, steps, walkers)

    Returns
    -------
    float
        In steps. The mean of each ensemble, not of each walker, is taken off, which would hide slow walkers.
    """
    steps = values.shape[1]
    length = fft.next_fast_len(2 * steps, real=True)
    centred = values - values.mean(axis=(1, 2), keepdims=True)
    spectrum = fft.rfft(centred, n=length, axis=1)
    power = (spectrum.real**2 + spectrum.imag**2).mean(axis=(0, 2))
    covariance = fft.irfft(power, n=length)[:steps] / np.arange(steps, 0, -1)
    if covariance[0] <= 0.0:
        return np.nan
    times = 2.0 * np.cumsum(covariance / covariance[0]) - 1.0
    inside = np.flatnonzero(np.arange(steps) >= SOKAL_WINDOW * times)
    return float(max(times[inside[0] if inside.size else -1], 1.0))


def settling_step(log_prob: np.ndarray) -> int:
    """First step at which every ensemble's median log density is within 2 deviations of its later mean.

    Parameters
    ----------
    log_prob : ndarray, shape (ensembles, steps, walkers)
    """
    level = np.median(log_prob, axis=2)
    later = level[:, level.shape[1] // 2 :]
    near = np.abs(level - later.mean(axis=1, keepdims=True)) <= 2.0 * later.std(axis=1, keepdims=True)
    return int(np.max(np.where(near.any(axis=1), near.argmax(axis=1), level.shape[1])))


def burn_in_steps(log_prob: np.ndarray, time: float) -> int:
    """Choose the steps to drop: five autocorrelation times, and twice the step of settling.

    Parameters
    ----------
    log_prob : ndarray, shape (ensembles, steps, walkers)
    time : float
        Longest autocorrelation time, in the steps of `log_prob`.

    Returns
    -------
    int
        Not limited: more than half of the steps means that the run has not left its burn-in.
    """
    return max(int(np.ceil(BURN_IN_TIMES * time)), 2 * settling_step(log_prob))


def drift(values: np.ndarray, ess: float) -> float:
    """Difference of the means of the first and last third of the steps, in its Monte Carlo deviations.

    Parameters
    ----------
    values : ndarray, shape (ensembles, steps, walkers)
    ess : float
        Effective sample size of all of them; a third is taken to hold a third of it.
    """
    third = max(values.shape[1] // 3, 1)
    difference = values[:, -third:].mean() - values[:, :third].mean()
    deviation = values.std() * np.sqrt(6.0 / ess)
    return float(difference / deviation) if deviation > 0.0 else 0.0


@dataclass(frozen=True)
class Convergence:
    """What the stored steps of several ensembles are worth.

    Attributes
    ----------
    burn_in : int
        Stored steps dropped at the start.
    settled : bool
        Whether burn-in took no more than half of the steps.
    autocorrelation_time : ndarray, shape (d,)
        In stored steps, from the second half of the run.
    ess, ess_tail, rhat, drift : ndarray, shape (d,)
        Of the kept steps: bulk and tail effective sample size, split R-hat between ensembles, drift in Monte
        Carlo deviations.
    log_prob_drift : float
        The same drift of the log density.
    """

    burn_in: int
    settled: bool
    autocorrelation_time: np.ndarray
    ess: np.ndarray
    ess_tail: np.ndarray
    rhat: np.ndarray
    drift: np.ndarray
    log_prob_drift: float

    @property
    def least_ess(self) -> float:
        """Smallest effective sample size, bulk or tail, of any name; NaN where one is unknown."""
        return float(min(self.ess.min(), self.ess_tail.min()))

    @property
    def largest_rhat(self) -> float:
        """Largest R-hat of any name; NaN where one is unknown."""
        return float(self.rhat.max())

    @property
    def largest_drift(self) -> float:
        """Largest drift of any name or of the log density, in Monte Carlo deviations."""
        return float(max(np.abs(self.drift).max(), abs(self.log_prob_drift)))

    def meets(self, ess: float, rhat: float) -> bool:
        """Tell whether both targets are met by every name, after burn-in and without drift."""
        calm = self.settled and self.largest_drift <= MOST_DRIFT
        return calm and self.least_ess >= ess and self.largest_rhat <= rhat


@dataclass(frozen=True)
class BurnIn:
    """What the second half of a run says about its start.

    Attributes
    ----------
    steps : int
        Stored steps to drop, at most half of them.
    settled : bool
        Whether half of them was enough.
    times : ndarray, shape (d,)
        Autocorrelation times, in stored steps.
    """

    steps: int
    settled: bool
    times: np.ndarray


def find_burn_in(chain: np.ndarray, log_prob: np.ndarray) -> BurnIn:
    """Choose the burn-in from the autocorrelation times and the settling of the log density.

    Parameters
    ----------
    chain : ndarray, shape (ensembles, steps, walkers, d)
    log_prob : ndarray, shape (ensembles, steps, walkers)
        Finite.
    """
    steps = chain.shape[1]
    later = slice(steps // 2, steps)
    times = np.array([integrated_time(chain[:, later, :, k]) for k in range(chain.shape[3])])
    longest = max(np.nanmax(times, initial=1.0), integrated_time(log_prob[:, later]))
    wanted, most = burn_in_steps(log_prob, longest), int(MOST_BURN_IN * steps)
    return BurnIn(min(wanted, most), wanted <= most, times)


def rough_ess(chain: np.ndarray, burn_in: BurnIn) -> float:
    """Divide the kept draws by the longest autocorrelation time: cheap, rather too large than small."""
    ensembles, steps, walkers, _ = chain.shape
    return float(ensembles * walkers * (steps - burn_in.steps) / np.nanmax(burn_in.times, initial=1.0))


def rough_rhat(chain: np.ndarray, burn_in: BurnIn) -> float:
    """Find the largest R-hat between ensembles, split but not rank-normalised: cheap."""
    kept = chain[:, burn_in.steps :]
    chains = (walker_major(kept[..., k]) for k in range(chain.shape[3]))
    return max(_plain_rhat(split_chains(values)) for values in chains)


def assess(chain: np.ndarray, log_prob: np.ndarray, burn_in: BurnIn) -> Convergence:
    """Compute the convergence numbers of what is left after burn-in.

    Parameters
    ----------
    chain : ndarray, shape (ensembles, steps, walkers, d)
        Burn-in included.
    log_prob : ndarray, shape (ensembles, steps, walkers)
        Finite.
    burn_in : BurnIn
        From `find_burn_in`.

    Returns
    -------
    Convergence
    """
    kept, kept_log_prob = chain[:, burn_in.steps :], log_prob[:, burn_in.steps :]
    names = range(chain.shape[3])
    chains = [walker_major(kept[..., k]) for k in names]
    ess = np.array([bulk_ess(values) for values in chains])
    return Convergence(
        burn_in=burn_in.steps,
        settled=burn_in.settled,
        autocorrelation_time=burn_in.times,
        ess=ess,
        ess_tail=np.array([tail_ess(values) for values in chains]),
        rhat=np.array([split_rhat(values) for values in chains]),
        drift=np.array([drift(kept[..., k], ess[k]) for k in names]),
        log_prob_drift=drift(kept_log_prob, bulk_ess(walker_major(kept_log_prob))),
    )
