"""Weighted draws from a posterior, and how to take equal ones from them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from emu.families.density import Array

__all__ = ["Draws", "distinct", "pooled", "resampled"]


@dataclass(frozen=True)
class Draws:
    """Hold draws of a posterior with their weights and what they cost.

    Args:
        theta: (N, P) parameters, angles in degrees.
        log_weight: (N,) log weights that sum to one after exponentiation.
        log_evidence: natural log of the evidence, NaN where the method gives none.
        log_evidence_error: its standard error, NaN likewise.
        calls: likelihoods evaluated.
        seconds: processor seconds.
        method: name of the sampler.
    """

    theta: Array
    log_weight: Array
    log_evidence: float
    log_evidence_error: float
    calls: int
    seconds: float
    method: str

    @property
    def weight(self) -> Array:
        """Return the weights (N,), which sum to one."""
        return np.asarray(np.exp(self.log_weight - logsumexp(self.log_weight)), float)

    @property
    def effective_size(self) -> float:
        """Return the number of equal draws of the same worth, 1 / sum w^2 (Kish 1965)."""
        return float(1.0 / np.sum(self.weight**2))


def distinct(draws: Draws, rng: np.random.Generator, most: int | None = None) -> NDArray[np.int64]:
    """Choose equally weighted draws without any repetition, in random order.

    Every draw is kept with probability w / max w. That is exact rejection, unlike choosing without
    replacement by weight, which flattens the weights.

    Args:
        draws: weighted draws.
        rng: source of randomness.
        most: return no more than this many.

    Returns:
        Indices (M,) of the chosen rows of theta.
    """
    weight = draws.weight
    chosen = np.flatnonzero(rng.random(len(weight)) * weight.max() < weight)
    return np.asarray(rng.permutation(chosen)[:most], np.int64)


def resampled(draws: Draws, n: int, rng: np.random.Generator) -> NDArray[np.int64]:
    """Choose n equally weighted draws by systematic resampling: heavy ones come more than once.

    Returns:
        Indices (n,) in random order.
    """
    places = (rng.random() + np.arange(n)) / n
    edges = np.cumsum(draws.weight)
    chosen = np.searchsorted(edges / edges[-1], places)
    return np.asarray(rng.permutation(np.minimum(chosen, len(edges) - 1)), np.int64)


def pooled(runs: tuple[Draws, ...], within: float = 10.0) -> Draws:
    """Join independent runs with equal shares, so that what only one of them found is not lost.

    Short runs misjudge their evidence by more than they state, so it must not decide between them. A run
    whose evidence is lower than the best by a factor of e^within found nothing of weight and is left out.

    Returns:
        Draws without an evidence: a place to start from, not a posterior.
    """
    best = max(run.log_evidence for run in runs)
    kept = [run for run in runs if run.log_evidence >= best - within]
    return Draws(
        theta=np.concatenate([run.theta for run in kept]),
        log_weight=np.concatenate([np.log(run.weight.clip(1e-300)) for run in kept]) - np.log(len(kept)),
        log_evidence=np.nan,
        log_evidence_error=np.nan,
        calls=sum(run.calls for run in runs),
        seconds=sum(run.seconds for run in runs),
        method="pooled",
    )
