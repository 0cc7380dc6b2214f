"""The exact posterior of one flare as a function that counts what it costs."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from emu.families.density import Array
from emu.families.prior import Prior
from emu.inference.likelihood import log_likelihood
from emu.observe.rows import Rows
from emu.problem import Problem

__all__ = ["CountedPosterior"]


@dataclass
class CountedPosterior:
    """Evaluate likelihood and prior of one flare, and count the likelihoods.

    Args:
        problem: what may have happened and what was measured.
        rows: the flare.
        calls: likelihoods evaluated so far.
    """

    problem: Problem
    rows: Rows
    calls: int = field(default=0)

    @property
    def prior(self) -> Prior:
        """Return the joint prior."""
        return self.problem.prior

    def log_likelihood(self, theta: Array) -> Array:
        """Return the log likelihood of theta (N, P): (N,), minus infinity where the prior is zero."""
        return self._likelihood_where(theta, np.isfinite(self.prior.log_prob(theta)))

    def log_posterior(self, theta: Array) -> Array:
        """Return log prior + log likelihood of theta (N, P): (N,)."""
        log_prior = self.prior.log_prob(theta)
        return log_prior + self._likelihood_where(theta, np.isfinite(log_prior))

    def _likelihood_where(self, theta: Array, inside: np.ndarray[tuple[int], np.dtype[np.bool_]]) -> Array:
        """Evaluate the likelihood of the rows of theta that are marked."""
        value = np.full(len(theta), -np.inf)
        if inside.any():
            value[inside] = log_likelihood(self.problem, theta[inside], self.rows)
            self.calls += int(inside.sum())
        return value
