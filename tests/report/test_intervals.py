"""Intervals against the quantiles of known distributions (scipy.stats), on the line and on the circle."""

from functools import cache

import numpy as np
import pytest
from scipy import stats

from emu.families.normal import Normal
from emu.families.parameters import Parameter
from emu.families.priors import LogUniform, Uniform
from emu.report.intervals import interval, unwrapped, weighted_quantiles

LINE = Parameter("x", "x", "", Normal(0.0, 1.0))
CIRCLE = Parameter("angle", r"\phi", "deg", Uniform(0.0, 360.0), circular=True)
LEVELS = (0.5, 0.16, 0.84, 0.025, 0.975)


def of(found):
    return np.array([found.median, found.low68, found.high68, found.low95, found.high95])


def even(distribution, count=20_000):
    """Draw without noise: quantiles at evenly spaced probabilities."""
    return distribution.ppf((np.arange(count) + 0.5) / count)


def test_quantiles_and_contraction_of_a_normal_posterior() -> None:
    found = interval(even(stats.norm(0.3, 0.25)), even(stats.norm()), LINE)
    np.testing.assert_allclose(of(found), stats.norm(0.3, 0.25).ppf(LEVELS), atol=1e-3)
    np.testing.assert_allclose((found.prior_low68, found.prior_high68), stats.norm.ppf((0.16, 0.84)), atol=1e-3)
    assert found.contraction == pytest.approx(0.75, abs=1e-3)
    # The 84 % quantile lies at the prior's Phi(0.3 + 0.25 * 0.99446), the 2.5 % one at Phi(-0.19): farthest.
    assert found.shift == pytest.approx(stats.norm.cdf(0.3 - 0.25 * 1.959964) - 0.025, abs=1e-3)
    assert found.informed


@cache
def von_mises():
    """Draw without noise from a von Mises distribution about zero, degrees (scipy is slow at this)."""
    return np.degrees(even(stats.vonmises(kappa=12.0), 1000))


@pytest.mark.parametrize("centre", [0.0, 3.0, 90.0, 181.0, 359.5])
def test_the_circle_has_no_preferred_place(centre: float) -> None:
    # A von Mises distribution (scipy's own quantiles) anywhere on the circle: the same interval, shifted.
    offsets = von_mises()
    prior = np.linspace(0.0, 360.0, 5000, endpoint=False)
    found = interval((centre + offsets) % 360.0, prior, CIRCLE)
    expected = np.degrees(stats.vonmises(kappa=12.0).ppf(LEVELS))
    difference = of(found) - centre - expected
    np.testing.assert_allclose((difference + 180.0) % 360.0 - 180.0, 0.0, atol=0.5)
    assert -1e-9 <= found.median < 360.0  # rounding decides on which side of north an exact north is
    assert found.low95 <= found.low68 <= found.median <= found.high68 <= found.high95
    assert found.contraction == pytest.approx(1.0 - np.ptp(expected[1:3]) / (0.68 * 360.0), abs=0.005)
    assert found.informed


def test_unwrapped_keeps_every_angle_modulo_a_turn() -> None:
    rng = np.random.default_rng(5)
    angles = rng.uniform(0.0, 360.0, 400)
    moved = unwrapped(angles, rng.normal(350.0, 20.0, 300) % 360.0, start=-180.0)
    assert np.ptp(moved) < 360.0
    np.testing.assert_allclose((moved - angles + 180.0) % 360.0 - 180.0, 0.0, atol=1e-9)


@pytest.mark.parametrize("count", [100, 1000, 4000])
@pytest.mark.parametrize("parameter", [LINE, CIRCLE, Parameter("t", "t", "GM/c3", LogUniform(1.0, 100.0))])
def test_draws_of_the_prior_are_not_informed(parameter: Parameter, count: int) -> None:
    rng = np.random.default_rng(count)
    prior = parameter.prior.ppf(rng.random(10_000))
    false = sum(interval(parameter.prior.ppf(rng.random(count)), prior, parameter).informed for _ in range(300))
    assert false <= 2  # one in a thousand at most, by Kolmogorov's limit


def test_little_is_not_informed_and_more_is() -> None:
    prior = even(stats.norm())
    assert not interval(even(stats.norm(0.05, 0.97)), prior, LINE).informed
    assert interval(even(stats.norm(0.0, 0.7)), prior, LINE).informed
    assert interval(even(stats.norm(0.5, 1.0)), prior, LINE).informed  # it moved without contracting


def test_few_independent_draws_raise_the_bar() -> None:
    draws, prior = even(stats.norm(0.2, 1.0), 1000), even(stats.norm())
    assert interval(draws, prior, LINE).informed
    assert not interval(draws, prior, LINE, independent=30.0).informed


def test_two_opposite_modes_on_the_circle_are_informed() -> None:
    rng = np.random.default_rng(2)
    draws = (rng.choice([40.0, 220.0], 1000) + rng.normal(0.0, 3.0, 1000)) % 360.0
    assert interval(draws, rng.uniform(0.0, 360.0, 10_000), CIRCLE).informed


def test_weighted_draws_give_the_quantiles_of_what_they_are_weighted_to() -> None:
    draws = even(stats.norm(0.0, 1.5))
    weight = stats.norm(0.4, 0.6).pdf(draws) / stats.norm(0.0, 1.5).pdf(draws)
    np.testing.assert_allclose(
        weighted_quantiles(draws, weight, LINE), stats.norm(0.4, 0.6).ppf((0.5, 0.16, 0.84)), atol=2e-3
    )


def test_weighted_draws_on_the_circle() -> None:
    draws = np.linspace(0.0, 360.0, 20_000, endpoint=False)
    weight = stats.vonmises(kappa=20.0, loc=np.radians(-5.0)).pdf(np.radians(draws))
    found = np.array(weighted_quantiles(draws, weight, CIRCLE))
    expected = np.degrees(stats.vonmises(kappa=20.0, loc=np.radians(-5.0)).ppf((0.5, 0.16, 0.84)))
    np.testing.assert_allclose(found - 360.0, expected, atol=0.1)
