"""Say in words what was read of a flare."""

from collections.abc import Iterator

import numpy as np

from emu.observe.record import Flare
from emu.observe.rows import KINDS
from emu.units import Target

__all__ = ["describe", "unit_of"]

_HEADER = ("kind", "rows", "minutes between", "values", "errors", "unit")


def describe(flare: Flare, target: Target | None) -> str:
    """Describe a flare: its moment and span, and a table of its kinds.

    Args:
        flare: as it was read.
        target: what gives the span in GM/c^3, where the flare's table names none; None if unknown.

    Returns:
        Several lines.
    """
    own = flare.target or target
    span = float(np.ptp(flare.seconds))
    head = f"{flare.name}: {len(flare)} rows over {span / 60.0:.1f} minutes"
    if own is not None:
        head += f" = {span / own.time_unit:.1f} GM/c^3 of {own.name!r}"
    lines = [f"{head}, t_ref {flare.t_ref} ({flare.where})"]
    table = [_HEADER, *_table(flare)]
    widths = [max(len(row[column]) for row in table) for column in range(len(_HEADER))]
    for row in table:
        lines.append("  " + "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip())
    return "\n".join(lines)


def unit_of(kind: str, flare: Flare) -> str:
    """Return the unit of a kind's values in a flare, "" for a pure number."""
    if kind in ("east", "north"):
        return "µas"
    return "" if kind in ("q", "u") else flare.flux_unit


def _table(flare: Flare) -> Iterator[tuple[str, ...]]:
    for code in np.unique(flare.kind):
        mine = flare.kind == code
        step = np.diff(flare.seconds[mine]) / 60.0
        between = f"{np.median(step):.2f} ({step.min():.2f} to {step.max():.2f})" if step.size else ""
        value, error = flare.value[mine], flare.error[mine]
        yield (
            KINDS[code],
            str(np.count_nonzero(mine)),
            between,
            f"{value.min():.3g} to {value.max():.3g}",
            f"{error.min():.3g} to {error.max():.3g}",
            unit_of(KINDS[code], flare),
        )
