"""Whether the model describes the trace: posterior predictive checks and a verdict in plain words.

Residuals are taken at draws of the posterior with the linear coefficients drawn too, and standardised by their
prediction from earlier ones (`inverse.inference.checks.residuals.innovations`). Over draws of unknowns, coefficients
and data from the joint model these are independent N(0, 1), so that the reference distribution of every statistic is
that of independent normal numbers, whatever the spacing of the delays. A posterior predictive p is the mean over
draws; it errs towards 0.5 (Gelman, Meng and Stern 1996, from memory), hence a small one is a strong statement.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc, log_ndtr

from inverse.description.arguments import whole_number
from inverse.inference.checks.drift_ratio import DriftTest, drift_tests
from inverse.inference.checks.posterior_draws import posterior_draws
from inverse.inference.checks.residuals import Replicates, autocorrelation, replicates
from inverse.inference.inversion import Inversion

__all__ = ["ChannelCheck", "ModelCheck", "check_model", "ljung_box", "noise_warnings"]

Array = NDArray[np.float64]

CORRELATED = 0.01
"""Residuals count as autocorrelated where the Ljung-Box p is below this, or that of the drift test below twice it."""

FAR = 4.0
"""A point this many deviations off is an outlier."""

_TAIL = 0.001
_LAGS = 20
_REFERENCE = 4000
_DRAWS = 100
_QUANTILES = (0.025, 0.16, 0.5, 0.84, 0.975)


@dataclass(frozen=True)
class ChannelCheck:
    """Checks of one channel.

    Attributes
    ----------
    name, unit : str
    delay : array, shape (delays,)
        Fitted delays, ps.
    residual, innovation : array, shape (delays,)
        Means over draws: data less model, and standardised prediction errors.
    bands : array, shape (5, delays)
        2.5, 16, 50, 84 and 97.5 % quantiles of replicated data, noise included.
    inside : tuple of float
        Share of the data within the 68 % and the 95 % band.
    autocorrelation : array, shape (lags,)
        Of the innovations at lags 1, 2, ... in points, mean over draws.
    p_correlation, p_chi_square, p_largest : float
        Posterior predictive p of the Ljung-Box statistic, of the sum of squares, and of the largest
        innovation in size; the last two are NaN under Student's t noise, whose innovations are not normal.
    outliers : array, shape (outliers,)
        Delays of innovations beyond 4 deviations, ps.
    noise_model : str
    white : float
        Median white noise level.
    p_drift : float
        p of the likelihood-ratio test for a correlated part (`inverse.inference.checks.drift_ratio`) under white
        noise; it sees a drift that the fitted curve has bent towards. NaN under correlated noise.
    size, time : float
        Correlated part over the white one, and its correlation time in ps: medians of the noise model, or under white
        noise the best ones of the drift test.
    excess : float
        5 % quantile of `size` under correlated noise; NaN under white noise.
    """

    name: str
    unit: str
    delay: Array
    residual: Array
    innovation: Array
    bands: Array
    inside: tuple[float, float]
    autocorrelation: Array
    p_correlation: float
    p_chi_square: float
    p_largest: float
    outliers: Array
    noise_model: str
    white: float
    p_drift: float
    size: float
    time: float
    excess: float

    @property
    def problems(self) -> tuple[str, ...]:
        """What is wrong, in plain words; empty where nothing is."""
        return (*self._correlation_problems(), *self._tail_problems())

    def _correlation_problems(self) -> list[str]:
        found = f"residuals are correlated over {self.time:.2g} ps and {self.size:.2g} times the noise"
        if self.noise_model == "white" and (self.p_drift < 2 * CORRELATED or self.p_correlation < CORRELATED):
            p = min(self.p_drift, self.p_correlation)
            return [f'{found} (p {_p(p)}): the intervals are too narrow; use noise="correlated"']
        if self.p_correlation < CORRELATED:
            return [f"residuals are correlated beyond the noise model (Ljung-Box p {_p(self.p_correlation)})"]
        if self.excess > 1:
            return [
                f"{found}; the discrepancy term carries them and the intervals allow for it, but the stack or its "
                "constants are not right, or the instrument drifts that much"
            ]
        return []

    def _tail_problems(self) -> list[str]:
        if not self.p_largest < _TAIL:
            return []
        at = ", ".join(f"{d:.4g}" for d in self.outliers[:5]) or "none singled out"
        at += ", ..." * (self.outliers.size > 5)
        return [
            f"the largest residual is too large for normal noise (p {_p(self.p_largest)}): "
            f"{self.outliers.size} beyond {FAR:.0f} deviations (delays in ps: {at}); they pull the "
            'intervals off: use noise="student", or mask them if their cause is known'
        ]


@dataclass(frozen=True, repr=False)
class ModelCheck:
    """Checks of a model against its trace.

    Attributes
    ----------
    channels : tuple of ChannelCheck
    """

    channels: tuple[ChannelCheck, ...]

    @property
    def describes(self) -> bool:
        """Whether nothing speaks against the model."""
        return not any(c.problems for c in self.channels)

    @property
    def verdict(self) -> str:
        """The finding in plain words."""
        if self.describes:
            return "The model describes the trace: what is left looks like the noise of the noise model."
        said = [f"{c.name}: {p}" if len(self.channels) > 1 else p for c in self.channels for p in c.problems]
        return f"The model does not describe the trace: {'; '.join(said)}."

    def __getitem__(self, name: str) -> ChannelCheck:
        """Return the checks of one channel.

        Raises
        ------
        ValueError
            If there is no such channel.
        """
        for channel in self.channels:
            if channel.name == name:
                return channel
        raise ValueError(
            f"There is no channel '{name}'; there are {', '.join(c.name for c in self.channels)}."
        )

    def __str__(self) -> str:
        """Write the verdict and the numbers."""
        return "\n".join([self.verdict, *(_line(c) for c in self.channels)])

    __repr__ = __str__


def check_model(result: Any, *, draws: int = _DRAWS, seed: int = 0) -> ModelCheck:
    """Check whether the model of a result describes its trace.

    Parameters
    ----------
    result : xarray.DataTree or Fit
        From `sample_posterior`, `load` or `Inversion.least_squares`.
    draws : int
        Draws of the posterior used per ensemble.
    seed : int

    Returns
    -------
    ModelCheck
        Prints as a verdict and a line per channel.

    Raises
    ------
    ValueError
        If `result` is neither kind or `draws` is below 1.
    """
    draws = whole_number("draws", draws, 1)
    found = posterior_draws(result, seed=seed, count=draws).thinned(draws)
    return ModelCheck(_checks(found.inversion, found.flat, seed))


def noise_warnings(inversion: Inversion, values: Array, *, seed: int = 0) -> list[str]:
    """Warn where residuals do not look like the noise of the noise model.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (draws, unknowns)
        Draws of the posterior, public units; up to 100 are used, evenly spread.
    seed : int

    Returns
    -------
    list of str
        One sentence per problem; empty where there is none.
    """
    keep = np.unique(np.linspace(0, len(values) - 1, min(_DRAWS, len(values))).round().astype(int))
    checks = _checks(inversion, np.asarray(values)[keep], seed)
    return [f"{c.name}: {problem}." for c in checks for problem in c.problems]


def _checks(inversion: Inversion, values: Array, seed: int) -> tuple[ChannelCheck, ...]:
    best = values[int(np.argmax(inversion.posterior.log_prob(values)))]
    drifts = drift_tests(inversion, best, seed=seed)
    found = replicates(inversion, values, seed)
    return tuple(_channel_check(r, drift, seed) for r, drift in zip(found, drifts, strict=True))


def ljung_box(series: Array, lags: int) -> Array:
    """Return the Ljung-Box statistic of rows: ``Q = n (n + 2) sum_k r_k^2 / (n - k)``, shape (rows,).

    References
    ----------
    Ljung and Box, Biometrika 65 (1978) 297, from memory.
    """
    n = series.shape[1]
    r = autocorrelation(series, lags)
    return np.asarray(n * (n + 2) * (r**2 / (n - np.arange(1, lags + 1))).sum(axis=1))


def _channel_check(r: Replicates, drift: DriftTest | None, seed: int) -> ChannelCheck:
    u, n = r.innovation, r.delay.size
    lags = max(1, min(_LAGS, n // 5))
    rng = np.random.default_rng(np.random.SeedSequence(seed).spawn(1)[0])
    reference = np.sort(ljung_box(rng.standard_normal((_REFERENCE, n)), lags))
    p_correlation = _upper(reference, ljung_box(u, lags))
    is_normal = r.channel.noise.model != "student"
    bands = np.quantile(r.replicate, _QUANTILES, axis=0)
    mean = u.mean(axis=0)
    size, time, excess = _correlated_part(r, drift)
    return ChannelCheck(
        name=r.name,
        unit=r.channel.unit,
        delay=r.delay,
        residual=r.residual.mean(axis=0),
        innovation=mean,
        bands=bands,
        inside=(_share(r.data, bands[1], bands[3]), _share(r.data, bands[0], bands[4])),
        autocorrelation=autocorrelation(u, lags).mean(axis=0),
        p_correlation=p_correlation,
        p_chi_square=float(chdtrc(n, (u**2).sum(axis=1)).mean()) if is_normal else np.nan,
        p_largest=_p_largest(u) if is_normal else np.nan,
        outliers=r.delay[np.abs(mean) > FAR],
        noise_model=r.channel.noise.model,
        white=float(np.median(r.noise["white"])),
        p_drift=np.nan if drift is None else drift.p,
        size=size,
        time=time,
        excess=excess,
    )


def _upper(reference: Array, statistic: Array) -> float:
    """Mean over draws of the share of the reference at or above the statistic, never quite zero."""
    above = reference.size - np.searchsorted(reference, statistic)
    return float(np.mean((above + 1) / (reference.size + 1)))


def _correlated_part(r: Replicates, drift: DriftTest | None) -> tuple[float, float, float]:
    """Return size over white noise, correlation time, and the 5 % quantile of the size."""
    if drift is not None:
        return drift.size, drift.time, np.nan
    size = r.noise["discrepancy"] / r.noise["white"]
    return (
        float(np.median(size)),
        float(np.median(r.noise["correlation_time"])),
        float(np.quantile(size, 0.05)),
    )


def _p_largest(u: Array) -> float:
    """Mean over draws of the probability that the largest of as many normal numbers is larger, in size."""
    largest = np.abs(u).max(axis=1)
    return float(-np.expm1(u.shape[1] * np.log1p(-2 * np.exp(log_ndtr(-largest)))).mean())


def _share(data: Array, low: Array, high: Array) -> float:
    return float(np.mean((data >= low) & (data <= high)))


def _p(value: float) -> str:
    return "< 0.001" if value < 0.001 else f"= {value:.2g}"


def _line(c: ChannelCheck) -> str:
    parts = [
        f"{100 * c.inside[0]:.0f} % and {100 * c.inside[1]:.0f} % of the data lie in the 68 % and 95 % bands",
        f"autocorrelation at one point {c.autocorrelation[0]:+.2f}, Ljung-Box p {_p(c.p_correlation)}",
    ]
    if c.noise_model != "student":
        parts.append(f"sum of squares p {_p(c.p_chi_square)}")
        parts.append(f"largest {np.abs(c.innovation).max():.1f} deviations, p {_p(c.p_largest)}")
    if c.noise_model == "white":
        parts.append(f"drift test p {_p(c.p_drift)}")
    else:
        parts.append(f"discrepancy {c.size:.2g} times the white noise over {c.time:.2g} ps")
    return f"{c.name}: {'; '.join(parts)}"
