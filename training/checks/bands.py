"""Simultaneous bands for the empirical distribution function of uniform numbers.

Source: Säilynoja, Bürkner & Vehtari 2022, Graphical test for discrete uniformity and its applications in
goodness-of-fit evaluation and multiple sample comparison, Statistics and Computing 32, 32.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.stats import binom

__all__ = ["Band", "Verdict", "judge_uniform", "simultaneous_band"]

_POINTS = 100  # where the distribution function is looked at


@dataclass(frozen=True)
class Band:
    """Hold the band: count[i] of N numbers below point[i] should lie within low[i]..high[i]."""

    point: NDArray[np.float64]
    low: NDArray[np.int64]
    high: NDArray[np.int64]


@dataclass(frozen=True)
class Verdict:
    """Say whether N numbers look uniform.

    Args:
        inside: True where the empirical distribution stays inside the band everywhere.
        excess: largest distance outside the band, as a share of N; zero or less inside.
        distance: largest distance from uniformity, as a share of N.
    """

    inside: bool
    excess: float
    distance: float


@lru_cache(maxsize=64)
def simultaneous_band(n: int, level: float = 0.95, points: int = _POINTS) -> Band:
    """Find the band that N independent uniform numbers leave with probability 1 - level.

    At every point the band is the central binomial interval of the same, smaller error gamma; gamma is
    the largest one whose joint probability, by the exact recursion over points, reaches the level.

    Args:
        n: how many numbers.
        level: probability that all counts are inside.
        points: evenly spaced points in (0, 1), both ends left out.
    """
    point = np.arange(1, points + 1) / (points + 1)
    small, large = 0.0, 1.0 - level  # errors of one point alone: Bonferroni-like below, pointwise above
    for _ in range(24):
        middle = 0.5 * (small + large)
        if _joint(n, point, *_limits(n, point, middle)) >= level:
            small = middle
        else:
            large = middle
    return Band(point, *_limits(n, point, small))


def judge_uniform(values: NDArray[np.float64], level: float = 0.95) -> Verdict:
    """Compare numbers between 0 and 1 with the simultaneous band.

    Args:
        values: (N,) normalised ranks or probability integral transforms.
        level: of the band.
    """
    band = simultaneous_band(len(values), level)
    count = np.searchsorted(np.sort(values), band.point, side="right")
    excess = max(int((count - band.high).max()), int((band.low - count).max())) / len(values)
    distance = float(np.abs(count / len(values) - band.point).max())
    return Verdict(excess <= 0, float(excess), distance)


def _limits(n: int, point: NDArray[np.float64], error: float) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return the central binomial interval at every point."""
    if error <= 0.0:
        return np.zeros(len(point), np.int64), np.full(len(point), n, np.int64)
    low, high = binom.ppf(error / 2.0, n, point), binom.ppf(1.0 - error / 2.0, n, point)
    return low.astype(np.int64), high.astype(np.int64)


def _joint(n: int, point: NDArray[np.float64], low: NDArray[np.int64], high: NDArray[np.int64]) -> float:
    """Return the probability that all counts are inside, point by point.

    Given k numbers below the last point, the count to the next grows by a binomial of the n - k others.
    """
    count, chance, before = np.zeros(1, np.int64), np.ones(1), 0.0
    for here, bottom, top in zip(point, low, high, strict=True):
        after = np.arange(bottom, top + 1)
        step = binom.pmf(after[:, None] - count, n - count, (here - before) / (1.0 - before))
        count, chance, before = after, step @ chance, here
    return float(chance.sum())
