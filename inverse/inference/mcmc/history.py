"""The steps kept in memory, thinned when they would pass a budget."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class History:
    """Every `thin`-th step of several ensembles.

    `extended` never changes what an older History shows, so that an interrupt between two of them leaves a
    whole one. The buffers may be longer than the steps stored in them.

    Attributes
    ----------
    chain : ndarray, shape (ensembles, capacity, walkers, d)
    log_prob : ndarray, shape (ensembles, capacity, walkers)
    steps : int
        Steps made so far, stored or not.
    thin : int
        A power of two, depending on `steps` and the budget alone.
    budget : int
        Bytes that the stored steps may take.
    """

    chain: np.ndarray
    log_prob: np.ndarray
    steps: int
    thin: int
    budget: int

    @classmethod
    def empty(cls, ensembles: int, walkers: int, dimension: int, budget: int) -> History:
        """Start without any step."""
        return cls(
            np.empty((ensembles, 0, walkers, dimension)), np.empty((ensembles, 0, walkers)), 0, 1, budget
        )

    @property
    def stored(self) -> int:
        """Number of stored steps."""
        return self.steps // self.thin

    @property
    def kept_chain(self) -> np.ndarray:
        """Stored positions, shape (ensembles, stored, walkers, d)."""
        return self.chain[:, : self.stored]

    @property
    def kept_log_prob(self) -> np.ndarray:
        """Stored log densities, shape (ensembles, stored, walkers)."""
        return self.log_prob[:, : self.stored]

    @property
    def most(self) -> int:
        """Number of stored steps that the budget allows, two at least."""
        ensembles, _, walkers, dimension = self.chain.shape
        return max(self.budget // (8 * ensembles * walkers * (dimension + 1)), 2)

    def _thin_for(self, steps: int) -> int:
        thin = self.thin
        while steps // thin > self.most:
            thin *= 2
        return thin

    def extended(self, chain: np.ndarray, log_prob: np.ndarray) -> History:
        """Append steps.

        Parameters
        ----------
        chain : ndarray, shape (ensembles, n, walkers, d)
        log_prob : ndarray, shape (ensembles, n, walkers)
        """
        steps = self.steps + chain.shape[1]
        thin = self._thin_for(steps)
        first = -(self.steps + 1) % thin
        return History(
            self._appended(self.chain, thin // self.thin, chain[:, first::thin]),
            self._appended(self.log_prob, thin // self.thin, log_prob[:, first::thin]),
            steps,
            thin,
            self.budget,
        )

    def _appended(self, buffer: np.ndarray, stride: int, new: np.ndarray) -> np.ndarray:
        """Write `new` behind every stride-th stored row, in the old buffer if that will do."""
        old = buffer[:, stride - 1 : self.stored : stride]
        count = old.shape[1] + new.shape[1]
        if stride > 1 or count > buffer.shape[1]:
            capacity = max(count, min(2 * old.shape[1], self.most))
            buffer = np.empty((buffer.shape[0], capacity, *buffer.shape[2:]))
            buffer[:, : old.shape[1]] = old
        buffer[:, old.shape[1] : count] = new
        return buffer
