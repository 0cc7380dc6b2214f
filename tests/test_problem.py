"""A problem joins parameters, predicts rows and invents measurements that its own likelihood expects."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from emu.errors import UserError
from emu.observe.nuisance import Jitter
from emu.observe.rows import KINDS, RowBatch, Rows
from emu.problem import Problem
from tests.reference.toy import ToyCampaign, ToyModel

Q, U, BIG_Q = (KINDS.index(kind) for kind in ("q", "u", "Q"))


def rows(kinds, times, error=0.05):
    kind = np.array([KINDS.index(k) for k in kinds], np.int8)
    return Rows(np.array(times, float), kind, np.zeros(len(kind)), np.full(len(kind), error))


class Counting(ToyModel):
    """Count the times that were asked for."""

    asked = 0

    def curves(self, theta, times):
        Counting.asked = np.shape(times)[-1]
        return super().curves(theta, times)


def test_parameters_of_the_instrument_follow_those_of_the_model():
    problem = Problem(ToyModel(), ToyCampaign(nuisances=(Jitter(0.001, 0.05),)))
    assert problem.prior.names == ("level", "trend", "swing", "bend", "jitter_q_u")
    assert problem.index("jitter_q_u") == 4
    with pytest.raises(UserError, match="no parameter 'spin'"):
        problem.index("spin")


def test_a_name_used_twice_is_refused():
    effects = (Jitter(0.001, 0.05), Jitter(0.001, 0.05))
    with pytest.raises(UserError, match="jitter_q_u"):
        _ = Problem(ToyModel(), ToyCampaign(nuisances=effects)).parameters


def test_mean_picks_the_curve_of_each_row_and_computes_a_time_once():
    problem = Problem(Counting(), ToyCampaign())
    theta = np.array([[1.0, 0.5, 0.2, 0.1], [2.0, 0.0, 0.1, 0.0]])
    mean, failures = problem.mean(theta, rows(("flux", "q", "u", "Q", "U"), (30, 0, 30, 30, 0)))
    swing = 0.05 * 30
    flux = 1.0 + 0.5 * 30 / 60
    q, u = 0.2 * np.cos(swing) + 0.1, 0.2 * np.sin(swing) - 0.1 * 30 / 60
    np.testing.assert_allclose(mean[0], [flux, 0.3, u, q * flux, 0.0], atol=1e-12)
    assert mean.shape == (2, 5)
    assert not failures.any()
    assert Counting.asked == 2


def test_rows_the_model_cannot_predict_are_named():
    problem = Problem(ToyModel(), ToyCampaign())
    with pytest.raises(UserError, match="no 'east'"):
        problem.mean(np.array([[1.0, 0.0, 0.0, 0.0]]), rows(("flux", "east"), (0, 1)))


def test_a_value_that_is_no_number_counts_as_a_failure():
    class Torn(ToyModel):
        def curves(self, theta, times):
            curves = super().curves(theta, times)
            curves["q"][0, 0] = np.nan
            return curves

    mean, failures = Problem(Torn(), ToyCampaign()).mean(np.ones((2, 4)), rows(("q", "u"), (0, 1)))
    assert failures.tolist() == [1, 0]
    assert np.isfinite(mean).all()


def repeated(schedule, count):
    return RowBatch.stack([schedule] * count)


def test_simulated_noise_has_the_stated_variance():
    problem = Problem(ToyModel(), ToyCampaign(nuisances=(Jitter(0.001, 0.5),)))
    schedule = rows(("flux", "q", "u", "Q"), (-20, -10, 5, 30))
    theta = np.tile([1.2, 0.3, 0.2, 0.1, 0.2], (20_000, 1))
    batch, _ = problem.simulate(theta, repeated(schedule, len(theta)), np.random.default_rng(1))
    mean, _ = problem.mean(theta[:1], schedule)
    variance = np.array([0.05**2, 0.05**2 + 0.2**2, 0.05**2 + 0.2**2, 0.05**2])
    np.testing.assert_allclose(problem.variance(theta[:1], schedule)[0], variance)
    for row in range(4):
        fits = stats.kstest(batch.value[:, row], stats.norm(mean[0, row], np.sqrt(variance[row])).cdf)
        assert fits.pvalue > 1e-3


def test_simulated_wander_has_the_stated_covariance():
    sigma, lifetime = 0.3, 12.0
    problem = Problem(ToyModel(wander=(sigma, lifetime)), ToyCampaign())
    # Out of order, with a repeated time, and a Q row that sees the same wander times the flux.
    schedule = rows(("q", "u", "q", "Q", "u", "q", "flux"), (10, 3, -5, 2, 3, 10, 0), error=0.01)
    theta = np.tile([1.5, 0.0, 0.2, 0.1], (40_000, 1))
    batch, _ = problem.simulate(theta, repeated(schedule, len(theta)), np.random.default_rng(2))
    gap = np.abs(schedule.time[:, None] - schedule.time[None, :])
    lever_q = np.where(schedule.kind == Q, 1.0, np.where(schedule.kind == BIG_Q, 1.5, 0.0))
    lever_u = np.where(schedule.kind == U, 1.0, 0.0)
    both = np.outer(lever_q, lever_q) + np.outer(lever_u, lever_u)
    expected = sigma**2 * both * np.exp(-gap / lifetime) + np.diag(schedule.error**2)
    # A covariance from 40,000 draws has a standard error of at most sqrt(2/40000) of the variances.
    tolerance = 5 * np.sqrt(2 / 40_000) * np.diag(expected).max()
    np.testing.assert_allclose(np.cov(batch.value.T), expected, atol=tolerance)


def test_padding_stays_empty_and_seeds_repeat():
    problem = Problem(ToyModel(wander=(0.1, 10.0)), ToyCampaign())
    theta = problem.prior.sample(50, np.random.default_rng(3))
    schedule = problem.campaign.draw(50, np.random.default_rng(4))
    first, _ = problem.simulate(theta, schedule, np.random.default_rng(5))
    again, _ = problem.simulate(theta, schedule, np.random.default_rng(5))
    assert not schedule.mask.all()
    assert np.all(first.value[~first.mask] == 0.0)
    np.testing.assert_array_equal(first.value, again.value)


def test_longer_padding_changes_no_wander_statistics():
    problem = Problem(ToyModel(wander=(0.3, 12.0)), ToyCampaign())
    schedule = rows(("q", "q"), (0, 6))
    batch = repeated(schedule, 20_000)
    wide = RowBatch(
        **{name: np.pad(getattr(batch, name), ((0, 0), (3, 2))) for name in ("time", "kind", "value", "mask")},
        error=np.pad(batch.error, ((0, 0), (3, 2)), constant_values=1.0),
    )
    theta = np.tile([1.0, 0.0, 0.0, 0.0], (20_000, 1))
    drawn, _ = problem.simulate(theta, wide, np.random.default_rng(6))
    covariance = np.cov(drawn.value[:, 3:5].T)
    diagonal = 0.3**2 + 0.05**2
    expected = [[diagonal, 0.09 * np.exp(-0.5)], [0.09 * np.exp(-0.5), diagonal]]
    np.testing.assert_allclose(covariance, expected, atol=5 * np.sqrt(2 / 20_000) * diagonal)


def test_problems_are_values():
    assert Problem(ToyModel(), ToyCampaign()) == Problem(ToyModel(), ToyCampaign())
    assert Problem(ToyModel(), ToyCampaign()) != replace(Problem(ToyModel(), ToyCampaign()), model=ToyModel("other"))
