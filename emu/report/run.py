"""One run of `emu infer`, from files of flares to a finished folder."""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any

from emu import __version__
from emu.report.inputs import Inputs, screen
from emu.report.posterior import Unanswered
from emu.report.probabilities import family_probabilities
from emu.report.record import run_record
from emu.report.results import check_free, run_folder, write_record, write_tables
from emu.report.show import show
from emu.report.solve import Order, opened, prior_draws
from emu.report.stages import complain, draw_all, solve_all
from emu.report.summary import Outcome, as_json, family_table, parameter_table
from emu.report.toolbox import Recipe
from emu.report.tree import draws_groups, write_groups
from emu.report.workers import Pool, opened_pool
from emu.units import Target

__all__ = ["Wish", "run"]

SKIPPED = 3  # exit code where something was left out


@dataclass(frozen=True)
class Wish:
    """Say what a run shall contain.

    Attributes:
        families: names, None for all at hand.
        draws: draws a flare and family.
        exact: sample exactly instead of asking the estimator.
        likelihood: weigh the estimator's draws by the exact likelihood.
        figures: draw figures.
        seed: of all randomness.
        workers: processes.
        overwrite: replace an earlier run in the same folder.
        as_json: print a summary for machines.
        columns: TOML that translates headers, None for our own.
        target: converts flares whose table names none, None for the campaign's.
    """

    families: tuple[str, ...] | None = None
    draws: int = 1000
    exact: bool = False
    likelihood: bool = True
    figures: bool = True
    seed: int = 0
    workers: int = 1
    overwrite: bool = False
    as_json: bool = False
    columns: Path | None = None
    target: Target | None = None


def run(recipe: Recipe, paths: Sequence[Path], out: Path, wish: Wish) -> int:
    """Answer flares with what a recipe opens.

    Args:
        recipe: a bundle or configs.
        paths: flare tables, or folders of them.
        out: folder of the run, which appears only when all is written.
        wish: what it shall contain.

    Returns:
        0, or 3 where something was left out.

    Raises:
        UserError: `out` may not be written, or a family is not at hand.
    """
    check_free(out, wish.overwrite)
    clock = _Clock()
    with clock.stage("open"):
        toolbox = opened(recipe)
        families = toolbox.chosen(wish.families)
    with clock.stage("read"):
        inputs = screen(paths, wish.columns, toolbox.campaign, wish.target)
    complain(inputs.skipped)
    try:
        outcome = _written(recipe, families, inputs, out, wish, clock)
    except _NothingAnsweredError as nothing:
        print(f"no flare can be answered; {out} is not written", file=sys.stderr)
        if wish.as_json:
            _print({"out": None, "flares": {}, "skipped": [asdict(one) for one in nothing.skipped]})
        return SKIPPED
    if wish.as_json:
        _print({"out": str(out), "seconds": clock.seconds, **as_json(outcome)})
    else:
        show(outcome, out)
    return SKIPPED if outcome.skipped else 0


class _NothingAnsweredError(Exception):
    """Leave a run that has nothing to write."""

    def __init__(self, skipped: Sequence[Unanswered]) -> None:
        super().__init__("no flare can be answered")
        self.skipped = tuple(skipped)


@dataclass
class _Clock:
    """Measure wall seconds of stages."""

    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """Note the time that a block of code takes."""
        began = time.perf_counter()
        yield
        self.seconds[name] = time.perf_counter() - began


def _written(recipe: Recipe, families: Sequence[str], inputs: Inputs, out: Path, wish: Wish, clock: _Clock) -> Outcome:
    """Answer, draw, and write all of it into the run's folder."""
    if not inputs.found:
        raise _NothingAnsweredError(inputs.skipped)
    with run_folder(out, wish.overwrite) as folder, opened_pool(wish.workers) as pool:
        outcome = _solved(pool, recipe, families, inputs, wish, clock)
        if wish.figures:
            with clock.stage("figures"):
                unit = opened(recipe).campaign.flux_unit
                bad = draw_all(pool, recipe, outcome.posteriors, inputs.found, unit, folder / "figures")
                outcome = replace(outcome, skipped=(*outcome.skipped, *bad))
        with clock.stage("write"):
            write_tables(folder, {"summary": parameter_table(outcome), "families": family_table(outcome)})
            write_groups(_groups(recipe, outcome, inputs, wish), folder / "draws.zarr")
        write_record(folder, run_record(outcome, inputs, _options(wish), recipe.origin(), clock.seconds))
    return outcome


def _solved(pool: Pool, recipe: Recipe, families: Sequence[str], inputs: Inputs, wish: Wish, clock: _Clock) -> Outcome:
    """Sample every flare under every family, and judge the families."""
    toolbox = opened(recipe)
    order = Order(wish.draws, wish.seed, wish.exact, wish.likelihood)
    with clock.stage("sample"):
        posteriors, failed = solve_all(pool, recipe, families, inputs.found, order)
    skipped = (*inputs.skipped, *failed)
    if not any(posteriors.values()):
        raise _NothingAnsweredError(skipped)
    with clock.stage("families"):
        flares = {one.name: one.rows for one in inputs.found}
        probabilities, source = family_probabilities(toolbox, flares, posteriors, wish.exact)
    parameters = {family: toolbox.parameters(family) for family in families}
    return Outcome(tuple(flares), parameters, posteriors, probabilities, source, skipped)


def _groups(recipe: Recipe, outcome: Outcome, inputs: Inputs, wish: Wish) -> Iterator[tuple[str, Any]]:
    """Arrange the draws of a run."""
    return draws_groups(
        {one.name: one.rows for one in inputs.found},
        outcome.posteriors,
        outcome.parameters,
        {family: prior_draws(recipe, family) for family in outcome.posteriors},
        outcome.probabilities,
        {"created_by": f"emu {__version__}", "seed": wish.seed, "probability_source": outcome.source},
    )


def _options(wish: Wish) -> dict[str, Any]:
    """Write what was asked for in the words of JSON."""
    plain = {name: value for name, value in vars(wish).items() if name not in ("columns", "target", "families")}
    return {
        **plain,
        "families": None if wish.families is None else list(wish.families),
        "columns": None if wish.columns is None else str(wish.columns),
        "target": None if wish.target is None else wish.target.to_table(),
    }


def _print(summary: dict[str, Any]) -> None:
    """Print a summary for machines, the only thing on stdout."""
    print(json.dumps(summary, indent=2, ensure_ascii=False, allow_nan=False))
