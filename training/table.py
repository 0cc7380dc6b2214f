"""The table of all families: simulate, fit and check each of them, by one command that can be killed any time."""

import json
import os
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass
from functools import partial
from pathlib import Path
from typing import Any

from emu.families.catalogue import family_names
from emu.processes import in_processes
from training.files import digest, write_atomically

__all__ = ["Line", "Plan", "table"]


@dataclass(frozen=True)
class Plan:
    """Say what is done for each family.

    Args:
        campaign: shipped campaign, or the path of a TOML.
        flares: size of the training set.
        minutes: CPU-minutes of fitting, turned into steps by the recipe.
        config: recipe.
        cases: held-out flares of the calibration checks.
        draws: draws of each.
        weighed: flares whose draws are weighed by the exact posterior; slow.
        seed: of set and fit; the checks use seed + 1.
    """

    campaign: str = "realistic"
    flares: int = 60_000
    minutes: float = 5.0
    config: str = "default"
    cases: int = 500
    draws: int = 1000
    weighed: int = 0
    seed: int = 0


@dataclass(frozen=True)
class Line:
    """Hold one line of the table.

    Args:
        family: its name.
        parameters: how many.
        flares: size of the training set.
        failures: curves that failed and were drawn anew.
        simulate_minutes, fit_minutes: CPU-minutes.
        nats_over_prior: mean ln(q / prior) at the truth of held-out flares.
        rank_distance: largest distance of a parameter's ranks from uniform.
        outside: parameters whose ranks leave the simultaneous band.
        passed: verdicts of all checks.
    """

    family: str
    parameters: int
    flares: int
    failures: int
    simulate_minutes: float
    fit_minutes: float
    nats_over_prior: float
    rank_distance: float
    outside: tuple[str, ...]
    passed: dict[str, bool]


def table(
    out: Path,
    plan: Plan,
    families: Sequence[str] | None = None,
    workers: int = 2,
    report: Callable[[Line], None] | None = None,
) -> tuple[Line, ...]:
    """Make the table, or go on with it.

    What is finished is not done again: chunks of a set, steps of a fit up to its last checkpoint, checks.

    Args:
        out: folder; holds ``<family>/set``, ``<family>/fit``, table.md and table.json.
        plan: what is done for each family; another plan needs another folder.
        families: names; all shipped families where None.
        workers: families at a time, each in a process with one thread.
        report: called with each line.

    Returns:
        One line a family.
    """
    names = tuple(families or family_names())
    lines: list[Line] = []
    for line in in_processes(partial(_family, out, plan), names, workers):
        lines.append(line)
        write_atomically(out / "table.json", json.dumps([asdict(each) for each in lines], indent=1).encode())
        write_atomically(out / "table.md", _markdown(lines).encode())
        if report is not None:
            report(line)
    return tuple(lines)


def _family(out: Path, plan: Plan, family: str) -> Line:
    """Simulate, fit and check one family."""
    from training.fit_estimator import fit
    from training.simulate import simulate

    folder = out / family
    _timed(
        folder / "cost.json",
        partial(simulate, family, plan.campaign, folder / "set", plan.flares, plan.seed, workers=1, show=False),
    )
    record = fit(folder / "set", folder / "fit", plan.config, minutes=plan.minutes, seed=plan.seed)
    checks = _checked(folder / "fit", record, plan)
    ranks = checks["calibration"]["parameters"]
    return Line(
        family=family,
        parameters=len(record["parameters"]),
        flares=plan.flares,
        failures=record["set"]["failures"],
        simulate_minutes=json.loads((folder / "cost.json").read_text())["cpu_seconds"] / 60,
        fit_minutes=record["training"]["cpu_minutes"],
        nats_over_prior=record["held_out"]["nats_over_prior"],
        rank_distance=max(row["rank_distance"] for row in ranks),
        outside=tuple(row["name"] for row in ranks if not row["ranks_inside"]),
        passed=checks["passed"],
    )


def _timed(kept: Path, work: Callable[[], object]) -> None:
    """Do work and add its CPU time to what earlier runs of it took; a killed run's is lost."""
    before = json.loads(kept.read_text())["cpu_seconds"] if kept.exists() else 0.0
    started = os.times()
    work()
    ended = os.times()
    spent = sum(getattr(ended, name) - getattr(started, name) for name in _CPU)
    write_atomically(kept, json.dumps({"cpu_seconds": before + spent}).encode())


_CPU = ("user", "system", "children_user", "children_system")


def _checked(run: Path, record: dict[str, Any], plan: Plan) -> dict[str, Any]:
    """Check a fit, unless these very weights were checked by this very plan."""
    from safetensors.torch import load_file

    from emu.inference.estimator import NeuralEstimator
    from emu.inference.network import Network
    from emu.problem import problem
    from training.checks.report import run_checks

    weights = run / "estimator.safetensors"
    asked = {"weights": digest(weights), "plan": asdict(plan)}
    kept = run / "checked.json"
    if kept.exists() and json.loads(kept.read_text()) == asked:
        found: dict[str, Any] = json.loads((run / "checks.json").read_text())
        return found
    joined = problem(record["model"], plan.campaign)
    network = Network.from_table(record["network"], f"{run}/fit.json")
    estimator = NeuralEstimator(network, joined.prior, load_file(weights))
    report = run_checks(
        estimator, joined, cases=plan.cases, draws=plan.draws, seed=plan.seed + 1, weighed=plan.weighed, out=run
    )
    write_atomically(kept, json.dumps(asked).encode())
    return report


def _markdown(lines: Sequence[Line]) -> str:
    """Write the lines as Markdown."""
    head = (
        "| family | parameters | flares | failures | simulate, CPU-min | fit, CPU-min | ln(q/prior), nats |"
        " largest rank distance | ranks within the band | other checks failed |\n"
        "|---|---|---|---|---|---|---|---|---|---|\n"
    )
    return head + "".join(map(_row, lines))


def _row(line: Line) -> str:
    failed = [name for name, passed in line.passed.items() if not passed and name != "ranks"]
    inside = "no: " + ", ".join(line.outside) if line.outside else "yes"
    return (
        f"| {line.family} | {line.parameters} | {line.flares:,} | {line.failures} | {line.simulate_minutes:.1f} |"
        f" {line.fit_minutes:.1f} | {line.nats_over_prior:.2f} | {line.rank_distance:.3f} | {inside} |"
        f" {', '.join(failed) or 'none'} |\n"
    )
