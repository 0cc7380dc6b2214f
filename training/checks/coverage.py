"""Coverage of credible regions at all levels: central and highest density."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from training.checks.bands import Verdict, judge_uniform
from training.checks.ranks import fractional_ranks

__all__ = ["CoverageCheck", "central_levels", "check_coverage", "density_levels"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class CoverageCheck:
    """Say how often regions of every level held the truth.

    Args:
        name: of the regions.
        levels: (N,) the smallest level whose region holds the truth, uniform where coverage is right.
        coverage_68: share of truths within the 68 % region.
        coverage_68_error: its binomial error were the coverage right.
        verdict: of the whole curve in a simultaneous band.
    """

    name: str
    levels: Array
    coverage_68: float
    coverage_68_error: float
    verdict: Verdict

    @property
    def passed(self) -> bool:
        """Tell whether the coverage curve stays inside its band."""
        return self.verdict.inside


def central_levels(ranks: Array) -> Array:
    """Return the level of the smallest central interval that holds the truth, from ranks (N, P)."""
    return np.abs(2.0 * ranks - 1.0)


def density_levels(log_truth: Array, log_draws: Array, rng: np.random.Generator,
                   keep: NDArray[np.bool_] | None = None) -> Array:
    """Return the level of the smallest highest-density region that holds the truth.

    Args:
        log_truth: (N,) log density of the estimator at the truth.
        log_draws: (N, D) log density of the estimator at its own draws.
        rng: spreads ranks over their steps.
        keep: (N, D) True where a draw counts; all by default.

    Returns:
        (N,) share of the draws of higher density.
    """
    return 1.0 - fractional_ranks(log_truth[:, None], log_draws[..., None], rng, keep)[:, 0]


def check_coverage(name: str, levels: Array, level: float = 0.95) -> CoverageCheck:
    """Judge a whole coverage curve in the band of `judge_uniform`.

    Args:
        name: of the regions.
        levels: (N,) from one of the functions above.
        level: probability that a right posterior passes.
    """
    return CoverageCheck(name, levels, float(np.mean(levels <= 0.68)),
                         float(np.sqrt(0.68 * 0.32 / len(levels))), judge_uniform(levels, level))
