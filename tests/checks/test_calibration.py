"""Calibration checks on the closed-form model: the right posterior passes, the wrong ones fail."""

import numpy as np
import pytest

from tests.checks.toys import PROBLEM, WRONG, answers, calibration, generator
from tests.reference.toy import exact_posterior
from training.checks.contraction import contraction, spread
from training.checks.coverage import density_levels
from training.checks.ranks import check_ranks, fractional_ranks
from training.checks.tarp import check_tarp, simulated_band


def test_the_right_posterior_passes_every_check():
    assert calibration("right").passed == dict.fromkeys(calibration("right").passed, True)


@pytest.mark.parametrize("kind", WRONG)
@pytest.mark.parametrize("check", ["ranks", "central intervals", "highest-density regions", "balls (TARP)"])
def test_wrong_posteriors_fail_every_check(kind, check):
    assert not calibration(kind).passed[check]


def test_coverage_of_a_wrong_width_is_the_normal_law():
    # Truth ~ N(0, 1), central interval of half-width f z: erf(f z / sqrt 2), closed form; z = 0.9945 at 68 %.
    for kind, expected in (("right", 0.680), ("too wide", 0.8362), ("too narrow", 0.5138)):
        mean = np.mean([check.coverage_68 for check in calibration(kind).central])
        assert mean == pytest.approx(expected, abs=3.0 * np.sqrt(0.25 / 400))


def test_gain_is_largest_for_the_right_posterior():
    # ln q at the truth falls by the divergence KL(p || q) on average (Gibbs' inequality).
    best = calibration("right").gain
    for kind in WRONG:
        difference = answers("right").log_q_truth - answers(kind).log_q_truth
        error = difference.std() / np.sqrt(len(difference))
        assert difference.mean() > 3.0 * error
        assert calibration(kind).gain.mean < best.mean
    # Shifted by 0.7 standard deviations in each of 4 parameters; exact divergence per flare in closed form.
    batch = answers("right").batch
    exact = []
    for flare in range(len(batch.time)):
        covariance = exact_posterior(PROBLEM, batch.rows(flare))[1]
        shift = 0.7 * np.sqrt(np.diag(covariance))
        exact.append(0.5 * shift @ np.linalg.solve(covariance, shift))
    short = answers("right").log_q_truth - answers("shifted").log_q_truth
    assert short.mean() == pytest.approx(np.mean(exact), abs=4.0 * short.std() / np.sqrt(len(short)))


def test_contraction_is_that_of_the_normal_equations():
    prior = np.array([parameter.prior.deviation for parameter in PROBLEM.parameters])
    batch = answers("right").batch
    exact = [1.0 - np.diag(exact_posterior(PROBLEM, batch.rows(k))[1]) / prior**2 for k in range(50)]
    np.testing.assert_allclose(calibration("right").contraction[:50], exact, atol=0.03)
    unexplained = {kind: np.mean(1.0 - calibration(kind).contraction) for kind in ("right", "too wide", "too narrow")}
    assert unexplained["too wide"] / unexplained["right"] == pytest.approx(1.4**2, rel=0.1)
    assert unexplained["too narrow"] / unexplained["right"] == pytest.approx(0.7**2, rel=0.1)


def test_contraction_of_a_circle_does_not_know_where_it_is_cut():
    from emu.families.parameters import Parameter
    from emu.families.priors import Uniform

    circle = (Parameter("phase", "p", "deg", Uniform(0.0, 360.0), circular=True),)
    rng = generator()
    prior, near = rng.uniform(0.0, 360.0, (100_000, 1)), rng.normal(0.0, 10.0, (1, 100_000, 1))
    # Circular variance of a normal angle: 1 - exp(-sigma^2 / 2) (Mardia & Jupp 2000); uniform: 1.
    expected = np.exp(-0.5 * np.radians(10.0) ** 2)
    assert contraction(near % 360.0, prior, circle)[0, 0] == pytest.approx(expected, abs=0.01)
    assert spread(near % 360.0, circle)[0, 0] == pytest.approx(spread((near + 90.0) % 360.0, circle)[0, 0])


def test_draws_that_do_not_count_change_nothing():
    truth, draws = answers("right").truth, answers("right").theta
    junk = np.concatenate([draws, np.full_like(draws, -1e9)], axis=1)
    keep = np.repeat([[True, False]], len(truth), axis=0).repeat(draws.shape[1], axis=1)
    plain, masked = fractional_ranks(truth, draws, generator()), fractional_ranks(truth, junk, generator(), keep)
    np.testing.assert_array_equal(plain, masked)


def test_ties_are_spread_evenly():
    ranks = fractional_ranks(np.zeros((2000, 1)), np.zeros((2000, 9, 1)), generator())
    assert check_ranks(("tied",), ranks).passed
    levels = density_levels(np.zeros(2000), np.zeros((2000, 9)), generator())
    assert check_ranks(("tied",), levels[:, None]).passed


def test_the_simulated_band_holds_its_share_of_right_curves():
    points = np.linspace(0.05, 0.95, 19)
    low, high = simulated_band(200, 99, points, level=0.9, seed=4)
    rng = np.random.default_rng(77)
    curves = np.stack([np.mean(rng.random(200)[:, None] <= points, axis=0) for _ in range(2000)])
    assert np.mean(np.all((curves >= low) & (curves <= high), axis=1)) == pytest.approx(0.9, abs=0.03)
    assert check_tarp(rng.random(200), 99).passed
    assert not check_tarp(rng.random(200) ** 1.5, 99).passed
