"""What the checks ask of an estimator."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from emu.observe.rows import RowBatch, Rows

__all__ = ["Estimator", "sample_flare"]

Array = NDArray[np.float64]


class Estimator(Protocol):
    """Answer flares with draws and densities."""

    def sample(self, batch: RowBatch, draws: int, seed: int) -> tuple[Array, Array]:
        """Return theta (B, D, P), and its log density (B, D) in theta."""
        ...

    def log_prob(self, theta: Array, batch: RowBatch) -> Array:
        """Return the log density of theta (B, P) or (B, D, P), without the last axis."""
        ...


def sample_flare(estimator: Estimator, rows: Rows, draws: int, seed: int) -> tuple[Array, Array]:
    """Return theta (D, P) and its log density (D,) for a single flare."""
    theta, log_q = estimator.sample(RowBatch.stack([rows]), draws, seed)
    return theta[0], log_q[0]
