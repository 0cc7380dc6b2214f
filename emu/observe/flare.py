"""Flares in tables: read them, and write tables that read back to the same flares."""

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table

from emu.errors import UserError
from emu.observe.columns import read_columns
from emu.observe.decode import decode
from emu.observe.record import Flare
from emu.observe.rows import KINDS
from emu.observe.sheet import read_sheets

__all__ = ["Flare", "read_flare", "read_flares", "write_flares"]


def read_flares(
    path: str | Path, columns: str | Path | None = None, flare_names: Iterable[str] | None = None
) -> tuple[Flare, ...]:
    """Read all flares of a table.

    Args:
        path: an ECSV or CSV file.
        columns: a TOML file that translates its headers; None where they are ours.
        flare_names: which flares of the table; None for all.

    Returns:
        The flares in the order of their first rows.

    Raises:
        UserError: the first reason to refuse the table or a flare in it: file, row and cure.
    """
    sheets = read_sheets(path, read_columns(columns))
    if flare_names is not None:
        wanted = set(flare_names)
        missing = wanted - {sheet.flare for sheet in sheets}
        if missing:
            there = ", ".join(sheet.flare for sheet in sheets)
            raise UserError(f"{path}: has no flare {', '.join(sorted(missing))}; it has {there}")
        sheets = tuple(sheet for sheet in sheets if sheet.flare in wanted)
    return tuple(decode(sheet) for sheet in sheets)


def read_flare(path: str | Path, columns: str | Path | None = None) -> Flare:
    """Read a table that holds exactly one flare.

    Args:
        path: an ECSV or CSV file.
        columns: a TOML file that translates its headers; None where they are ours.

    Raises:
        UserError: it cannot be read, or holds several flares.
    """
    flares = read_flares(path, columns)
    if len(flares) != 1:
        names = ", ".join(flare.name for flare in flares)
        raise UserError(f"{path}: holds {len(flares)} flares ({names}); read them all with read_flares")
    return flares[0]


def write_flares(
    path: str | Path,
    flares: Sequence[Flare],
    truth: Mapping[str, Mapping[str, float]] | None = None,
    origin: str | None = None,
) -> None:
    """Write flares to one ECSV table; an existing file is replaced.

    Args:
        path: the file.
        flares: at least one; they share flux unit and target, and have different names.
        truth: flare name -> parameter name -> value, where the parameters are known.
        origin: one line for people on where the flares come from.

    Raises:
        UserError: the flares do not fit in one table, or the file cannot be written.
    """
    _check_alike(path, flares)
    first = flares[0]
    units = dict.fromkeys(("east", "north"), "uas") | dict.fromkeys(("flux", "Q", "U"), first.flux_unit)
    kinds = np.concatenate([flare.kind for flare in flares])
    meta: dict[str, Any] = {
        "units": {KINDS[code]: units.get(KINDS[code], "") for code in np.unique(kinds)},
        "t_ref": {flare.name: 0.0 for flare in flares},
        "time_zero": {flare.name: flare.t_ref for flare in flares},
    }
    if first.target is not None:
        meta["target"] = first.target.to_table()
    if truth is not None:
        meta["truth"] = {
            name: {key: float(value) for key, value in row.items()} for name, row in truth.items()
        }
    if origin is not None:
        meta["origin"] = origin
    table = Table(meta=meta)
    table["flare"] = np.concatenate([np.full(len(flare), flare.name) for flare in flares])
    table["time"] = np.concatenate([flare.seconds for flare in flares])
    table["time"].unit = "s"
    table["what"] = [KINDS[code] for code in kinds]
    table["value"] = np.concatenate([flare.value for flare in flares])
    table["error"] = np.concatenate([flare.error for flare in flares])
    try:
        table.write(path, format="ascii.ecsv", overwrite=True)
    except OSError as problem:
        raise UserError(f"{path}: cannot be written: {problem.strerror}") from problem


def _check_alike(path: str | Path, flares: Sequence[Flare]) -> None:
    if not flares:
        raise UserError(f"{path}: no flares to write")
    if len({flare.name for flare in flares}) != len(flares):
        raise UserError(f"{path}: two flares share a name; rename one")
    if len({(flare.flux_unit, flare.target) for flare in flares}) != 1:
        raise UserError(f"{path}: flares of different flux units or targets need a table each")
