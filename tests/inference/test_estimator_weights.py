"""Importance weights against the closed-form model, a library and formulas."""

import warnings

import numpy as np
import pytest
from scipy.stats import genpareto

from emu.inference.reweight import effective_size, khat, reweight
from tests.reference.toy import ExactEstimator, exact_evidence
from tests.training.small import SMALL, observed


def test_draws_of_the_exact_posterior_all_weigh_the_same():
    _, rows = observed(3, seed=1)
    theta, log_q = ExactEstimator(SMALL).sample(rows, 400, seed=1)
    for flare in range(3):
        weights = reweight(SMALL, rows.rows(flare), theta[flare], log_q[flare])
        assert weights.efficiency == pytest.approx(1, abs=1e-6)
        assert weights.weight.sum() == pytest.approx(1)
        assert weights.log_evidence == pytest.approx(exact_evidence(SMALL, rows.rows(flare)), abs=1e-6)


def test_a_wide_proposal_has_the_efficiency_that_theory_says():
    _, rows = observed(1, seed=2)
    theta, log_q = ExactEstimator(SMALL, widen=1.5).sample(rows, 40_000, seed=1)
    weights = reweight(SMALL, rows.rows(0), theta[0], log_q[0])
    # E[w]^2 / E[w^2] of a normal p against one s times as wide is sqrt(2 s^2 - 1) / s^2 in each dimension.
    expected = (np.sqrt(2 * 1.5**2 - 1) / 1.5**2) ** 4
    assert weights.efficiency == pytest.approx(expected, rel=0.03)
    assert weights.half_efficiencies == pytest.approx((expected, expected), rel=0.05)
    assert weights.log_evidence == pytest.approx(exact_evidence(SMALL, rows.rows(0)), abs=0.03)
    assert weights.khat < 0.5


def test_a_narrow_proposal_is_not_to_be_relied_on():
    _, rows = observed(1, seed=3)
    theta, log_q = ExactEstimator(SMALL, widen=0.4).sample(rows, 4000, seed=1)
    assert reweight(SMALL, rows.rows(0), theta[0], log_q[0]).khat > 0.7


def test_impossible_draws_weigh_nothing():
    assert effective_size(np.array([0.0, 0.0, -np.inf, 0.0])) == pytest.approx(3)
    assert effective_size(np.full(5, -np.inf)) == 0
    assert khat(np.full(100, -np.inf)) == np.inf


@pytest.mark.parametrize("shape", [0.2, 0.5, 0.9])
def test_khat_finds_the_shape_of_pareto_tails(shape):
    found = [khat(np.log(genpareto.rvs(shape, size=10_000, random_state=seed) + 1e-9)) for seed in range(20)]
    assert np.mean(found) == pytest.approx(shape, abs=0.06)


def test_khat_agrees_with_a_library():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # of the library's own imports
        from arviz import psislw
    rng = np.random.default_rng(4)
    for scale in (0.5, 1.0, 2.0):
        log_weight = scale * rng.normal(size=4000)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            expected = float(psislw(log_weight.copy())[1])
        assert khat(log_weight) == pytest.approx(expected, abs=1e-3)


def test_khat_of_equal_weights_is_no_warning():
    """A perfect estimator has equal weights up to rounding."""
    assert khat(1e-14 * np.random.default_rng(1).normal(size=1000)) == -1.0
