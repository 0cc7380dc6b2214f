"""The table from which a recipe is chosen: held-out loss against draws a second, at equal cost."""

import json
import time
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, replace
from pathlib import Path

import torch

from emu.inference.flow import draw
from training.files import digest, write_atomically
from training.fit_estimator import estimator_task, nats_over_prior
from training.loop import train
from training.material import load_material, stream
from training.recipe import Recipe, recipe

__all__ = ["Choice", "choices"]

_TIMED_STEPS = 10
_TIMED_DRAWS = (1000, 8)  # draws, flares


@dataclass(frozen=True)
class Choice:
    """Hold one line of the table.

    Args:
        recipe: its name.
        weights: number of trained numbers.
        steps: steps that the budget allowed.
        cpu_minutes: spent on training.
        nats_over_prior: mean ln(q / prior) at the truth of held-out flares.
        draws_per_second: draws with their density, a core.
    """

    recipe: str
    weights: int
    steps: int
    cpu_minutes: float
    nats_over_prior: float
    draws_per_second: float


def choices(
    set_path: Path,
    recipes: Sequence[str],
    out: Path,
    *,
    minutes: float,
    seed: int = 0,
    report: Callable[[Choice], None] | None = None,
) -> tuple[Choice, ...]:
    """Train each recipe on one set for the same CPU time and compare.

    How many steps a budget allows is measured here, on a few steps of each recipe: the numbers depend on the
    machine, other than those of `emu-train fit`. A recipe that is in ``out/choices.json`` already is not run
    again.

    Args:
        set_path: a complete training set.
        recipes: names, or paths of TOMLs.
        out: folder for choices.json and choices.md.
        minutes: CPU-minutes for each.
        seed: of the fits.
        report: called with each line.

    Returns:
        The lines, in the order of the recipes.
    """
    kept = out / "choices.json"
    known = {line["recipe"]: Choice(**line) for line in json.loads(kept.read_text())} if kept.exists() else {}
    lines = []
    for name in recipes:
        line = known.get(name) or _try(set_path, name, recipe(name), out, minutes, seed)
        lines.append(line)
        write_atomically(kept, json.dumps([asdict(each) for each in lines], indent=1).encode())
        write_atomically(out / "choices.md", _table(lines).encode())
        if report is not None:
            report(line)
    return tuple(lines)


def _try(set_path: Path, name: str, chosen: Recipe, out: Path, minutes: float, seed: int) -> Choice:
    """Train one recipe within the budget, and time its draws."""
    material = load_material(set_path, chosen.held_out, chosen.embedding.nodes)
    source = digest(set_path / "set.json")
    tag = Path(name).stem
    timed = replace(chosen.loop, every=10 * _TIMED_STEPS)
    material.train(chosen.loop.batch, stream(seed, 9))  # compiles what is compiled on first use
    trial = train(estimator_task(material, chosen, seed, source), timed, _TIMED_STEPS, out / f"{tag}.trial")
    (out / f"{tag}.trial").unlink()
    steps = max(1, int(minutes * 60 / (trial.cpu_seconds / _TIMED_STEPS)))
    task = estimator_task(material, chosen, seed, source)
    outcome = train(task, chosen.loop, steps, out / f"{tag}.checkpoint")
    task.module.load_state_dict(outcome.weights)
    return Choice(
        recipe=name,
        weights=sum(parameter.numel() for parameter in task.module.parameters()),
        steps=outcome.step,
        cpu_minutes=outcome.cpu_seconds / 60,
        nats_over_prior=nats_over_prior(outcome.best, material, seed),
        draws_per_second=_speed(task.module, len(material.problem.parameters), chosen.embedding.context),
    )


def _speed(module: torch.nn.Module, features: int, context: int) -> float:
    """Return how many draws a core makes in a second."""
    draws, flares = _TIMED_DRAWS
    embedded, noise = torch.randn(flares, context), torch.randn(draws, flares, features)
    with torch.no_grad():
        draw(module.net, embedded, noise)  # type: ignore[arg-type]  # sbi's container
        started = time.process_time()
        draw(module.net, embedded, noise)  # type: ignore[arg-type]
    return draws * flares / (time.process_time() - started)


def _table(lines: Sequence[Choice]) -> str:
    """Write the lines as Markdown."""
    head = (
        "| recipe | weights | steps | CPU-minutes | ln(q/prior), nats | draws a second |\n|---|---|---|---|---|---|\n"
    )
    return head + "".join(
        f"| {Path(line.recipe).stem} | {line.weights:,} | {line.steps:,} | {line.cpu_minutes:.1f} |"
        f" {line.nats_over_prior:.2f} | {line.draws_per_second:,.0f} |\n"
        for line in lines
    )
