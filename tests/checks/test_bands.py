"""Simultaneous bands: they must leave room for just the stated share of uniform samples."""

import numpy as np
import pytest
from scipy.stats import binom

from training.checks.bands import judge_uniform, simultaneous_band


@pytest.mark.parametrize(("n", "level"), [(50, 0.95), (500, 0.95), (500, 0.8)])
def test_uniform_numbers_stay_inside_as_often_as_stated(n, level):
    rng = np.random.default_rng(n)
    inside = np.mean([judge_uniform(rng.random(n), level).inside for _ in range(4000)])
    # Counts are discrete, so the band holds at least its level; five binomial errors either way.
    error = np.sqrt(level * (1.0 - level) / 4000)
    assert level - 5.0 * error < inside < level + 5.0 * error + 0.01


def test_the_band_is_wider_than_the_pointwise_one_and_narrower_than_bonferroni():
    band = simultaneous_band(500)
    for error, wider in ((0.05, False), (0.05 / len(band.point), True)):
        low, high = binom.ppf(error / 2, 500, band.point), binom.ppf(1 - error / 2, 500, band.point)
        assert np.mean((low <= band.low) & (high >= band.high)) == (1.0 if wider else 0.0)


@pytest.mark.parametrize(
    "bend",
    [lambda u: u**1.3, lambda u: 0.5 + 0.7 * (u - 0.5), lambda u: np.where(u < 0.5, u**1.5, 1 - (1 - u) ** 1.5)],
    ids=["shifted", "too few at the ends", "too many at the ends"],
)  # fmt: skip
def test_other_distributions_leave_the_band(bend):
    verdict = judge_uniform(bend(np.random.default_rng(5).random(500)))
    assert not verdict.inside
    assert verdict.excess > 0.0
