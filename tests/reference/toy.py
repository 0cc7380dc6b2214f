"""A closed-form model: everything about its posterior is known, so it can judge whoever judges.

Flux, q and u are linear in four parameters with normal priors, the noise is Gaussian, and so the posterior
is Gaussian with mean and covariance of the normal equations (e.g. Gelman et al., Bayesian Data Analysis,
3rd edition, section 14.8). Optionally q and u wander (an Ornstein-Uhlenbeck process with *fixed* deviation
and lifetime), which keeps everything linear and Gaussian.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.linalg import cho_factor, cho_solve

from emu.families.normal import Normal
from emu.families.parameters import Parameter
from emu.observe.rows import KINDS, RowBatch, Rows
from emu.problem import Problem
from emu.units import Target

__all__ = ["ExactEstimator", "ToyCampaign", "ToyModel", "exact_evidence", "exact_posterior"]


@dataclass(frozen=True)
class ToyModel:
    """Predict flux = level + trend t/60, q = swing cos(rate t) + bend, u = swing sin(rate t) - bend t/60.

    Args:
        name: as a family's.
        rate: radians per GM/c3; another rate makes another family.
        wander: deviation and lifetime (GM/c3) of the scatter of q and of u, or None.
    """

    name: str = "toy"
    rate: float = 0.05
    wander: tuple[float, float] | None = None
    kinds: tuple[str, ...] = ("flux", "q", "u")
    standard_frame: bool = False
    parameters: tuple[Parameter, ...] = (
        Parameter("level", "F", "", Normal(1.0, 0.3)),
        Parameter("trend", r"\dot F", "", Normal(0.0, 0.3)),
        Parameter("swing", "m", "", Normal(0.1, 0.2)),
        Parameter("bend", "c", "", Normal(0.0, 0.1)),
    )

    def valid(self, theta):
        """Accept every finite row of theta (N, 4)."""
        return np.isfinite(theta).all(axis=1)

    def curves(self, theta, times):
        """Compute flux, q, u (N, T) at times (T,) or (N, T)."""
        times = np.broadcast_to(np.atleast_2d(times), (len(theta), np.shape(times)[-1]))
        return {kind: np.einsum("nkt,nk->nt", self._basis(kind, times), theta) for kind in self.kinds}

    def scatter(self, theta):
        """Return the fixed wander for every row of theta."""
        if self.wander is None:
            return None
        return np.full(len(theta), self.wander[0]), np.full(len(theta), self.wander[1])

    def design(self, rows: Rows):
        """Return the matrix (R, 4) that turns parameters into the mean of the rows."""
        columns = np.zeros((len(rows.time), 4))
        for kind in self.kinds:
            here = rows.kind == KINDS.index(kind)
            columns[here] = self._basis(kind, rows.time[None, :])[0].T[here]
        return columns

    def covariance(self, rows: Rows):
        """Return the dense covariance (R, R) of the rows given the parameters."""
        dense = np.diag(rows.error**2)
        if self.wander is not None:
            sigma, lifetime = self.wander
            gap = np.abs(rows.time[:, None] - rows.time[None, :])
            for kind in ("q", "u"):
                here = rows.kind == KINDS.index(kind)
                dense += np.outer(here, here) * sigma**2 * np.exp(-gap / lifetime)
        return dense

    def _basis(self, kind, times):
        """Return d curve / d parameter: (N, 4, T)."""
        none, one, x = np.zeros_like(times), np.ones_like(times), times / 60.0
        rows = {
            "flux": (one, x, none, none),
            "q": (none, none, np.cos(self.rate * times), one),
            "u": (none, none, np.sin(self.rate * times), -x),
        }
        return np.stack(rows[kind], axis=1)


@dataclass(frozen=True)
class ToyCampaign:
    """Measure flux, q and u in turn at random times, 24 to 48 rows within +-60 GM/c3; no instrument effects.

    It stands in for `emu.observe.campaign.Campaign` wherever only schedules and nuisances are asked for.
    """

    name: str = "toy"
    description: str = "closed-form checks"
    target: Target = field(default_factory=lambda: Target("invented", 5.0e6, 9.0))
    flux_unit: str = "mJy"
    nuisances: tuple = ()
    half_span: float = 60.0
    max_rows: int = 48
    text: str = ""

    def draw(self, n: int, rng: np.random.Generator) -> RowBatch:
        """Draw n schedules with errors of 0.02 to 0.1; values are zero."""
        shape = (n, self.max_rows)
        mask = np.arange(self.max_rows) < rng.integers(24, self.max_rows + 1, n)[:, None]
        time = np.sort(np.where(mask, rng.uniform(-self.half_span, self.half_span, shape), np.inf), axis=1)
        kind = np.broadcast_to(np.arange(self.max_rows) % 3, shape)
        error = rng.uniform(0.02, 0.1, shape)
        return RowBatch(
            time=np.where(mask, time, 0.0),
            kind=np.where(mask, kind, 0).astype(np.int8),
            value=np.zeros(shape),
            error=np.where(mask, error, 1.0),
            mask=mask,
        )

    def outside(self, rows: Rows) -> tuple[str, ...]:
        """Accept whatever lies within the span."""
        return ("time beyond the span",) if np.abs(rows.time).max() > self.half_span else ()


def _normal_equations(problem: Problem, rows: Rows):
    """Return posterior precision (4, 4) and its product with the posterior mean (4,)."""
    if problem.campaign.nuisances:
        raise ValueError("the closed form holds only without instrument effects")
    mean, deviation = _prior_moments(problem)
    design, noise = problem.model.design(rows), cho_factor(problem.model.covariance(rows), lower=True)
    precision = np.diag(deviation**-2.0) + design.T @ cho_solve(noise, design)
    return precision, mean / deviation**2 + design.T @ cho_solve(noise, rows.value)


def _prior_moments(problem: Problem):
    """Return mean (4,) and standard deviation (4,) of the prior."""
    priors = [parameter.prior for parameter in problem.parameters]
    return np.array([p.mean for p in priors]), np.array([p.deviation for p in priors])


def exact_posterior(problem: Problem, rows: Rows):
    """Return mean (P,) and covariance (P, P) of the posterior."""
    precision, weighted = _normal_equations(problem, rows)
    covariance = np.linalg.inv(precision)
    return covariance @ weighted, covariance


def exact_evidence(problem: Problem, rows: Rows) -> float:
    """Return ln Z: the data are Gaussian with mean D m0 and covariance C + D S0 D^T."""
    mean, deviation = _prior_moments(problem)
    design = problem.model.design(rows)
    total = problem.model.covariance(rows) + (design * deviation**2) @ design.T
    residual = rows.value - design @ mean
    return float(-0.5 * (residual @ np.linalg.solve(total, residual) + np.linalg.slogdet(2 * np.pi * total)[1]))


@dataclass(frozen=True)
class ExactEstimator:
    """Speak as a neural estimator does, with the exact posterior - or with a wrong one, to test a checker.

    Args:
        problem: a toy model with a campaign that has no instrument effects.
        widen: factor on every width (1 right, 2 too wide, 0.5 too narrow).
        shift: displacement of every mean in units of the exact posterior's standard deviation.
    """

    problem: Problem
    widen: float = 1.0
    shift: float = 0.0

    @property
    def parameters(self):
        """Return the problem's parameters."""
        return self.problem.parameters

    @property
    def prior(self):
        """Return the problem's prior."""
        return self.problem.prior

    def sample(self, batch: RowBatch, draws: int, seed: int, progress=None):
        """Return theta (B, D, P) and log_q (B, D)."""
        rng = np.random.default_rng(seed)
        theta = np.empty((len(batch.time), draws, len(self.parameters)))
        for flare in range(len(batch.time)):
            mean, root = self._answer(batch.rows(flare))
            theta[flare] = mean + rng.standard_normal((draws, len(mean))) @ root.T
            if progress is not None:
                progress(1)
        return theta, self.log_prob(theta, batch)

    def log_prob(self, theta, batch: RowBatch):
        """Return the log density of theta (B, P) or (B, D, P) without its last axis."""
        theta = np.asarray(theta, float)
        answer = np.empty(theta.shape[:-1])
        for flare in range(len(batch.time)):
            mean, root = self._answer(batch.rows(flare))
            z = np.linalg.solve(root, (theta[flare] - mean).reshape(-1, len(mean)).T)
            scale = np.log(np.abs(np.diag(root))).sum() + 0.5 * len(mean) * np.log(2 * np.pi)
            answer[flare] = (-0.5 * (z**2).sum(axis=0) - scale).reshape(theta.shape[1:-1])
        return answer

    def _answer(self, rows: Rows):
        """Return mean (P,) and Cholesky root (P, P) of what this estimator believes."""
        mean, covariance = exact_posterior(self.problem, rows)
        return (
            mean + self.shift * np.sqrt(np.diag(covariance)),
            self.widen * np.linalg.cholesky(covariance),
        )
