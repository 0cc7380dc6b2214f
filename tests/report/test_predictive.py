"""Predicted bands against the closed form: linear curves of a Gaussian posterior are Gaussian."""

import numpy as np
from scipy import stats

from emu.observe.rows import KINDS, Rows
from emu.problem import Problem
from emu.report.predictive import predict, spread
from tests.reference.toy import ExactEstimator, ToyCampaign, ToyModel, exact_posterior

LEVELS = (0.025, 0.5, 0.975)
TIMES = np.linspace(-60.0, 60.0, 9)
ERRORS = {"flux": 0.05, "q": 0.03, "u": 0.04}


def case():
    problem = Problem(ToyModel(wander=(0.06, 15.0)), ToyCampaign())
    rng = np.random.default_rng(8)
    theta = problem.prior.sample(1, rng)
    batch, _ = problem.simulate(theta, problem.campaign.draw(1, rng), rng)
    draws, _ = ExactEstimator(problem).sample(batch, 4000, seed=3)
    return problem, batch.rows(0), draws[0]


def grid(kind: str) -> Rows:
    zero = np.zeros_like(TIMES)
    return Rows(TIMES, np.full(len(TIMES), KINDS.index(kind), np.int8), zero, zero + ERRORS[kind])


def test_bands_of_the_curve() -> None:
    problem, rows, draws = case()
    found = predict(problem, draws, TIMES, ERRORS)
    mean, covariance = exact_posterior(problem, rows)
    for kind in ERRORS:
        design = problem.model.design(grid(kind))
        sigma = np.sqrt(np.einsum("ti,ij,tj->t", design, covariance, design))
        expected = design @ mean + np.outer(stats.norm.ppf(LEVELS), sigma)
        np.testing.assert_allclose(spread(found.curves[kind], LEVELS), expected, atol=0.12 * sigma.max())
    assert found.dropped == 0


def test_bands_of_a_new_measurement_hold_error_and_wander() -> None:
    problem, rows, draws = case()
    found = predict(problem, draws, TIMES, ERRORS)
    mean, covariance = exact_posterior(problem, rows)
    for kind, error in ERRORS.items():
        design = problem.model.design(grid(kind))
        noise = error**2 + (0.06**2 if kind in ("q", "u") else 0.0)
        sigma = np.sqrt(np.einsum("ti,ij,tj->t", design, covariance, design) + noise)
        expected = design @ mean + np.outer(stats.norm.ppf(LEVELS), sigma)
        measured = spread(found.curves[kind], LEVELS, found.deviation[kind])
        np.testing.assert_allclose(measured, expected, atol=0.04 * sigma.max())


def test_band_of_one_certain_curve_is_the_normal_interval() -> None:
    curve, deviation = np.array([[0.0, 1.0, -3.0]]), np.array([[1.0, 0.2, 5.0]])
    expected = curve + np.outer(stats.norm.ppf(LEVELS), deviation[0])
    np.testing.assert_allclose(spread(curve, LEVELS, deviation), expected, atol=1e-6)


def test_draws_that_cannot_be_computed_are_counted() -> None:
    problem, _, draws = case()
    bad = draws[:50].copy()
    bad[:7, 0] = np.nan
    found = predict(problem, bad, TIMES, ERRORS)
    assert found.dropped == 7
    assert found.curves["q"].shape == (43, len(TIMES))
