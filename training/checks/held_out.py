"""Held-out flares with known truth: drawn by a seed, so that none can be chosen after the fact."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.errors import UserError
from emu.observe.rows import KINDS, RowBatch, Rows
from emu.problem import Problem

__all__ = ["HeldOut", "HeldOutBatch", "held_out", "held_out_batch"]

_MOST_TRIES = 1000


@dataclass(frozen=True)
class HeldOut:
    """Hold one flare and the parameters that made it.

    Args:
        truth: (P,) parameters.
        rows: the flare in geometric units.
        redrawn: parameter vectors drawn before this one whose curve the model could not compute.
    """

    truth: NDArray[np.float64]
    rows: Rows
    redrawn: int


@dataclass(frozen=True)
class HeldOutBatch:
    """Hold N flares: truth (N, P), rows, and how many vectors could not be computed and were redrawn."""

    truth: NDArray[np.float64]
    batch: RowBatch
    redrawn: int


def held_out(problem: Problem, case: int, seed: int, kinds: tuple[str, ...] = ()) -> HeldOut:
    """Draw flare number `case` of a seed.

    Args:
        problem: draws parameters and measures them.
        case: counts from 0; a flare does not depend on how many others are drawn.
        seed: of the set of flares.
        kinds: row kinds that the schedule must hold. Schedules are drawn anew until it does, which says
            nothing about the parameters.

    Raises:
        UserError: no schedule in a thousand has these kinds.
    """
    rng = np.random.default_rng([seed, case])
    schedule = _schedule(problem, rng, kinds)
    for redrawn in range(_MOST_TRIES):
        truth = problem.prior.sample(1, rng)
        batch, failures = problem.simulate(truth, schedule, rng)
        if failures[0] == 0:
            return HeldOut(truth[0], batch.rows(0), redrawn)
    raise UserError(f"{problem.name}: none of {_MOST_TRIES} prior draws could be computed")


def held_out_batch(problem: Problem, count: int, seed: int) -> HeldOutBatch:
    """Draw many flares at once; vectors that cannot be computed are replaced and counted.

    Args:
        problem: draws parameters and measures them.
        count: flares.
        seed: of all randomness.
    """
    rng = np.random.default_rng(seed)
    truth, schedule = problem.prior.sample(count, rng), problem.campaign.draw(count, rng)
    batch, failures = problem.simulate(truth, schedule, rng)
    redrawn, bad = 0, failures > 0
    while bad.any():
        redrawn += int(bad.sum())
        if redrawn > _MOST_TRIES + 10 * count:
            raise UserError(f"{problem.name}: {redrawn} prior draws could not be computed")
        truth[bad] = problem.prior.sample(int(bad.sum()), rng)
        batch, failures = problem.simulate(truth, schedule, rng)
        bad = failures > 0
    return HeldOutBatch(truth, batch, redrawn)


def _schedule(problem: Problem, rng: np.random.Generator, kinds: tuple[str, ...]) -> RowBatch:
    """Draw schedules until one holds all kinds."""
    needed = {KINDS.index(kind) for kind in kinds}
    for _ in range(_MOST_TRIES):
        schedule = problem.campaign.draw(1, rng)
        if needed <= set(schedule.kind[schedule.mask].tolist()):
            return schedule
    raise UserError(f"campaign {problem.campaign.name}: no schedule in {_MOST_TRIES} has rows of {kinds}")
