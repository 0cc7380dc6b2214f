"""A problem: what may have happened (model) seen through what was measured (campaign).

Everything that judges a flare - likelihood, estimators, samplers - takes this one object, so that all of
them speak of the same parameters and the same posterior.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from emu.errors import UserError
from emu.families.density import Array
from emu.families.installed import model
from emu.families.model import Model
from emu.families.parameters import Parameter
from emu.families.prior import Prior
from emu.families.wander import draw_wander
from emu.observe.campaign import Campaign, campaign
from emu.observe.rows import KINDS, RowBatch, Rows

__all__ = ["Expected", "Problem", "Q_LIKE", "U_LIKE", "problem"]

# Rows in the unit of flux are a fraction times the flux; the wander of q or of u moves them too.
_OF_FLUX = {"Q": "q", "U": "u"}
Q_LIKE = (KINDS.index("q"), KINDS.index("Q"))
U_LIKE = (KINDS.index("u"), KINDS.index("U"))
_PADDING = -1


@dataclass(frozen=True)
class Expected:
    """Hold what a model predicts for measured rows.

    Args:
        mean: (N, R) the rows without noise; finite always.
        lever: (N, R) what a unit of wander in q or u adds to the row: 1, the flux (Q, U), or 0.
        failures: (N,) points the model could not compute; a mean with failures means nothing.
    """

    mean: Array
    lever: Array
    failures: NDArray[np.int64]


@dataclass(frozen=True)
class _ModelValid:
    """Ask a model about the leading columns of theta."""

    model: Model

    def __call__(self, theta: Array) -> NDArray[np.bool_]:
        return self.model.valid(theta[:, : len(self.model.parameters)])


@dataclass(frozen=True)
class Problem:
    """Join the parameters of a model with those of a campaign's instrument effects."""

    model: Model
    campaign: Campaign

    @property
    def name(self) -> str:
        """Return the name of the model."""
        return self.model.name

    @cached_property
    def parameters(self) -> tuple[Parameter, ...]:
        """Return the model's parameters, then those of the instrument effects: P in all.

        Raises:
            UserError: two of them share a name.
        """
        effects = tuple(p for nuisance in self.campaign.nuisances for p in nuisance.parameters)
        every = (*self.model.parameters, *effects)
        names = [parameter.name for parameter in every]
        for name in names:
            if names.count(name) > 1:
                raise UserError(
                    f"model {self.name} with campaign {self.campaign.name}: both or one of them "
                    f"twice have a parameter {name!r}; rename the model's"
                )
        return every

    @cached_property
    def prior(self) -> Prior:
        """Return the joint prior of all P parameters."""
        return Prior(self.parameters, _ModelValid(self.model))

    def index(self, name: str) -> int:
        """Return the column of a parameter.

        Raises:
            UserError: the problem has no such parameter.
        """
        if name not in self.prior.names:
            raise UserError(f"{self.name} has no parameter {name!r}: one of {', '.join(self.prior.names)}")
        return self.prior.names.index(name)

    def expected(self, theta: Array, rows: Rows) -> Expected:
        """Predict every row without noise; each distinct time is computed once.

        Args:
            theta: (N, P) valid parameters.
            rows: R rows in geometric units.

        Raises:
            UserError: the model has no curve for a kind of row.
        """
        times, place = np.unique(rows.time, return_inverse=True)
        curves = dict(self.model.curves(self._of_model(theta), times))
        failures = curves.pop("failures", np.zeros(len(theta)))
        at_rows = {kind: curve[:, place] for kind, curve in curves.items()}
        return self._expected(at_rows, rows.kind[None, :], failures)

    def mean(self, theta: Array, rows: Rows) -> tuple[Array, NDArray[np.int64]]:
        """Return the mean (N, R) and failures (N,) of `expected`."""
        expected = self.expected(theta, rows)
        return expected.mean, expected.failures

    def variance(self, theta: Array, rows: Rows) -> Array:
        """Return the variance (N, R) of independent noise: measured errors and instrument effects."""
        return self._variance(theta, rows.kind[None, :], rows.error[None, :])

    def scatter(self, theta: Array) -> tuple[Array, Array] | None:
        """Return the deviation (N,) and lifetime (N,) of the wander of q and u, or None."""
        return self.model.scatter(self._of_model(theta))

    def simulate(self, theta: Array, batch: RowBatch, rng: np.random.Generator) -> tuple[RowBatch, NDArray[np.int64]]:
        """Invent measurements on a given schedule.

        Args:
            theta: (B, P) valid parameters, one a flare.
            batch: B schedules with kinds and errors; their values are ignored.
            rng: source of noise and wander.

        Returns:
            The batch with values (zero in padding), and failures (B,): flares to be counted, not used.
        """
        curves = dict(self.model.curves(self._of_model(theta), batch.time))
        failures = curves.pop("failures", np.zeros(len(theta)))
        kind = np.where(batch.mask, batch.kind, _PADDING)
        expected = self._expected(curves, kind, failures)
        noise = rng.standard_normal(batch.time.shape)
        value = expected.mean + noise * np.sqrt(self._variance(theta, batch.kind, batch.error))
        scatter = self.scatter(theta)
        if scatter is not None:
            for like in (Q_LIKE, U_LIKE):
                rows_of = np.isin(kind, like)
                value += expected.lever * draw_wander(*scatter, batch.time, rows_of, rng)
        return batch.replace(value=np.where(batch.mask, value, 0.0)), expected.failures

    def _of_model(self, theta: Array) -> Array:
        """Return the columns of theta that belong to the model."""
        return np.asarray(theta, float)[:, : len(self.model.parameters)]

    def _variance(self, theta: Array, kind: NDArray[np.int8], error: Array) -> Array:
        """Add the variances of all instrument effects to the squared errors."""
        column = len(self.model.parameters)
        total = np.broadcast_to(error**2, (len(theta), error.shape[1])).copy()
        for nuisance in self.campaign.nuisances:
            values = np.asarray(theta, float)[:, column : column + len(nuisance.parameters)]
            total += nuisance.variance(values, kind)
            column += len(nuisance.parameters)
        return total

    def _expected(self, curves: dict[str, Array], kind: NDArray[np.int8], failures: Array) -> Expected:
        """Pick from curves (N, R) what each row of kind (N or 1, R) measures."""
        shape = (len(failures), kind.shape[1])
        mean, lever = np.zeros(shape), np.zeros(shape)
        for code in np.unique(kind[kind != _PADDING]):
            name = KINDS[code]
            scale = self._curve(curves, "flux", name) if name in _OF_FLUX else np.ones(shape)
            curve = self._curve(curves, _OF_FLUX.get(name, name), name)
            mean = np.where(kind == code, curve * scale, mean)
            if code in Q_LIKE + U_LIKE:
                lever = np.where(kind == code, scale, lever)
        # A model of a user's own may let a NaN slip through: it counts as a failure and goes no further.
        finite = np.isfinite(mean) & np.isfinite(lever)
        counted = np.maximum(failures, np.count_nonzero(~finite, axis=1)).astype(np.int64)
        return Expected(np.where(finite, mean, 0.0), np.where(finite, lever, 0.0), counted)

    def _curve(self, curves: dict[str, Array], need: str, row: str) -> Array:
        """Return a curve, or say which rows cannot be predicted without it."""
        if need not in curves:
            raise UserError(f"model {self.name} gives no {need!r}, which rows of {row!r} need: leave them out")
        return curves[need]


def problem(model_name: str, campaign_name: str) -> Problem:
    """Join a model and a campaign by name.

    Args:
        model_name: a shipped family, the path of a family's TOML, or an installed model.
        campaign_name: a shipped campaign, or the path of a campaign's TOML.

    Raises:
        UserError: one of them cannot be found or makes no sense.
    """
    return Problem(model(model_name), campaign(campaign_name))
