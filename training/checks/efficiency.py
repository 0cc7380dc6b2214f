"""Importance efficiency: how many of an estimator's draws are worth an exact one."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from emu.inference.reweight import effective_size

__all__ = ["Efficiency", "importance_efficiency"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Efficiency:
    """Hold the efficiency of one flare.

    Args:
        full: ESS/N of all N draws.
        halves: ESS/N of the first and the second half. Where a few heavy weights decide, the efficiency
            falls with N, and the halves show it.
        draws: N; one over it is the least value that can be told from zero.
        lost: share of draws whose exact posterior is zero.
        log_evidence: ln of the mean weight.
    """

    full: float
    halves: tuple[float, float]
    draws: int
    lost: float
    log_evidence: float

    @property
    def steady(self) -> bool:
        """Tell whether the halves agree with the whole within a factor of two and ESS exceeds 20."""
        return self.full * self.draws > 20.0 and max(self.halves) < 2.0 * self.full


def importance_efficiency(log_weight: Array) -> Efficiency:
    """Summarise the log weights of one flare, ln(likelihood prior) - ln q.

    Args:
        log_weight: (N,), minus infinity where the exact posterior is zero.
    """
    half = len(log_weight) // 2
    first, second = log_weight[:half], log_weight[half:]
    halves = effective_size(first) / len(first), effective_size(second) / len(second)
    total = logsumexp(log_weight) if np.isfinite(log_weight).any() else -np.inf
    return Efficiency(
        full=effective_size(log_weight) / len(log_weight), halves=halves, draws=len(log_weight),
        lost=float(np.mean(~np.isfinite(log_weight))), log_evidence=float(total - np.log(len(log_weight))),
    )
