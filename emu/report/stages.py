"""The two long stages of a run, spread over processes: sampling, and drawing figures."""

from __future__ import annotations

import sys
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

from emu.report.inputs import Found
from emu.report.pictures import Album, draw_album, safe_name
from emu.report.posterior import Posterior, Unanswered
from emu.report.progress import Meter
from emu.report.solve import Block, Order, solve_block
from emu.report.style import Scale
from emu.report.toolbox import Recipe
from emu.report.workers import Pool

__all__ = ["complain", "draw_all", "solve_all"]

_BLOCK = 8  # flares that a process answers at once

Answers = dict[str, list[Posterior]]


def complain(skipped: Iterable[Unanswered]) -> None:
    """Say on stderr what is left out and why, one line each."""
    for one in skipped:
        # What was refused while reading names its file and flare already.
        who = "" if one.stage in ("read", "campaign") else f"flare {one.flare}: "
        print(f"skipped: {who}{one.reason}", file=sys.stderr)


def solve_all(
    pool: Pool, recipe: Recipe, families: Sequence[str], flares: Sequence[Found], order: Order
) -> tuple[Answers, list[Unanswered]]:
    """Answer every flare under every family.

    Args:
        pool: runs the blocks.
        recipe: opens what they need.
        families: K names.
        flares: F flares.
        order: what is wanted.

    Returns:
        family -> posteriors in the order of the flares, and what could not be answered.
    """
    size = 1 if order.exact else _BLOCK
    rows = [(one.name, one.rows) for one in flares]
    blocks = [
        Block(recipe, family, tuple(rows[start : start + size]), order)
        for family in families
        for start in range(0, len(rows), size)
    ]
    answers: dict[int, tuple[Posterior | Unanswered, ...]] = {}
    with Meter("posteriors", len(families) * len(flares)) as meter:
        alone = pool.executor is None  # only then can a sampler speak while it works
        results = (
            ((place, solve_block(block, meter.note)) for place, block in enumerate(blocks))
            if alone
            else pool.run(solve_block, blocks)
        )
        for place, found in results:
            answers[place] = found
            complain(one for one in found if isinstance(one, Unanswered))
            meter.advance(len(found))
    every = [one for place in sorted(answers) for one in answers[place]]
    good: Answers = {family: [] for family in families}
    for one in every:
        if isinstance(one, Posterior):
            good[one.family].append(one)
    return good, [one for one in every if isinstance(one, Unanswered)]


def draw_all(
    pool: Pool,
    recipe: Recipe,
    posteriors: Mapping[str, Sequence[Posterior]],
    flares: Sequence[Found],
    flux_unit: str,
    folder: Path,
) -> list[Unanswered]:
    """Draw the figures of every posterior into <folder>/<flare>/<family>/.

    Returns:
        What could not be drawn.
    """
    places = _folders([one.name for one in flares])
    by_name = {one.name: one for one in flares}
    albums = [
        Album(
            recipe,
            posterior,
            by_name[posterior.flare].rows,
            Scale(by_name[posterior.flare].target, flux_unit),
            folder / places[posterior.flare] / safe_name(family),
        )
        for family, each in posteriors.items()
        for posterior in each
    ]
    bad: list[Unanswered] = []
    with Meter("figures", len(albums)) as meter:
        for _, found in pool.run(draw_album, albums):
            if found is not None:
                complain([found])
                bad.append(found)
            meter.advance(1)
    return bad


def _folders(names: Sequence[str]) -> dict[str, str]:
    """Give every flare a folder of its own, even where file systems cannot tell two names apart."""
    taken: set[str] = set()
    folders: dict[str, str] = {}
    for name in names:
        folder = base = safe_name(name)
        number = 1
        while folder.lower() in taken:
            number += 1
            folder = f"{base}~{number}"
        taken.add(folder.lower())
        folders[name] = folder
    return folders
