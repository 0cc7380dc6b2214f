"""Coverage of credible regions at all levels: central, highest density, and random balls (TARP)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from training.checks.bands import Verdict, judge_uniform

__all__ = ["CoverageCheck", "central_levels", "check_coverage", "density_levels", "tarp_levels"]

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


def density_levels(log_truth: Array, log_draws: Array, rng: np.random.Generator) -> Array:
    """Return the level of the smallest highest-density region that holds the truth.

    Args:
        log_truth: (N,) log density of the estimator at the truth.
        log_draws: (N, D) log density of the estimator at its own draws.
        rng: spreads ranks over their steps.

    Returns:
        (N,) share of the draws of higher density.
    """
    above = np.sum(log_draws > log_truth[:, None], axis=1)
    equal = np.sum(log_draws == log_truth[:, None], axis=1)
    return (above + rng.random(len(above)) * (equal + 1.0)) / (log_draws.shape[1] + 1.0)


def tarp_levels(truth: Array, draws: Array, rng: np.random.Generator) -> Array:
    """Return the probability of the ball about a random point that just reaches the truth.

    The point is the truth of another case, which knows nothing of this one. The levels are uniform for
    the right posterior, and the converse holds over all points (Lemos et al. 2023, TARP).

    Args:
        truth: (N, P) in coordinates of comparable scale.
        draws: (N, D, P) likewise.
        rng: pairs the cases and spreads ranks over their steps.
    """
    point = truth[_other(len(truth), rng)]
    reach = np.linalg.norm(truth - point, axis=1)
    distance = np.linalg.norm(draws - point[:, None], axis=2)
    return (np.sum(distance < reach[:, None], axis=1) + rng.random(len(truth))) / (draws.shape[1] + 1.0)


def check_coverage(name: str, levels: Array, level: float = 0.95) -> CoverageCheck:
    """Judge a whole coverage curve.

    Args:
        name: of the regions.
        levels: (N,) from one of the functions above.
        level: probability that a right posterior passes.
    """
    return CoverageCheck(name, levels, float(np.mean(levels <= 0.68)),
                         float(np.sqrt(0.68 * 0.32 / len(levels))), judge_uniform(levels, level))


def _other(n: int, rng: np.random.Generator) -> NDArray[np.int64]:
    """Choose another case for every case."""
    order = rng.permutation(n)
    other = np.empty(n, np.int64)
    other[order] = np.roll(order, 1)
    return other
