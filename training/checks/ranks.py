"""Simulation-based calibration: ranks of true parameters among draws (Talts et al. 2018)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from training.checks.bands import Verdict, judge_uniform

__all__ = ["RankCheck", "check_ranks", "fractional_ranks"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class RankCheck:
    """Say for every parameter whether its ranks are uniform.

    Args:
        names: of the P parameters.
        ranks: (N, P) between 0 and 1.
        single: a verdict for each parameter in the band that it alone leaves once in twenty times.
        joint: verdicts in the wider bands that all P together leave once in twenty times (Šidák).
    """

    names: tuple[str, ...]
    ranks: Array
    single: tuple[Verdict, ...]
    joint: tuple[Verdict, ...]

    @property
    def passed(self) -> bool:
        """Tell whether every parameter is inside the joint bands."""
        return all(verdict.inside for verdict in self.joint)

    @property
    def outside_single(self) -> tuple[str, ...]:
        """Name the parameters outside their own band; one in twenty is expected by chance."""
        return tuple(n for n, v in zip(self.names, self.single, strict=True) if not v.inside)


def fractional_ranks(truth: Array, draws: Array, rng: np.random.Generator,
                     keep: NDArray[np.bool_] | None = None) -> Array:
    """Rank truths among draws, spread evenly within ties and within a rank's own step.

    With D draws from the right posterior the result is uniform between 0 and 1, exactly, for any D.

    Args:
        truth: (N, P).
        draws: (N, D, P).
        rng: spreads ranks over their steps.
        keep: (N, D) True where a draw counts; all by default.

    Returns:
        (N, P) between 0 and 1.
    """
    counts = np.ones(draws.shape[:2], bool) if keep is None else keep
    below = np.sum((draws < truth[:, None]) & counts[..., None], axis=1)
    equal = np.sum((draws == truth[:, None]) & counts[..., None], axis=1)
    return (below + rng.random(truth.shape) * (equal + 1.0)) / (counts.sum(axis=1)[:, None] + 1.0)


def check_ranks(names: tuple[str, ...], ranks: Array, level: float = 0.95) -> RankCheck:
    """Judge the ranks of every parameter.

    Args:
        names: of the P parameters.
        ranks: (N, P) from `fractional_ranks`.
        level: probability that a right posterior passes.
    """
    each = level ** (1.0 / len(names))
    columns = ranks.T
    return RankCheck(names, ranks, tuple(judge_uniform(r, level) for r in columns),
                     tuple(judge_uniform(r, each) for r in columns))
