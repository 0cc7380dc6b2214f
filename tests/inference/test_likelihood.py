"""The likelihood against dense multivariate normal densities (scipy) and closed-form evidence."""

from dataclasses import dataclass, replace

import numpy as np
import pytest
from scipy import stats

from emu.families.parameters import Parameter
from emu.families.priors import Uniform
from emu.inference.likelihood import log_likelihood, log_posterior
from emu.inference.wander import wander_log_density
from emu.observe.nuisance import Jitter
from emu.observe.rows import KINDS, Rows
from emu.problem import Problem
from tests.reference.toy import ToyCampaign, ToyModel, exact_evidence, exact_posterior


def parameter(name, low, high):
    return Parameter(name, name, "", Uniform(low, high))


@dataclass(frozen=True)
class Wandering:
    """Give a flux that varies, constant q and u, and a wander whose deviation and lifetime are free."""

    name: str = "wandering"
    kinds: tuple = ("flux", "q", "u")
    standard_frame: bool = False
    parameters: tuple = (
        parameter("flux", 0.5, 2.0),
        parameter("share", -0.3, 0.3),
        parameter("sigma", 0.02, 0.3),
        parameter("life", 2.0, 80.0),
    )

    def valid(self, theta):
        return theta[:, 1] > -0.25

    def curves(self, theta, times):
        times = np.broadcast_to(times, (len(theta), np.shape(times)[-1]))
        flux = theta[:, [0]] * np.exp(-0.5 * (times / 40.0) ** 2)
        share = theta[:, [1]] + 0.0 * times
        return {"flux": flux, "q": share, "u": -share, "failures": (theta[:, 0] > 1.9).astype(int)}

    def scatter(self, theta):
        return theta[:, 2], theta[:, 3]


def rows_of(kinds, rng, span=60.0):
    kind = np.array([KINDS.index(k) for k in kinds], np.int8)
    shape = kind.shape
    return Rows(rng.uniform(-span, span, shape), kind, rng.normal(0, 0.3, shape), rng.uniform(0.01, 0.1, shape))


def dense(problem, theta, rows):
    """Return the log density by the full covariance, written apart from the code under test."""
    flux, share, sigma, life, jitter = theta
    at_rows = flux * np.exp(-0.5 * (rows.time / 40.0) ** 2)
    names = np.array(KINDS)[rows.kind]
    mean, lever = np.empty(len(rows)), np.zeros(len(rows))
    for kind, value, moved in (
        ("flux", at_rows, 0.0),
        ("q", share, 1.0),
        ("u", -share, 1.0),
        ("Q", share * at_rows, at_rows),
        ("U", -share * at_rows, at_rows),
    ):
        mean = np.where(names == kind, value, mean)
        lever = np.where(names == kind, moved, lever)
    covariance = np.diag(rows.error**2 + np.where(np.isin(names, ["q", "u"]), jitter**2, 0.0))
    for group in (["q", "Q"], ["u", "U"]):
        weight = lever * np.isin(names, group)
        gap = np.abs(rows.time[:, None] - rows.time[None, :])
        covariance += sigma**2 * np.outer(weight, weight) * np.exp(-gap / life)
    return stats.multivariate_normal(mean, covariance).logpdf(rows.value)


@pytest.mark.parametrize(
    "kinds",
    [
        ("flux",) * 10 + ("q", "u") * 10,
        ("Q", "U") * 12 + ("flux",),
        ("q", "Q", "u", "U", "flux") * 5,
        ("flux",) * 3,
    ],
    ids=["fractions", "stokes", "both", "flux-only"],
)
def test_scatter_equals_the_dense_covariance(kinds):
    rng = np.random.default_rng(1)
    problem = Problem(Wandering(), ToyCampaign(nuisances=(Jitter(0.001, 0.05),)))
    rows = rows_of(kinds, rng)
    theta = problem.prior.sample(40, rng)
    theta = theta[theta[:, 0] <= 1.9]
    expected = [dense(problem, one, rows) for one in theta]
    np.testing.assert_allclose(log_likelihood(problem, theta, rows), expected, rtol=0, atol=1e-9)


def test_rows_at_one_time_share_the_wander():
    # Two equal times make the process covariance singular: only the independent noise separates the rows.
    rng = np.random.default_rng(2)
    problem = Problem(Wandering(), ToyCampaign(nuisances=(Jitter(0.001, 0.05),)))
    rows = rows_of(("q",) * 12, rng)
    rows = replace(rows, time=np.repeat(rows.time[:4], 3))
    theta = problem.prior.sample(5, rng)
    theta[:, 0] = 1.0
    expected = [dense(problem, one, rows) for one in theta]
    np.testing.assert_allclose(log_likelihood(problem, theta, rows), expected, rtol=0, atol=1e-9)


def test_order_of_rows_does_not_matter():
    rng = np.random.default_rng(3)
    problem = Problem(Wandering(), ToyCampaign())
    rows = rows_of(("q", "u", "Q", "flux") * 6, rng)
    mixed = rng.permutation(len(rows))
    other = Rows(rows.time[mixed], rows.kind[mixed], rows.value[mixed], rows.error[mixed])
    theta = problem.prior.sample(20, rng)
    np.testing.assert_allclose(log_likelihood(problem, theta, rows), log_likelihood(problem, theta, other), atol=1e-9)


@pytest.mark.parametrize("wander", [None, (0.1, 15.0)])
def test_posterior_density_closes_with_the_closed_form_evidence(wander):
    problem = Problem(ToyModel(wander=wander), ToyCampaign())
    rng = np.random.default_rng(4)
    batch, _ = problem.simulate(problem.prior.sample(2, rng), problem.campaign.draw(2, rng), rng)
    theta = problem.prior.sample(50, rng)
    for flare in range(2):
        rows = batch.rows(flare)
        posterior = stats.multivariate_normal(*exact_posterior(problem, rows)).logpdf(theta)
        np.testing.assert_allclose(
            log_posterior(problem, theta, rows), posterior + exact_evidence(problem, rows), atol=1e-7
        )


def test_failures_and_invalid_parameters_have_no_density():
    problem = Problem(Wandering(), ToyCampaign())
    rows = rows_of(("q", "u", "flux") * 4, np.random.default_rng(5))
    theta = np.array([[1.0, 0.1, 0.1, 10.0], [1.95, 0.1, 0.1, 10.0], [1.0, -0.28, 0.1, 10.0], [9.0, 0.1, 0.1, 10.0]])
    answer = log_posterior(problem, theta, rows)
    assert np.isfinite(answer[0])
    assert np.all(answer[1:] == -np.inf)


def test_vanishing_wander_is_independent_noise():
    rng = np.random.default_rng(6)
    residual, error = rng.normal(0, 0.1, (3, 20)), rng.uniform(0.05, 0.1, (3, 20))
    answer = wander_log_density(
        residual, error**2, np.ones((3, 20)), rng.uniform(-60, 60, 20), np.full(3, 1e-12), np.full(3, 10.0)
    )
    np.testing.assert_allclose(answer, stats.norm(0, error).logpdf(residual).sum(axis=1), atol=1e-9)
