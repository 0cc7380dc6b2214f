"""A short account of a run for the person at the terminal."""

from __future__ import annotations

import sys
from pathlib import Path

from emu.report.intervals import Interval
from emu.report.posterior import Posterior
from emu.report.summary import Outcome, trust

__all__ = ["show"]

_WIDTH = 160  # of a line that goes to a file
_MOST = 20  # flares shown; the tables hold all
_SHOWN = ("radius", "inclination", "spin")


def show(outcome: Outcome, out: Path) -> None:
    """Print one line a flare and family: probability, trust, and a few parameters.

    Args:
        outcome: all answers.
        out: folder that holds everything else.
    """
    from rich.console import Console
    from rich.table import Table

    names = _columns(outcome)
    table = Table(box=None, pad_edge=False)
    for header in ("flare", "family", "probability", *names, "trust"):
        table.add_column(header, justify="right" if header in (*names, "probability") else "left")
    chosen = set(outcome.flares[:_MOST])
    for posterior in outcome.ordered():
        if posterior.flare in chosen:
            table.add_row(*_line(outcome, posterior, names))
    console = Console(width=None if sys.stdout.isatty() else _WIDTH)
    console.print(table)
    if len(outcome.flares) > _MOST:
        print(f"and {len(outcome.flares) - _MOST} flares more")
    answered = len({posterior.flare for posterior in outcome.ordered()})
    print(f"{answered} flares answered, {len(outcome.skipped)} answers left out; everything is in {out}")
    print("medians with 68 % intervals, - where the data do not inform")


def _columns(outcome: Outcome) -> tuple[str, ...]:
    """Choose parameters to show: the usual three, or the first three of a model without them."""
    parameters = {p.name: p for each in outcome.parameters.values() for p in each}
    return tuple(name for name in _SHOWN if name in parameters) or tuple(parameters)[:3]


def _line(outcome: Outcome, posterior: Posterior, names: tuple[str, ...]) -> tuple[str, ...]:
    """Write one line of the table."""
    parameters = [p.name for p in outcome.parameters[posterior.family]]
    intervals = dict(zip(parameters, posterior.intervals, strict=True))
    values = [_value(intervals[name]) if name in intervals else "" for name in names]
    return (
        posterior.flare,
        posterior.family,
        f"{outcome.probability(posterior):.3f}",
        *values,
        trust(posterior),
    )


def _value(interval: Interval) -> str:
    """Write a median with its 68 % interval, or a dash."""
    if not interval.informed:
        return "-"
    return f"{interval.median:.3g} [{interval.low68:.3g}, {interval.high68:.3g}]"
