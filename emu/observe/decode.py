"""Turn the rows of a table into a flare, or say in one line why not."""

import numpy as np
from numpy.typing import NDArray

from emu.errors import UserError
from emu.observe.measured import flux_unit_of, in_common_units
from emu.observe.polarisation import fractions_of
from emu.observe.proportion import check_span
from emu.observe.record import Flare
from emu.observe.rows import KINDS
from emu.observe.schedule import MIN_ROWS
from emu.observe.sheet import Sheet
from emu.observe.stated import target_of
from emu.observe.times import seconds_of

__all__ = ["decode"]


def decode(sheet: Sheet) -> Flare:
    """Turn the rows of a table into a flare.

    Args:
        sheet: rows of one flare, still in the table's units.

    Raises:
        UserError: a reason to refuse it.
    """
    if sheet.row.size < MIN_ROWS:
        raise UserError(f"{sheet.where}: {sheet.row.size} rows; a flare needs at least {MIN_ROWS}")
    value, error = in_common_units(sheet)
    seconds, t_ref = seconds_of(sheet)
    _refuse_repeats(sheet, seconds)
    target = target_of(sheet)
    check_span(seconds, target, sheet.where)
    flux_unit = flux_unit_of(sheet)
    what, seconds, value, error = fractions_of(sheet, seconds, value, error)
    kind = np.array([KINDS.index(name) for name in what], dtype=np.int8)
    order = np.argsort(seconds, kind="stable")
    return Flare(
        name=sheet.flare,
        seconds=seconds[order],
        kind=kind[order],
        value=value[order],
        error=error[order],
        flux_unit=flux_unit,
        t_ref=t_ref,
        where=sheet.where,
        target=target,
    )


def _refuse_repeats(sheet: Sheet, seconds: NDArray[np.float64]) -> None:
    """Refuse a row that is there twice: a slip of copying that would count light twice."""
    seen: dict[tuple[object, ...], int] = {}
    for place, entry in enumerate(zip(seconds, sheet.what, sheet.value, sheet.error, strict=True)):
        if entry in seen:
            raise sheet.refuse(place, f"repeats row {sheet.row[seen[entry]]}; remove one of them")
        seen[entry] = place
