"""Tests of accuracy with random points: coverage of balls about points that know nothing of the data.

Source: Lemos, Coogan, Hezaveh & Perreault-Levasseur 2023, Sampling-based accuracy testing of posterior
estimators for general inference (TARP).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from training.checks.ranks import fractional_ranks

__all__ = ["TarpCheck", "check_tarp", "simulated_band", "tarp_levels"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class TarpCheck:
    """Hold a curve of expected coverage and the band of a right posterior.

    Args:
        point: (K,) levels.
        curve: (K,) share of cases whose truth lies within the ball of that level.
        low: (K,) lower edge of the band.
        high: (K,) upper edge.
    """

    point: Array
    curve: Array
    low: Array
    high: Array

    @property
    def passed(self) -> bool:
        """Tell whether the curve stays inside the band."""
        return bool(np.all((self.curve >= self.low) & (self.curve <= self.high)))

    @property
    def distance(self) -> float:
        """Return the largest distance of the curve from the diagonal."""
        return float(np.abs(self.curve - self.point).max())


def check_tarp(levels: Array, draws: int, *, level: float = 0.95, seed: int = 0) -> TarpCheck:
    """Compare the coverage curve with its simulated band.

    Args:
        levels: (N,) from `tarp_levels`.
        draws: posterior draws a case.
        level: probability that a right posterior passes.
        seed: of the simulation of the band.
    """
    point = np.linspace(0.02, 0.98, 49)
    low, high = simulated_band(len(levels), draws, point, level=level, seed=seed)
    curve = np.searchsorted(np.sort(levels), point, side="right") / len(levels)
    return TarpCheck(point, curve, low, high)


def tarp_levels(truth: Array, draws: Array, rng: np.random.Generator,
                keep: NDArray[np.bool_] | None = None) -> Array:
    """Return the probability of the ball about a random point that just reaches the truth.

    The point is the truth of another case, which knows nothing of this one. The levels are uniform for
    the right posterior, and the converse holds over all points (Lemos et al. 2023, TARP).

    Args:
        truth: (N, P) in coordinates of comparable scale.
        draws: (N, D, P) likewise.
        rng: pairs the cases and spreads ranks over their steps.
        keep: (N, D) True where a draw counts; all by default.
    """
    point = truth[_other(len(truth), rng)]
    reach = np.linalg.norm(truth - point, axis=1)
    distance = np.linalg.norm(draws - point[:, None], axis=2)
    return fractional_ranks(reach[:, None], distance[..., None], rng, keep)[:, 0]


def simulated_band(n: int, draws: int, points: Array, *, level: float = 0.95, seed: int = 0,
                   repeats: int = 2000) -> tuple[Array, Array]:
    """Simulate the band of a coverage curve of n cases of a right posterior.

    Ranks among draws are simulated n at a time; the band is the mean curve plus and minus a multiple of
    its standard deviation, the same multiple everywhere, that holds a share `level` of whole curves.

    Args:
        n: cases.
        draws: posterior draws a case.
        points: (K,) levels at which the curve is looked at, between 0 and 1.
        level: share of curves that lie inside everywhere.
        seed: of the simulation.
        repeats: simulated curves.

    Returns:
        Lower and upper edge (K,) of the share of cases.
    """
    rng = np.random.default_rng(seed)
    ranks = rng.integers(0, draws + 1, (repeats, n)) + rng.random((repeats, n))
    sorted_levels = np.sort(ranks / (draws + 1.0), axis=1)
    curves = np.stack([np.searchsorted(row, points, side="right") for row in sorted_levels]) / n
    deviation = np.sqrt(points * (1.0 - points) / n)
    inner = deviation > 0.0
    worst = np.max(np.abs(curves - points)[:, inner] / deviation[inner], axis=1)
    reach = np.quantile(worst, level) * deviation
    return np.clip(points - reach, 0.0, 1.0), np.clip(points + reach, 0.0, 1.0)


def _other(n: int, rng: np.random.Generator) -> NDArray[np.int64]:
    """Choose another case for every case."""
    order = rng.permutation(n)
    other = np.empty(n, np.int64)
    other[order] = np.roll(order, 1)
    return other
