"""Times, kinds and errors say nothing about a flare's parameters: exchange them and nothing changes."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy.stats import rankdata

from emu.configs import config_names
from emu.families.parameters import Parameter
from emu.families.priors import LogUniform, Uniform
from emu.observe.campaign import campaign
from emu.observe.rows import RowBatch
from emu.problem import Problem

FLARES = 1000
SHUFFLES = 300
COLUMNS = ("time", "kind", "value", "error", "mask")


@dataclass(frozen=True)
class Swinging:
    """Give every kind of row from three parameters, cheaply."""

    name: str = "swinging"
    parameters: tuple[Parameter, ...] = (
        Parameter("level", "A", "", LogUniform(0.3, 3.0)),
        Parameter("share", "h", "", Uniform(0.05, 1.0)),
        Parameter("size", "r", "GM/c2", Uniform(5.0, 15.0)),
    )
    kinds: tuple[str, ...] = ("flux", "q", "u", "east", "north")
    standard_frame: bool = False

    def valid(self, theta: np.ndarray) -> np.ndarray:
        return np.isfinite(theta).all(axis=1)

    def curves(self, theta: np.ndarray, times: np.ndarray) -> dict[str, np.ndarray]:
        level, share, size = theta.T[:, :, None]
        angle = np.atleast_2d(times) / size**1.5
        return {
            "flux": level * np.exp(-0.5 * (np.atleast_2d(times) / 60.0) ** 2),
            "q": 0.7 * share * np.cos(2 * angle),
            "u": 0.7 * share * np.sin(2 * angle),
            "east": size * np.cos(angle),
            "north": size * np.sin(angle),
        }

    def scatter(self, theta: np.ndarray) -> None:
        return None


def exchange(batch: RowBatch, order: np.ndarray) -> RowBatch:
    """Give each flare the times, kinds and errors of another."""
    return RowBatch(*(getattr(batch, column)[order] for column in COLUMNS))


def summaries(theta: np.ndarray, batch: RowBatch) -> np.ndarray:
    """Describe each flare by parameters, schedule, errors and measured values: (B, S)."""
    columns = [*theta.T, np.ptp(batch.time, axis=1)]
    for code in np.unique(batch.kind[batch.mask]):
        mine = batch.mask & (batch.kind == code)
        some = np.maximum(mine.sum(axis=1), 1)
        columns += [mine.sum(axis=1), np.sum(mine * np.log(batch.error), axis=1) / some]
        columns += [np.sum(mine * batch.value, axis=1) / some, np.sum(mine * batch.value**2, axis=1) / some]
        columns += [np.sum(mine * batch.time * batch.value, axis=1) / some]
    return np.stack(columns, axis=1).astype(float)


def products(table: np.ndarray) -> np.ndarray:
    """Return what the average of makes the rank correlations of all columns and of their squares."""
    # Average ranks: ties, as of flares without positions, must not be broken by their place in the table.
    rank = rankdata(table, axis=0) / len(table) - 0.5
    both = np.concatenate([rank, rank**2 - np.mean(rank**2, axis=0)], axis=1)
    both /= both.std(axis=0)
    one, other = np.triu_indices(both.shape[1])
    return np.concatenate([both, both[:, one] * both[:, other]], axis=1)


def p_value(one: np.ndarray, other: np.ndarray, rng: np.random.Generator) -> float:
    """Return the permutation p-value of the largest difference between the samples' averages.

    A permutation test is exact whatever the statistic (e.g. Good, Permutation Tests).
    """
    features = products(np.concatenate([one, other]))
    sign = np.repeat([1.0, -1.0], [len(one), len(other)]) / len(one)
    shuffled = np.stack([sign, *(rng.permutation(sign) for _ in range(SHUFFLES))])
    largest = np.abs(shuffled @ features).max(axis=1)
    return float(np.mean(largest >= largest[0]))


def compare(problem: Problem, rng: np.random.Generator, peek: float) -> float:
    """Compare flares with flares whose schedules were exchanged; `peek` lets errors follow the level."""
    samples = []
    # Fresh flares for either sample, or the two would not be independent.
    for order in (np.arange(FLARES), rng.permutation(FLARES)):
        theta = problem.prior.sample(FLARES, rng)
        batch = problem.campaign.draw(FLARES, rng)
        batch = batch.replace(error=np.where(batch.mask, batch.error * theta[:, :1] ** peek, 1.0))
        simulated, _ = problem.simulate(theta, exchange(batch, order), rng)
        samples.append(summaries(theta, simulated))
    return p_value(*samples, rng)


@pytest.mark.parametrize("name", config_names("campaigns"))
def test_exchanging_schedules_and_errors_changes_nothing(name: str) -> None:
    rng = np.random.default_rng(20)
    assert compare(Problem(Swinging(), campaign(name)), rng, peek=0.0) > 0.01


@pytest.mark.parametrize("name", config_names("campaigns"))
def test_a_campaign_that_peeks_is_noticed(name: str) -> None:
    # Errors that grow as the root of the brightness, as photon noise does, are informative.
    rng = np.random.default_rng(21)
    assert compare(Problem(Swinging(), campaign(name)), rng, peek=0.5) < 0.01
