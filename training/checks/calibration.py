"""All checks that need only the estimator's own answers: ranks, coverage, balls, gain, contraction."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from emu.problem import Problem
from training.checks.answers import Answers
from training.checks.contraction import Gain, contraction, gain
from training.checks.coverage import CoverageCheck, central_levels, check_coverage, density_levels
from training.checks.ranks import RankCheck, check_ranks, fractional_ranks
from training.checks.tarp import TarpCheck, check_tarp, tarp_levels

__all__ = ["Calibration", "check_calibration"]


@dataclass(frozen=True)
class Calibration:
    """Hold the results of all calibration checks on N flares.

    Args:
        ranks: simulation-based calibration.
        central: coverage of central intervals, one check a parameter.
        density: coverage of highest-density regions.
        tarp: coverage of balls about random points, in normal scores of the prior.
        gain: log density at the truth over the prior's.
        contraction: (N, P).
    """

    ranks: RankCheck
    central: tuple[CoverageCheck, ...]
    density: CoverageCheck
    tarp: TarpCheck
    gain: Gain
    contraction: np.ndarray

    @property
    def passed(self) -> dict[str, bool]:
        """Say which checks the estimator passed."""
        return {
            "ranks": self.ranks.passed,
            "central intervals": all(check.passed for check in self.central),
            "highest-density regions": self.density.passed,
            "balls (TARP)": self.tarp.passed,
            "gain over the prior": self.gain.mean > 3.0 * self.gain.error and not self.gain.impossible,
        }


def check_calibration(answers: Answers, problem: Problem, *, level: float, seed: int = 0) -> Calibration:
    """Run the checks.

    Args:
        answers: of the estimator on held-out flares.
        problem: which it claims to answer.
        level: probability that a right posterior passes one check.
        seed: spreads ranks and pairs flares.
    """
    rng = np.random.default_rng(seed)
    names, keep = problem.prior.names, answers.keep
    ranks = fractional_ranks(answers.truth, answers.theta, rng, keep)
    each = level ** (1.0 / len(names))
    central = tuple(check_coverage(name, levels, each)
                    for name, levels in zip(names, central_levels(ranks).T, strict=True))
    density = density_levels(answers.log_q_truth, answers.log_q, rng, keep)
    to_gauss = problem.prior.to_gauss
    balls = tarp_levels(to_gauss(answers.truth), to_gauss(answers.theta), rng, keep)
    prior_draws = problem.prior.sample(20_000, rng)
    return Calibration(
        ranks=check_ranks(names, ranks, level), central=central,
        density=check_coverage("highest density", density, level),
        tarp=check_tarp(balls, answers.theta.shape[1], level=level, seed=seed),
        gain=gain(answers.log_q_truth, answers.log_prior_truth),
        contraction=contraction(answers.theta, prior_draws, problem.parameters, keep),
    )
