"""Checks against the exact posterior on the closed-form model."""

import numpy as np
import pytest

from tests.checks.toys import ESTIMATORS, PROBLEM, answers, generator
from tests.reference.toy import exact_evidence, exact_posterior
from training.checks.efficiency import importance_efficiency
from training.checks.exactness import closeness, unwrapped
from training.checks.sharpness import check_efficiency
from training.checks.two_sample import c2st, compare_samples


def exact_draws(count, flare=0):
    mean, covariance = exact_posterior(PROBLEM, answers("right").batch.rows(flare))
    return generator().multivariate_normal(mean, covariance, count)


def drawn(kind, count=4000):
    from emu.observe.rows import RowBatch

    batch = RowBatch.stack([answers("right").batch.rows(0)])
    return ESTIMATORS[kind].sample(batch, count, 5)[0][0]


def test_the_right_posterior_is_close_and_wrong_ones_are_not():
    exact = exact_draws(4000)
    found = {kind: closeness(drawn(kind), exact, PROBLEM.prior) for kind in ESTIMATORS}
    assert {kind: near.close for kind, near in found.items()} == {
        "right": True, "too wide": False, "too narrow": False, "shifted": False,
    }  # fmt: skip
    for kind, ratio in (("right", 1.0), ("too wide", 1.4), ("too narrow", 0.7), ("shifted", 1.0)):
        np.testing.assert_allclose(found[kind].width_ratio, ratio, rtol=0.05)
    # Wasserstein distance of two normals: the shift; for widths 1 and f it is |f - 1| sqrt(2 / pi).
    np.testing.assert_allclose(found["shifted"].wasserstein, 0.7, atol=0.06)
    np.testing.assert_allclose(found["too wide"].wasserstein, 0.4 * np.sqrt(2 / np.pi), atol=0.06)


def test_the_classifier_reaches_the_bayes_limit_of_shifted_normals():
    # Best accuracy for N(0, I) against N(d, I) is Phi(|d| / 2), closed form: |d| = 2 gives 0.8413.
    rng = generator()
    shift = np.array([2.0, 0.0, 0.0])
    accuracy = c2st(rng.standard_normal((2000, 3)), rng.standard_normal((2000, 3)) + shift)
    assert accuracy == pytest.approx(0.8413, abs=0.015)


def test_the_floor_is_even_odds_and_repeated_draws_do_not_help():
    rng = generator()
    reference, same = rng.standard_normal((4000, 5)), rng.standard_normal((1500, 5))
    test = compare_samples(np.repeat(same, 3, axis=0), reference)
    assert test.draws == 1500
    assert test.accuracy == pytest.approx(0.5, abs=0.03)
    assert test.floor == pytest.approx(0.5, abs=0.03)


def test_unwrapping_moves_the_seam_away_from_the_draws():
    from emu.families.parameters import Parameter
    from emu.families.priors import Uniform

    circle = (Parameter("phase", "p", "deg", Uniform(0.0, 360.0), circular=True),)
    angles = generator().normal(0.0, 5.0, (4000, 1)) % 360.0
    assert unwrapped(angles, angles, circle).std() == pytest.approx(5.0, rel=0.05)


@pytest.mark.parametrize("widen", [1.0, 1.4, 2.0])
def test_efficiency_is_that_of_a_widened_normal(widen):
    # ESS/N -> 1 / E_q[(p/q)^2] = (sqrt(2 f^2 - 1) / f^2)^P for widths f > 1/sqrt 2, closed form.
    from tests.reference.toy import ExactEstimator

    batch = answers("right").batch
    (found,) = check_efficiency(ExactEstimator(PROBLEM, widen=widen), PROBLEM, batch, flares=1, draws=20_000, seed=1)
    assert found.full == pytest.approx((np.sqrt(2 * widen**2 - 1) / widen**2) ** 4, rel=0.05)
    assert found.steady
    assert found.lost == 0.0
    assert found.log_evidence == pytest.approx(exact_evidence(PROBLEM, batch.rows(0)), abs=0.05)


def test_halves_expose_an_efficiency_that_rests_on_a_few_draws():
    # Pareto weights of shape 2 have no variance: the efficiency falls with N for ever.
    weights = np.log(generator().pareto(0.5, 20_000) + 1.0)
    assert not importance_efficiency(weights).steady
    assert importance_efficiency(np.full(10, -np.inf)).full == 0.0
