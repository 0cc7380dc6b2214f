"""The posterior of one flare under one family as a run keeps it: draws and what stands beside them."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from emu.families.density import Array
from emu.observe.rows import Rows
from emu.report.intervals import Interval

__all__ = ["Posterior", "Unanswered", "flare_seed"]

Quantiles = tuple[float, float, float]

_NAN = float("nan")
_KHAT_LIMIT = 0.7  # weights can be relied on up to it (Vehtari et al. 2024)
_ESS_LIMIT = 100.0  # below it an interval of the weighted draws is mostly noise


@dataclass(frozen=True)
class Posterior:
    """Hold equally weighted draws of one flare under one family with their diagnostics.

    Attributes:
        flare: name of the flare.
        family: name of the family.
        method: "estimator", or the names of the exact samplers that made the draws.
        theta: (C, D, P) draws by chain.
        stats: name -> (C, D) numbers beside the draws: log_prior, and where they were computed log_q,
            log_likelihood and log_weight (normalised importance weight).
        independent: how many independent draws these are worth (for the noise of their quantiles).
        ess: effective sample size of the importance weights (Kish), NaN where none were computed.
        khat: Pareto shape of the largest importance weights, NaN where none were computed.
        efficiency: ess / number of draws.
        log_evidence: ln Z of the family for this flare, NaN where unknown.
        log_evidence_error: its standard error.
        outside: draws that the prior forbids.
        unsolved: draws for which a ray could not be solved.
        converged: False where the exact samplers did not agree among themselves.
        seconds: wall time spent on this posterior.
        intervals: one interval a parameter, in the order of theta's columns.
        weighted: (median, low68, high68) of the weighted draws, a parameter each; NaN where the weights are
            not usable.
    """

    flare: str
    family: str
    method: str
    theta: Array
    stats: Mapping[str, Array]
    independent: float
    ess: float = _NAN
    khat: float = _NAN
    efficiency: float = _NAN
    log_evidence: float = _NAN
    log_evidence_error: float = _NAN
    outside: int = 0
    unsolved: int = 0
    converged: bool = True
    seconds: float = 0.0
    intervals: tuple[Interval, ...] = field(default=())
    weighted: tuple[Quantiles, ...] = field(default=())

    @property
    def exact(self) -> bool:
        """Tell whether exact sampling made the draws."""
        return self.method != "estimator"

    @property
    def usable(self) -> bool:
        """Tell whether the importance weights can be relied on; False where there are none."""
        return self.khat <= _KHAT_LIMIT and self.ess >= _ESS_LIMIT

    @property
    def flat(self) -> Array:
        """Return all draws (C * D, P)."""
        return self.theta.reshape(-1, self.theta.shape[-1])


@dataclass(frozen=True)
class Unanswered:
    """Say why a flare, or one family of it, has no answer.

    Attributes:
        flare: its name, empty where it could not even be read.
        stage: "read", "campaign", "sample" or "figures": how far it came.
        reason: one line.
    """

    flare: str
    stage: str
    reason: str


def flare_seed(seed: int, family: str, rows: Rows) -> int:
    """Derive the seed of one posterior from what it depends on, and on nothing else.

    The same measurements give the same draws alone or in a folder, with one worker or with ten.

    Args:
        seed: the seed of the run.
        family: name of the family.
        rows: the measurements in geometric units.

    Returns:
        A number below 2**32.
    """
    digest = hashlib.sha256(f"{seed}:{family}:".encode())
    for column in (rows.time, rows.kind, rows.value, rows.error):
        digest.update(np.ascontiguousarray(column).tobytes())
    return int.from_bytes(digest.digest()[:4], "little")
