"""Importance weights of an estimator's draws against the exact posterior, and what they are worth."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.inference.likelihood import log_posterior
from emu.observe.rows import Rows
from emu.problem import Problem

__all__ = ["Weights", "effective_size", "khat", "reweight"]

Array = NDArray[np.float64]
_SAME = 1e-9  # of log weights that differ by rounding only


@dataclass(frozen=True, eq=False)
class Weights:
    """Hold the exact posterior and the importance weights at D draws of one flare.

    Args:
        log_posterior: (D,) log likelihood + log prior, not normalised; minus infinity where impossible.
        log_weight: (D,) log_posterior - log q.
        weight: (D,) normalised to sum 1; all zero where every draw is impossible.
    """

    log_posterior: Array
    log_weight: Array
    weight: Array

    @property
    def ess(self) -> float:
        """Return the effective number of draws (Kish 1965): 1 / sum of squared weights."""
        return effective_size(self.log_weight)

    @property
    def efficiency(self) -> float:
        """Return ess / D. It says little unless D is about 20,000: compare `half_efficiencies`."""
        return self.ess / len(self.log_weight)

    @property
    def half_efficiencies(self) -> tuple[float, float]:
        """Return the efficiency of the first and of the second half of the draws."""
        middle = len(self.log_weight) // 2
        halves = self.log_weight[:middle], self.log_weight[middle:]
        return effective_size(halves[0]) / len(halves[0]), effective_size(halves[1]) / len(halves[1])

    @property
    def khat(self) -> float:
        """Return Pareto k-hat: above 0.7 the weights cannot be relied on."""
        return khat(self.log_weight)

    @property
    def log_evidence(self) -> float:
        """Return ln Z as the mean weight gives it; minus infinity where every draw is impossible."""
        top = self.log_weight.max()
        if not np.isfinite(top):
            return -np.inf
        return float(top + np.log(np.mean(np.exp(self.log_weight - top))))


def reweight(problem: Problem, rows: Rows, theta: Array, log_q: Array) -> Weights:
    """Weigh draws of one flare against the exact posterior.

    Args:
        problem: model and campaign.
        rows: the flare.
        theta: (D, P) draws.
        log_q: (D,) their log density under whatever drew them.
    """
    exact = log_posterior(problem, theta, rows)
    log_weight = exact - log_q
    top = log_weight.max()
    weight = np.exp(log_weight - top) if np.isfinite(top) else np.zeros(len(log_q))
    return Weights(exact, log_weight, weight / max(weight.sum(), np.finfo(float).tiny))


def effective_size(log_weight: Array) -> float:
    """Return Kish's effective number of draws; 0 where every weight is zero."""
    top = log_weight.max()
    if not np.isfinite(top):
        return 0.0
    weight = np.exp(log_weight - top)
    return float(weight.sum() ** 2 / (weight**2).sum())


def khat(log_weight: Array) -> float:
    """Return the Pareto shape of the largest weights (Vehtari et al. 2024, section 2.4).

    The generalised Pareto distribution is fitted to the largest min(D/5, 3 sqrt(D)) weights as Zhang &
    Stephens (2009) do, with the weak prior of Vehtari et al., appendix G.

    Args:
        log_weight: (D,), D >= 25; minus infinity is a weight of zero.

    Returns:
        k-hat; infinity where fewer than five distinct weights are left to fit; -1, the shape of a flat density
        that ends, where the largest weights are all the same.
    """
    count = len(log_weight)
    tail = int(np.ceil(min(0.2 * count, 3 * np.sqrt(count))))
    ordered = np.sort(log_weight)
    top = ordered[-1]
    if tail < 5 or not np.isfinite(top):
        return np.inf
    if ordered[-tail - 1] > top - _SAME:
        return -1.0
    cutoff = np.exp(max(ordered[-tail - 1] - top, np.log(np.finfo(float).tiny)))
    excess = np.exp(ordered[-tail:] - top) - cutoff
    excess = excess[excess > 0]
    return _pareto_shape(excess) if len(excess) >= 5 else np.inf


def _pareto_shape(excess: Array) -> float:
    """Fit the shape of a generalised Pareto distribution to sorted excesses (Zhang & Stephens 2009)."""
    count = len(excess)
    grid = np.arange(1, 31 + int(np.sqrt(count)))
    theta = 1 / excess[-1] + (1 - np.sqrt(grid[-1] / (grid - 0.5))) / (3 * excess[int(count / 4 + 0.5) - 1])
    shape = np.log1p(-theta[:, None] * excess).mean(axis=1)
    likelihood = count * (np.log(-theta / shape) - shape - 1)
    weight = np.exp(likelihood - likelihood.max())
    mean = float((theta * weight).sum() / weight.sum())
    k = float(np.log1p(-mean * excess).mean())
    return (count * k + 10 * 0.5) / (count + 10)
