"""The tables of a run: one row a parameter, one row a family, and the same as JSON."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from emu.families.density import Array
from emu.families.parameters import Parameter
from emu.report.intervals import Interval
from emu.report.posterior import Posterior, Unanswered

if TYPE_CHECKING:
    from astropy.table import Table

__all__ = ["Outcome", "as_json", "family_table", "parameter_table", "trust"]

_PARAMETER_COLUMNS = {
    "flare": "name of the flare",
    "family": "name of the family",
    "parameter": "name of the parameter",
    "unit": "unit of the quantiles",
    "median": "quantile of the draws at 50 %",
    "low68": "quantile at 16 %",
    "high68": "quantile at 84 %",
    "low95": "quantile at 2.5 %; a circular parameter may be beyond its bounds, take it modulo 360",
    "high95": "quantile at 97.5 %; likewise",
    "prior_low68": "quantile of the prior at 16 %",
    "prior_high68": "quantile of the prior at 84 %",
    "contraction": "1 - width of the 68 % interval / width of the prior's",
    "shift": "largest distance of a quantile from the prior's, in prior probability",
    "weighted_median": "quantile of the weighted draws at 50 %; NaN unless the weights are usable",
    "weighted_low68": "quantile of the weighted draws at 16 %",
    "weighted_high68": "quantile of the weighted draws at 84 %",
    "informed": "informed, or not informed: the interval hardly differs from the prior's",
}
_FAMILY_COLUMNS = {
    "flare": "name of the flare",
    "family": "name of the family",
    "probability": "probability of the family given the flare, see run.json for its source",
    "trust": "how far the exact likelihood stands behind the draws",
    "method": "what made the draws",
    "draws": "number of draws",
    "outside": "draws that the prior forbids (weight zero)",
    "unsolved": "draws with a ray that could not be solved (weight zero)",
    "ess": "effective sample size of the importance weights",
    "khat": "Pareto shape of the largest importance weights; usable up to 0.7",
    "efficiency": "ess / draws",
    "log_evidence": "ln of the evidence",
    "log_evidence_error": "its standard error",
}


@dataclass(frozen=True)
class Outcome:
    """Hold all answers of a run.

    Attributes:
        flares: names of the F answered flares.
        parameters: family -> its parameters.
        posteriors: family -> its posteriors.
        probabilities: (F, number of families), NaN where unknown.
        source: "classifier", "evidence" or "none": where the probabilities come from.
        skipped: what has no answer, and why.
    """

    flares: tuple[str, ...]
    parameters: Mapping[str, Sequence[Parameter]]
    posteriors: Mapping[str, Sequence[Posterior]]
    probabilities: Array
    source: str
    skipped: tuple[Unanswered, ...]

    def probability(self, posterior: Posterior) -> float:
        """Return the probability of a posterior's family given its flare."""
        row, column = self.flares.index(posterior.flare), list(self.posteriors).index(posterior.family)
        return float(self.probabilities[row, column])

    def ordered(self) -> list[Posterior]:
        """Return all posteriors, flare by flare, families in their order within each."""
        place = {name: number for number, name in enumerate(self.flares)}
        every = [posterior for each in self.posteriors.values() for posterior in each]
        return sorted(every, key=lambda posterior: place[posterior.flare])


def trust(posterior: Posterior) -> str:
    """Say in a few words how far the exact likelihood stands behind the draws."""
    if posterior.exact:
        return "exact" if posterior.converged else "exact sampling not converged"
    if math.isnan(posterior.ess):
        return "not checked"
    return "weights usable" if posterior.usable else "weights unusable"


def parameter_table(outcome: Outcome) -> Table:
    """Tabulate intervals: one row a flare, family and parameter."""
    rows = [
        (
            *(posterior.flare, posterior.family, parameter.name, parameter.unit),
            *(*_numbers(interval), *weighted),
            "informed" if interval.informed else "not informed",
        )
        for posterior in outcome.ordered()
        for parameter, interval, weighted in zip(
            outcome.parameters[posterior.family], posterior.intervals, posterior.weighted, strict=True
        )
    ]
    return _table(rows, _PARAMETER_COLUMNS)


def family_table(outcome: Outcome) -> Table:
    """Tabulate families: one row a flare and family."""
    rows = [
        (
            p.flare,
            p.family,
            outcome.probability(p),
            trust(p),
            p.method,
            len(p.flat),
            p.outside,
            p.unsolved,
            p.ess,
            p.khat,
            p.efficiency,
            p.log_evidence,
            p.log_evidence_error,
        )
        for p in outcome.ordered()
    ]
    return _table(rows, _FAMILY_COLUMNS)


def as_json(outcome: Outcome) -> dict[str, Any]:
    """Arrange the same numbers for a machine: no NaN, which JSON does not know, but null."""
    flares: dict[str, Any] = {name: {} for name in outcome.flares}
    for posterior in outcome.ordered():
        flares[posterior.flare][posterior.family] = {
            "probability": outcome.probability(posterior),
            "trust": trust(posterior),
            "ess": posterior.ess,
            "khat": posterior.khat,
            "efficiency": posterior.efficiency,
            "log_evidence": posterior.log_evidence,
            "outside": posterior.outside,
            "unsolved": posterior.unsolved,
            "parameters": _parameters(posterior, outcome.parameters[posterior.family]),
        }
    return {
        "probability_source": outcome.source,
        "flares": _without_nan(flares),
        "skipped": [asdict(one) for one in outcome.skipped],
    }


def _parameters(posterior: Posterior, parameters: Sequence[Parameter]) -> dict[str, Any]:
    """Arrange the intervals of a posterior by parameter."""
    names = ("weighted_median", "weighted_low68", "weighted_high68")
    every = zip(parameters, posterior.intervals, posterior.weighted, strict=True)
    return {
        parameter.name: {
            "unit": parameter.unit,
            **asdict(interval),
            **dict(zip(names, weighted, strict=True)),
        }
        for parameter, interval, weighted in every
    }


def _numbers(interval: Interval) -> tuple[float, ...]:
    """Return the numbers of an interval in the order of the columns."""
    return tuple(value for name, value in asdict(interval).items() if name != "informed")


def _table(rows: Sequence[tuple[Any, ...]], columns: Mapping[str, str]) -> Table:
    """Make a table whose columns carry their descriptions."""
    from astropy.table import Table

    table = Table(rows=rows or None, names=list(columns)) if rows else Table(names=list(columns))
    for name, description in columns.items():
        table[name].description = description
    return table


def _without_nan(value: Any) -> Any:
    """Replace numbers that are not finite by None, however deep."""
    if isinstance(value, Mapping):
        return {key: _without_nan(inner) for key, inner in value.items()}
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value
