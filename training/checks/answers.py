"""An estimator's answers on held-out flares, in the form all calibration checks take."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.observe.rows import RowBatch
from emu.problem import Problem
from training.checks.estimator import Estimator
from training.checks.held_out import held_out_batch

__all__ = ["Answers", "answer_held_out"]

Array = NDArray[np.float64]
_TOGETHER = 50


@dataclass(frozen=True)
class Answers:
    """Hold N flares with truth, and D draws of each.

    Args:
        truth: (N, P).
        batch: the flares.
        theta: (N, D, P) draws.
        keep: (N, D) True where a draw is possible under the prior.
        log_q: (N, D) log density of the draws, normalised over what is possible.
        log_q_truth: (N,) log density at the truth, likewise.
        log_prior_truth: (N,) log prior density at the truth.
        redrawn: parameter vectors whose curve could not be computed, replaced by others.
    """

    truth: Array
    batch: RowBatch
    theta: Array
    keep: NDArray[np.bool_]
    log_q: Array
    log_q_truth: Array
    log_prior_truth: Array
    redrawn: int

    @property
    def outside(self) -> float:
        """Return the share of draws that the prior excludes; they count for nothing."""
        return float(1.0 - self.keep.mean())


def answer_held_out(estimator: Estimator, problem: Problem, *, cases: int, draws: int, seed: int,
                    progress: Callable[[str], None] | None = None) -> Answers:
    """Draw held-out flares and let the estimator answer them.

    Draws that the prior excludes are marked, and the density is raised by their share: with these two
    steps the estimator is what it becomes where impossible draws are thrown away.

    Args:
        estimator: to be checked.
        problem: which it claims to answer.
        cases: flares N.
        draws: posterior draws D a flare.
        seed: of flares and draws.
        progress: called with lines of text.
    """
    flares = held_out_batch(problem, cases, seed)
    theta = np.empty((cases, draws, len(problem.parameters)))
    log_q, log_q_truth = np.empty((cases, draws)), np.empty(cases)
    for start in range(0, cases, _TOGETHER):
        part = slice(start, min(start + _TOGETHER, cases))
        some = RowBatch.stack([flares.batch.rows(i) for i in range(part.start, part.stop)])
        theta[part], log_q[part] = estimator.sample(some, draws, seed + 1 + start)
        log_q_truth[part] = estimator.log_prob(flares.truth[part], some)
        if progress is not None:
            progress(f"answered {part.stop} of {cases} held-out flares")
    flat = theta.reshape(-1, theta.shape[-1])
    keep = np.isfinite(problem.prior.log_prob(flat)).reshape(cases, draws)
    # A flare without one possible draw counts as if it had one: its truth stays without rank to hide in.
    share = np.log(np.maximum(keep.mean(axis=1), 1.0 / draws))
    return Answers(flares.truth, flares.batch, theta, keep, log_q - share[:, None], log_q_truth - share,
                   problem.prior.log_prob(flares.truth), flares.redrawn)
