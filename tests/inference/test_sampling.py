"""Samplers against the closed-form posterior and evidence."""

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from emu.families.parameters import Parameter
from emu.families.prior import Prior
from emu.families.priors import Uniform
from emu.inference.convergence import length_over_memory, rank_rhat
from emu.inference.draws import Draws, distinct, pooled, resampled
from emu.inference.maps import fit_maps
from emu.inference.sampling import ensembles, nested, nested_about, sample_exactly
from emu.problem import Problem
from tests.reference.toy import ToyCampaign, ToyModel, exact_evidence, exact_posterior

PROBLEM = Problem(ToyModel(), ToyCampaign())


@pytest.fixture(scope="module")
def rows():
    rng = np.random.default_rng(1)
    truth = PROBLEM.prior.sample(1, rng)
    return PROBLEM.simulate(truth, PROBLEM.campaign.draw(1, rng), rng)[0].rows(0)


@pytest.fixture(scope="module")
def scout(rows):
    return nested(PROBLEM, rows, live=200, seed=3)


@pytest.fixture(scope="module")
def second(rows, scout):
    return nested_about(PROBLEM, rows, scout, live=400, seed=4)


def scores(draws: Draws, rows):
    """Return mean (P,) and covariance (P, P) in units in which the exact ones are 0 and the identity."""
    mean, covariance = exact_posterior(PROBLEM, rows)
    white = np.linalg.solve(np.linalg.cholesky(covariance), (draws.theta - mean).T).T
    centre = draws.weight @ white
    return centre, (draws.weight[:, None] * (white - centre)).T @ (white - centre)


def test_nested_finds_evidence_and_moments(rows, scout):
    assert scout.log_evidence == pytest.approx(exact_evidence(PROBLEM, rows), abs=3.0 * scout.log_evidence_error)
    centre, covariance = scores(scout, rows)
    np.testing.assert_allclose(centre, 0.0, atol=0.15)
    np.testing.assert_allclose(covariance, np.eye(4), atol=0.2)


def test_nested_about_draws_is_more_exact(rows, scout, second):
    assert second.log_evidence_error < 0.5 * scout.log_evidence_error
    assert second.log_evidence == pytest.approx(exact_evidence(PROBLEM, rows), abs=3.0 * second.log_evidence_error)
    centre, covariance = scores(second, rows)
    np.testing.assert_allclose(centre, 0.0, atol=0.1)
    np.testing.assert_allclose(covariance, np.eye(4), atol=0.15)


def test_nested_about_wrong_draws_still_finds_the_truth(rows, second):
    # Draws that are displaced by two deviations and half as wide again: slower, but no less right.
    mean, covariance = exact_posterior(PROBLEM, rows)
    rng = np.random.default_rng(8)
    wrong = rng.multivariate_normal(mean + 2.0 * np.sqrt(np.diag(covariance)), 2.25 * covariance, 1000)
    about = Draws(wrong, np.full(1000, -np.log(1000)), np.nan, np.nan, 0, 0.0, "wrong")
    found = nested_about(PROBLEM, rows, about, live=400, seed=5)
    assert found.log_evidence == pytest.approx(exact_evidence(PROBLEM, rows), abs=4.0 * found.log_evidence_error)
    np.testing.assert_allclose(scores(found, rows)[0], 0.0, atol=0.12)


def test_the_prior_cut_to_valid_parameters_is_the_one_that_counts():
    # Half of the box is valid; the likelihood is a normal in the middle of that half: Z = 1 / (1/2) in
    # the cut prior, so ln Z = ln 2 where the box alone would give 0.
    class Halved:
        prior = Prior((Parameter("x", "x", "", Uniform(-1.0, 1.0)), Parameter("y", "y", "", Uniform(-0.5, 0.5))),
                      lambda theta: theta[:, 0] > 0.0)
        parameters = prior.parameters

    import emu.inference.counted as counted

    density = multivariate_normal([0.5, 0.0], 0.03**2)
    patch = pytest.MonkeyPatch()
    patch.setattr(counted, "log_likelihood", lambda problem, theta, rows: density.logpdf(theta) + np.log(2.0))
    try:
        found = nested(Halved(), None, live=200, seed=1)
        again = nested_about(Halved(), None, found, live=200, seed=1)
    finally:
        patch.undo()
    assert found.log_evidence == pytest.approx(np.log(2.0), abs=3.0 * found.log_evidence_error)
    assert again.log_evidence == pytest.approx(np.log(2.0), abs=3.0 * again.log_evidence_error + 0.02)


def test_ensembles_agree_with_each_other_and_the_closed_form(rows, second):
    found = ensembles(PROBLEM, rows, start=second, walkers=24, steps=2000, seed=1)
    assert found.converged
    centre, covariance = scores(found.draws(), rows)
    np.testing.assert_allclose(centre, 0.0, atol=0.05)
    np.testing.assert_allclose(covariance, np.eye(4), atol=0.07)


