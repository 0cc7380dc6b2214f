"""Coverage across families: what the posterior of family A says of flares that family B made."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.problem import Problem
from training.checks.contraction import contraction
from training.checks.coverage import central_levels
from training.checks.estimator import Estimator
from training.checks.held_out import held_out_batch
from training.checks.ranks import fractional_ranks

__all__ = ["SHARED", "Across", "check_across"]

SHARED = ("spin", "inclination", "axis_angle", "radius")


@dataclass(frozen=True)
class Across:
    """Hold the matrix: rows are the family that answers (A), columns the one that made the flares (B).

    Args:
        families: F names.
        shared: S parameters that all have.
        coverage: (F, F, S) share of truths within the central 68 % interval.
        contraction: (F, F, S) median over flares of 1 - posterior over prior variance.
        cases: flares a column; the binomial error of a coverage of 0.68 is sqrt(0.68 0.32 / cases).
        redrawn: parameter vectors of each family that could not be computed and were replaced.
    """

    families: tuple[str, ...]
    shared: tuple[str, ...]
    coverage: NDArray[np.float64]
    contraction: NDArray[np.float64]
    cases: int
    redrawn: tuple[int, ...]

    @property
    def error(self) -> float:
        """Return the binomial error of a coverage of 0.68."""
        return float(np.sqrt(0.68 * 0.32 / self.cases))

    def misled(self) -> tuple[tuple[str, str, str], ...]:
        """List (A, B, parameter) whose coverage is more than three errors below 0.68."""
        low = np.argwhere(self.coverage < 0.68 - 3.0 * self.error)
        return tuple((self.families[a], self.families[b], self.shared[s]) for a, b, s in low)


def check_across(estimators: dict[str, Estimator], problems: dict[str, Problem], *, cases: int = 300,
                 draws: int = 500, seed: int = 0, shared: tuple[str, ...] = SHARED) -> Across:
    """Let every family's estimator answer flares of every family.

    Ranks of the axis angle are taken along its circle from half a turn below the posterior's mean, so the
    interval does not depend on where the circle is cut.

    Args:
        estimators: by family.
        problems: by family, all on one campaign.
        cases: flares of each family.
        draws: posterior draws a flare.
        seed: of all randomness.
        shared: parameters to look at.
    """
    families = tuple(estimators)
    shape = len(families), len(families), len(shared)
    covered, learned = np.empty(shape), np.empty(shape)
    redrawn = []
    for b, maker in enumerate(families):
        flares = held_out_batch(problems[maker], cases, seed + b)
        redrawn.append(flares.redrawn)
        truth = flares.truth[:, [problems[maker].index(name) for name in shared]]
        for a, judge in enumerate(families):
            theta, _ = estimators[judge].sample(flares.batch, draws, seed + 1000 + a)
            columns = [problems[judge].index(name) for name in shared]
            covered[a, b], learned[a, b] = _compare(truth, theta[..., columns], problems[judge], columns)
    return Across(families, shared, covered, learned, cases, tuple(redrawn))


def _compare(truth: NDArray[np.float64], theta: NDArray[np.float64], judge: Problem,
             columns: list[int]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return coverage (S,) and median contraction (S,) of truths (N, S) by draws (N, D, S)."""
    rng = np.random.default_rng(0)
    parameters = tuple(judge.parameters[column] for column in columns)
    learned = contraction(theta, judge.prior.sample(20_000, rng)[:, columns], parameters)
    truth, theta = truth.copy(), theta.copy()
    for s, parameter in enumerate(parameters):
        if parameter.circular:
            mean = np.degrees(np.angle(np.exp(1j * np.radians(theta[..., s])).mean(axis=1)))
            truth[:, s] = (truth[:, s] - mean + 180.0) % 360.0
            theta[..., s] = (theta[..., s] - mean[:, None] + 180.0) % 360.0
    levels = central_levels(fractional_ranks(truth, theta, rng))
    return np.mean(levels <= 0.68, axis=0), np.median(learned, axis=0)
