"""The closed-form model must itself be right: Bayes' theorem has to close at every parameter vector."""

import numpy as np
import pytest
from scipy import stats

from emu.problem import Problem
from tests.reference.toy import ExactEstimator, ToyCampaign, ToyModel, exact_evidence, exact_posterior

TOYS = [ToyModel(), ToyModel(name="toy-wander", wander=(0.1, 15.0))]


def simulated(model, flares=3, seed=1):
    problem = Problem(model, ToyCampaign())
    rng = np.random.default_rng(seed)
    theta = problem.prior.sample(flares, rng)
    batch, failures = problem.simulate(theta, problem.campaign.draw(flares, rng), rng)
    assert not failures.any()
    return problem, theta, batch


@pytest.mark.parametrize("model", TOYS, ids=lambda m: m.name)
def test_prior_times_likelihood_is_evidence_times_posterior(model):
    problem, _, batch = simulated(model)
    for flare in range(len(batch)):
        rows = batch.rows(flare)
        mean, covariance = exact_posterior(problem, rows)
        for theta in problem.prior.sample(5, np.random.default_rng(flare)):
            likelihood = stats.multivariate_normal(model.design(rows) @ theta, model.covariance(rows))
            left = likelihood.logpdf(rows.value) + problem.prior.log_prob(theta[None])[0]
            right = exact_evidence(problem, rows) + stats.multivariate_normal(mean, covariance).logpdf(theta)
            assert left == pytest.approx(right, abs=1e-7)


@pytest.mark.parametrize(("widen", "shift"), [(1.0, 0.0), (2.0, 0.0), (0.5, 0.0), (1.0, 1.0)])
def test_estimator_is_as_wrong_as_it_says(widen, shift):
    problem, _, batch = simulated(TOYS[0])
    estimator = ExactEstimator(problem, widen, shift)
    theta, log_q = estimator.sample(batch, 4000, seed=2)
    assert theta.shape == (3, 4000, 4)
    assert log_q.shape == (3, 4000)
    for flare in range(3):
        mean, covariance = exact_posterior(problem, batch.rows(flare))
        width = np.sqrt(np.diag(covariance))
        assert np.abs((theta[flare].mean(axis=0) - mean) / width - shift).max() < 5 * widen / np.sqrt(4000)
        np.testing.assert_allclose(theta[flare].std(axis=0) / width, widen, rtol=0.06)
        closed = stats.multivariate_normal(mean + shift * width, widen**2 * covariance).logpdf(theta[flare])
        np.testing.assert_allclose(log_q[flare], closed, atol=1e-6)
    np.testing.assert_allclose(estimator.log_prob(theta[:, 0], batch), log_q[:, 0], atol=1e-12)