def test_one_call_samples_exactly_and_repeats_itself(rows):
    answers = [sample_exactly(PROBLEM, rows, live=80, steps=500, seed=2) for _ in range(2)]
    np.testing.assert_array_equal(answers[0].draws.theta, answers[1].draws.theta)
    assert answers[0].draws.log_evidence == answers[1].draws.log_evidence
    assert answers[0].draws.calls > 10_000


def test_distinct_draws_follow_the_weights_without_repetition():
    theta = np.linspace(0.0, 1.0, 200_001)[:, None]
    weight = 2.0 * theta[:, 0]  # a triangle: mean 2/3, mean square 1/2
    draws = Draws(theta, np.log(weight.clip(1e-300) / weight.sum()), 0.0, 0.0, 0, 0.0, "triangle")
    rng = np.random.default_rng(0)
    chosen = theta[distinct(draws, rng), 0]
    assert len(np.unique(chosen)) == len(chosen)
    assert chosen.mean() == pytest.approx(2 / 3, abs=0.004)
    assert (chosen**2).mean() == pytest.approx(0.5, abs=0.005)
    assert theta[resampled(draws, 50_000, rng), 0].mean() == pytest.approx(2 / 3, abs=0.002)
    assert len(distinct(draws, rng, 10)) == 10


def test_pooled_runs_share_equally_unless_one_found_nothing():
    one, other, lost = (Draws(np.full((5, 1), value), np.full(5, -np.log(5)), log_z, 0.1, 10, 1.0, "nested")
                        for value, log_z in ((0.0, 3.0), (1.0, 0.0), (9.0, -50.0)))
    joined = pooled((one, other, lost))
    assert joined.weight @ joined.theta[:, 0] == pytest.approx(0.5)
    assert np.isnan(joined.log_evidence)
    assert joined.calls == 30


def test_fitted_maps_follow_a_curved_ridge_and_are_normalised():
    rng = np.random.default_rng(0)
    ridge = rng.standard_normal((4000, 3))
    ridge[:, 1] = ridge[:, 0] ** 2 + 0.05 * ridge[:, 1]
    maps = fit_maps(ridge, seed=1)

    def exact(y):
        normal = multivariate_normal(np.zeros(3)).logpdf
        return normal(np.stack([y[:, 0], (y[:, 1] - y[:, 0] ** 2) / 0.05, y[:, 2]], axis=1)) - np.log(0.05)

    proposal = maps.sample(20_000, np.random.RandomState(2))
    weight = np.exp(exact(proposal) - maps.log_prob(proposal))
    assert weight.mean() == pytest.approx(1.0, abs=0.05)  # both densities have unit volume
    assert weight.sum() ** 2 / (weight**2).sum() / len(weight) > 0.2


def test_quantiles_of_a_map_are_draws_of_it():
    rng = np.random.default_rng(0)
    one = fit_maps(rng.standard_normal((500, 2)), seed=1, most=1).maps[0]
    u = (np.stack(np.meshgrid(*[np.arange(400)] * 2), axis=-1).reshape(-1, 2) + 0.5) / 400
    step = 1e-6
    ahead = [one.quantile(u + step * axis) - one.quantile(u - step * axis) for axis in np.eye(2)]
    jacobian = np.abs(np.linalg.det(np.stack(ahead, axis=-1) / (2 * step)))
    np.testing.assert_allclose(one.log_prob(one.quantile(u)), -np.log(jacobian), atol=1e-3)


def test_rhat_of_equal_and_displaced_chains():
    rng = np.random.default_rng(0)
    chains = rng.standard_normal((4, 5000))
    assert rank_rhat(chains) < 1.002
    # Two of four chains displaced by d: R-hat^2 - 1 -> var of chain means / 1, normal scores aside.
    assert rank_rhat(chains + np.array([[0.0], [0.0], [0.5], [0.5]])) > 1.02
    assert rank_rhat(chains * np.array([[1.0], [1.0], [1.5], [1.5]])) > 1.01  # folded: the widths differ
    arviz = pytest.importorskip("arviz", exc_type=ImportError)
    shifted = chains + np.array([[0.0], [0.1], [0.2], [0.3]])
    assert rank_rhat(shifted) == pytest.approx(float(arviz.rhat(shifted)), abs=2e-4)


def test_memory_of_an_autoregressive_chain():
    # An AR(1) process of coefficient c has autocorrelation time (1 + c) / (1 - c), closed form.
    rng, c = np.random.default_rng(0), 0.8
    noise = rng.standard_normal((2, 4000, 30)) * np.sqrt(1 - c * c)
    chain = np.zeros_like(noise)
    for step in range(1, noise.shape[1]):
        chain[:, step] = c * chain[:, step - 1] + noise[:, step]
    assert length_over_memory(chain) == pytest.approx(4000 / 9.0, rel=0.1)
