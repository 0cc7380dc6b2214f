"""A toolbox on the closed-form model, so that a whole run can be compared with what is known exactly."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from emu.observe.flare import Flare, write_flares
from emu.problem import Problem
from emu.report.toolbox import Toolbox
from tests.reference.toy import ExactEstimator, ToyCampaign, ToyModel, exact_evidence

__all__ = ["ToyRecipe", "toy_problem", "write_toy_flares"]

RATES = {"toy-slow": 0.05, "toy-fast": 0.11}


def toy_problem(family: str = "toy-slow") -> Problem:
    """Return one of the two closed-form problems."""
    return Problem(ToyModel(name=family, rate=RATES[family]), ToyCampaign())


@dataclass(frozen=True)
class ToyRecipe:
    """Open estimators a little wider than the exact posterior, or wrong, and exact family probabilities."""

    widen: float = 1.2
    shift: float = 0.0

    def open(self) -> Toolbox:
        """Return the toolbox."""
        problems = {name: toy_problem(name) for name in RATES}

        def probabilities(batch):
            ln = [[exact_evidence(p, batch.rows(i)) for p in problems.values()] for i in range(len(batch))]
            odds = np.exp(np.array(ln) - np.max(ln, axis=1, keepdims=True))
            return odds / odds.sum(axis=1, keepdims=True)

        return Toolbox(
            ToyCampaign(),
            problems,
            lambda name: ExactEstimator(problems[name], self.widen, self.shift),
            probabilities,
        )

    def origin(self):
        """Return what the record says."""
        return {"toy": self.widen}


def write_toy_flares(path: Path, count: int, seed: int = 1, prefix: str = "f") -> dict[str, np.ndarray]:
    """Write flares of the slow family to one table and return their parameters by name."""
    problem, rng = toy_problem(), np.random.default_rng(seed)
    theta = problem.prior.sample(count, rng)
    batch, failures = problem.simulate(theta, problem.campaign.draw(count, rng), rng)
    assert not failures.any()
    names = [f"{prefix}{number:03d}" for number in range(count)]
    season = problem.campaign
    flares = [Flare.from_rows(batch.rows(i), season.target, name, season.flux_unit) for i, name in enumerate(names)]
    write_flares(path, flares)
    return dict(zip(names, theta, strict=True))
