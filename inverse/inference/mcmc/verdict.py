"""When a run may stop, and what to say about how it ended."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from inverse.inference.mcmc.convergence import (
    BURN_IN_TIMES,
    DISAGREEMENT,
    FEWEST_STEPS,
    MOST_DRIFT,
    Convergence,
)

LEAST_ACCEPTANCE = 0.05


def _is_number(value: object) -> bool:
    return isinstance(value, int | float | np.number)


@dataclass(frozen=True)
class Targets:
    """When to stop.

    Attributes
    ----------
    ess, rhat : float
        Effective sample size and R-hat that every name must reach.
    max_steps, chunk : int
        Most steps of an ensemble, and steps between checks.
    """

    ess: float
    rhat: float
    max_steps: int
    chunk: int

    def __post_init__(self) -> None:
        for name, value in (("max_steps", self.max_steps), ("chunk", self.chunk)):
            if not isinstance(value, int | np.integer) or value < 1:
                raise ValueError(f"{name} must be a whole number of steps, at least 1, not {value!r}")
        if not _is_number(self.ess) or not self.ess > 0:
            raise ValueError(f"ess must be a positive number of effective draws, not {self.ess!r}")
        if not _is_number(self.rhat) or not self.rhat > 1:
            raise ValueError(f"rhat must be above 1 (1.01 is customary), not {self.rhat!r}")

    def is_check(self, steps: int) -> bool:
        """Check after every chunk at first, later after each eighth to sixteenth part more."""
        chunks, rest = divmod(steps, self.chunk)
        at_chunk = rest == 0 and chunks > 0 and chunks % max(1, 2 ** (chunks.bit_length() - 4)) == 0
        return at_chunk or steps >= self.max_steps

    def until_chunk(self, steps: int) -> int:
        """Count the steps to the end of the chunk or of the run."""
        return min(self.chunk - steps % self.chunk, self.max_steps - steps)

    def met_by(self, convergence: Convergence, steps: int) -> bool:
        """Tell whether the run may stop."""
        return steps >= FEWEST_STEPS and convergence.meets(self.ess, self.rhat)


@dataclass(frozen=True)
class Ending:
    """A run at its end, for `remarks`.

    Attributes
    ----------
    convergence : Convergence
    targets : Targets
    names : tuple of str
    means : ndarray, shape (ensembles, d)
        Of the kept draws of each ensemble.
    acceptance : ndarray, shape (ensembles,)
    steps, kept, thin : int
        Steps made, stored steps kept, stride between stored steps.
    evaluations, rejected : int
    reason : str
        What the first rejected evaluation said.
    interrupted : bool
    """

    convergence: Convergence
    targets: Targets
    names: tuple[str, ...]
    means: np.ndarray
    acceptance: np.ndarray
    steps: int
    kept: int
    thin: int
    evaluations: int
    rejected: int
    reason: str
    interrupted: bool

    @property
    def converged(self) -> bool:
        """Whether the targets are met."""
        return self.targets.met_by(self.convergence, self.steps)

    @property
    def disagree(self) -> bool:
        """Whether the ensembles stand in different places."""
        return len(self.means) > 1 and self.convergence.largest_rhat > DISAGREEMENT

    def remarks(self) -> str:
        """Say how the run ended, what is missing and what looks wrong, in sentences."""
        said = [self._how(), *self._missing(), *self._disagreement(), *self._oddities()]
        return " ".join(f"{sentence[0].upper()}{sentence[1:]}." for sentence in said)

    def _how(self) -> str:
        if self.converged:
            return (
                f"converged after {self.steps} steps: effective sample size {self.convergence.least_ess:.0f} "
                f"or more, R-hat {self.convergence.largest_rhat:.4f} or less"
            )
        what = "interrupted" if self.interrupted else "not converged"
        return f"{what} after {self.steps} steps of each ensemble"

    def _missing(self) -> Iterator[str]:
        if self.converged:
            return
        found, targets = self.convergence, self.targets
        if self.steps < FEWEST_STEPS:
            yield f"fewer than {FEWEST_STEPS} steps cannot be judged"
        if not found.settled:
            yield "burn-in has not ended within half of the steps"
        smaller = np.minimum(found.ess, found.ess_tail)
        if not found.least_ess >= targets.ess:
            i = int(np.argmin(smaller))
            part = "tail" if found.ess_tail[i] < found.ess[i] else "bulk"
            said = f"smallest {part} effective sample size {found.least_ess:.0f} of {targets.ess:.0f}"
            yield f"{said} ({self.names[i]})"
        if not found.largest_rhat <= targets.rhat:
            yield f"largest R-hat {found.largest_rhat:.3f} above {targets.rhat:g} ({self._worst_name()})"
        if found.largest_drift > MOST_DRIFT:
            yield f"the walkers still drift, by {found.largest_drift:.1f} Monte Carlo deviations"
        if not self.disagree and np.isfinite(self._more_steps()):
            yield f"about {self._more_steps():.0f} more steps are needed"

    def _worst_name(self) -> str:
        return self.names[int(np.argmax(self.convergence.rhat))]

    def _more_steps(self) -> float:
        """Estimate the steps still to make: with the kept ones ESS grows and R-hat^2 - 1 falls."""
        found, targets = self.convergence, self.targets
        factor = max(
            targets.ess / found.least_ess, (found.largest_rhat**2 - 1.0) / (targets.rhat**2 - 1.0), 1.0
        )
        longest = float(np.nanmax(found.autocorrelation_time)) * self.thin
        settling = 0.0 if found.settled else 2.0 * BURN_IN_TIMES * longest - self.steps
        judged = FEWEST_STEPS - self.steps
        more = max((factor - 1.0) * self.kept * self.thin, settling, judged, self.steps / 8)
        return float(10.0 * np.ceil(more / 10.0))

    def _disagreement(self) -> Iterator[str]:
        if self.disagree:
            worst = int(np.argmax(self.convergence.rhat))
            means = ", ".join(f"{mean:.4g}" for mean in self.means[:, worst])
            yield (
                f"the ensembles disagree: their means of {self.names[worst]} are {means}. Either the "
                "posterior has several modes that walkers do not cross between, or the starts were far off; "
                "the share of draws in each mode says nothing about its probability, and more steps alone "
                "will hardly mend that"
            )

    def _oddities(self) -> Iterator[str]:
        if len(self.means) == 1:
            yield "a single ensemble cannot show that it has missed a mode: run several"
        if self.acceptance.min() < LEAST_ACCEPTANCE:
            percent = 100.0 * self.acceptance.min()
            yield f"ensemble {self.acceptance.argmin()} accepts only {percent:.1f} % of the proposals"
        if self.rejected:
            yield (
                f"{self.rejected} of {self.evaluations} evaluations were NaN or failed and count as "
                f"impossible (first: {self.reason or 'in the run resumed from'})"
            )
        if self.thin > 1:
            yield f"one step in {self.thin} was stored, to stay within the memory given"
