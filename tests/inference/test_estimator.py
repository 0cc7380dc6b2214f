"""The estimator approaches the exact posterior of the closed-form model, and is one density throughout."""

import numpy as np
import pytest
import torch

from emu.inference.embedding import Grid
from emu.inference.estimator import NeuralEstimator
from emu.observe.rows import RowBatch
from tests.reference.toy import ExactEstimator
from tests.training.small import RECIPE, SMALL, observed, small_set
from training.fit_estimator import estimator_task, nats_over_prior, network_of
from training.loop import train
from training.material import Material, measured_kinds
from training.recipe import parse_recipe
from training.store import TrainingSet


@pytest.fixture(scope="module")
def trained(tmp_path_factory):
    """Train for a few seconds: the estimator, and what it was trained on."""
    folder = tmp_path_factory.mktemp("trained")
    stored = TrainingSet.load(small_set(folder / "set", flares=4000))
    recipe = parse_recipe(RECIPE, "recipe.toml")
    grid = Grid(measured_kinds(SMALL), recipe.embedding.nodes, stored.layout.half_span)
    material = Material(SMALL, stored, recipe.held_out, grid)
    outcome = train(estimator_task(material, recipe, 0, "set"), recipe.loop, 600, folder / "c.safetensors")
    return NeuralEstimator(network_of(material, recipe), SMALL.prior, outcome.weights), outcome, material


def test_it_comes_close_to_the_exact_posterior(trained):
    estimator, _, _ = trained
    theta, rows = observed(300, seed=5)
    exact = ExactEstimator(SMALL).log_prob(theta, rows).mean()
    prior = SMALL.prior.log_prob(theta).mean()
    found = estimator.log_prob(theta, rows).mean()
    assert exact - prior > 5  # there is much to be learnt
    # The mean of ln p - ln q at the truth is the divergence: never negative beyond noise.
    assert -0.1 < exact - found < 0.25 * (exact - prior)


def test_the_held_out_loss_is_told_in_nats_over_the_prior(trained):
    estimator, outcome, material = trained
    theta, rows = observed(2000, seed=6)
    gain = (estimator.log_prob(theta, rows) - SMALL.prior.log_prob(theta)).mean()
    assert nats_over_prior(outcome.best, material, 0) == pytest.approx(gain, abs=0.35)


def test_draws_carry_the_density_that_log_prob_gives(trained):
    estimator, _, _ = trained
    _, rows = observed(11, seed=7)
    theta, log_q = estimator.sample(rows, 200, seed=1)
    assert theta.shape == (11, 200, 4)
    np.testing.assert_allclose(estimator.log_prob(theta, rows), log_q, atol=5e-3)
    np.testing.assert_allclose(estimator.log_prob(theta[:, 3], rows), log_q[:, 3], atol=5e-3)


def test_draws_have_the_exact_mean_and_width_on_average(trained):
    estimator, _, _ = trained
    _, rows = observed(40, seed=8)
    found, _ = estimator.sample(rows, 500, seed=1)
    exact, _ = ExactEstimator(SMALL).sample(rows, 500, seed=2)
    ratio = found.std(axis=1) / exact.std(axis=1)
    assert (np.median(ratio, axis=0) > 0.85).all()
    assert (np.median(ratio, axis=0) < 2).all()
    shift = (found.mean(axis=1) - exact.mean(axis=1)) / found.std(axis=1)
    assert np.sqrt((shift**2).mean(axis=0)).max() < 1


def test_seed_and_place_alone_decide_the_draws(trained):
    estimator, _, _ = trained
    _, rows = observed(20, seed=9)
    theta, log_q = estimator.sample(rows, 50, seed=1)
    threads, log_threads = estimator.sample(rows, 50, seed=1, workers=3)
    np.testing.assert_array_equal(theta, threads)
    np.testing.assert_array_equal(log_q, log_threads)
    assert not np.isin(estimator.sample(rows, 50, seed=2)[0], theta).any()


def test_progress_counts_every_flare_and_none_is_no_error(trained):
    estimator, _, _ = trained
    done = []
    estimator.sample(observed(21, seed=9)[1], 10, seed=1, progress=done.append)
    assert sum(done) == 21
    theta, log_q = estimator.sample(RowBatch.stack([]), 10, seed=1)
    assert theta.shape == (0, 10, 4)
    assert log_q.shape == (0, 10)


def test_outside_the_prior_s_bounds_the_density_is_zero(trained):
    estimator, _, _ = trained
    theta, rows = observed(3, seed=10)
    bounds = np.array([parameter.bounds for parameter in estimator.parameters])
    if np.isfinite(bounds).all():
        theta[1, 2] = bounds[2, 1] + 1
        found = estimator.log_prob(theta, rows)
        assert np.isneginf(found).tolist() == [False, True, False]


def test_the_sbi_container_sees_the_same_density(trained):
    estimator, _, material = trained
    z, features = material.kept(np.random.default_rng(1))
    with torch.no_grad():
        loss = estimator.density.loss(z[:50], features[:50])
        own = -estimator.density.net(estimator.density.embedding_net(features[:50])).log_prob(z[:50])
    np.testing.assert_allclose(loss.numpy(), own.numpy(), rtol=1e-5, atol=1e-5)
