"""Checks against the exact posterior: importance efficiency, and closeness to reference draws."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from emu.inference.likelihood import log_posterior
from emu.observe.rows import RowBatch
from emu.problem import Problem
from training.checks.efficiency import Efficiency, importance_efficiency
from training.checks.estimator import Estimator, sample_flare
from training.checks.exactness import Closeness, closeness
from training.checks.reference_store import Reference

__all__ = ["Against", "check_efficiency", "check_references"]

Progress = Callable[[str], None]
_AT_ONCE = 2000


@dataclass(frozen=True)
class Against:
    """Compare an estimator with the reference draws of one flare.

    Args:
        name: of the reference.
        exact: whether the reference counts as exact; if not, the numbers mean less.
        closeness: of draws; None where fewer than a hundred draws were possible.
        shortfall: mean over exact draws of ln p(theta | data) - ln q(theta | data), in nats: the
            divergence KL(p || q); infinite where q vanishes at a draw.
        outside: share of the estimator's draws that the prior excludes.
    """

    name: str
    exact: bool
    closeness: Closeness | None
    shortfall: float
    outside: float


def check_efficiency(estimator: Estimator, problem: Problem, batch: RowBatch, *, flares: int, draws: int,
                     seed: int, progress: Progress | None = None) -> tuple[Efficiency, ...]:
    """Weigh draws of the first flares of a batch by the exact posterior.

    Args:
        estimator: to be checked.
        problem: with the exact likelihood.
        batch: held-out flares.
        flares: how many of them.
        draws: N; an efficiency means little unless it is about 20,000.
        seed: of the draws.
        progress: called with lines of text.
    """
    found = []
    for flare in range(min(flares, len(batch))):
        rows = batch.rows(flare)
        theta, log_q = sample_flare(estimator, rows, draws, seed + flare)
        parts = [log_posterior(problem, theta[at : at + _AT_ONCE], rows) for at in range(0, draws, _AT_ONCE)]
        found.append(importance_efficiency(np.concatenate(parts) - log_q))
        if progress is not None:
            progress(f"weighed {flare + 1} of {flares} flares: efficiency {found[-1].full:.2e}")
    return tuple(found)


def check_references(estimator: Estimator, problem: Problem, references: tuple[Reference, ...], *,
                     seed: int, draws: int = 4000) -> tuple[Against, ...]:
    """Compare the estimator with reference draws on every reference flare, unresolved ones included.

    Args:
        estimator: to be checked.
        problem: of the references.
        references: from `read_references`.
        seed: of draws and classifier.
        draws: a flare.
    """
    return tuple(_against(estimator, problem, reference, seed, draws) for reference in references)


def _against(estimator: Estimator, problem: Problem, reference: Reference, seed: int,
             draws: int) -> Against:
    """Compare on one flare."""
    theta, _ = sample_flare(estimator, reference.rows, draws, seed)
    keep = np.isfinite(problem.prior.log_prob(theta))
    exact = _within(reference.ensembles, problem)
    some = exact[:1000]
    log_q = estimator.log_prob(some[None], RowBatch.stack([reference.rows]))[0]
    log_p = log_posterior(problem, some, reference.rows) - reference.log_evidence
    near = closeness(theta[keep], exact, problem.prior, seed=seed) if keep.sum() >= 100 else None
    share = np.log(max(float(keep.mean()), 1.0 / draws))
    return Against(reference.name, reference.exact, near, float(np.mean(log_p - log_q) + share),
                   float(1.0 - keep.mean()))


def _within(theta: np.ndarray, problem: Problem) -> np.ndarray:
    """Move draws that were rounded to single precision back within the bounds of the prior."""
    low, high = np.array([parameter.bounds for parameter in problem.parameters]).T
    return np.clip(theta, low, high)
