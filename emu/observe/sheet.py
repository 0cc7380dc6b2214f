"""One measured number a row, as a table gives it: names resolved, numbers still in the table's units."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table
from astropy.time import Time
from numpy.typing import NDArray

from emu.configs import check_keys
from emu.errors import UserError
from emu.observe.columns import META, NAMES, ColumnMap
from emu.observe.table import open_table

__all__ = ["Sheet", "read_sheets"]


@dataclass(frozen=True)
class Sheet:
    """Hold the rows of one flare before any unit is applied.

    Args:
        where: file and flare, for error messages.
        flare: name of the flare.
        row: (R,) number of each row in the file, from 1 below the header.
        what: (R,) entries of NAMES.
        value, error: (R,) float64; NaN where the table has nothing.
        time: (R,) column of numbers or texts, or an astropy Time.
        units: column -> unit text of its header, None without one; for time, value and error.
        meta: entries of META.
    """

    where: str
    flare: str
    row: NDArray[np.int64]
    what: NDArray[np.str_]
    value: NDArray[np.float64]
    error: NDArray[np.float64]
    time: Any
    units: Mapping[str, str | None]
    meta: Mapping[str, Any]

    def refuse(self, place: int | np.integer[Any], message: str) -> UserError:
        """Return the error for the row at a place of the arrays."""
        return UserError(f"{self.where}, row {self.row[place]}: {message}")

    def take(self, places: NDArray[Any], **changes: Any) -> "Sheet":
        """Return some of the rows, in the order of `places` (indices or a mask)."""
        columns = {name: getattr(self, name)[places] for name in ("row", "what", "value", "error", "time")}
        return replace(self, **columns, **changes)


def read_sheets(path: str | Path, columns: ColumnMap) -> tuple[Sheet, ...]:
    """Read a table and part it into flares, in the order of their first rows.

    Args:
        path: an ECSV or CSV file.
        columns: translation of its headers.

    Returns:
        One sheet a flare.

    Raises:
        UserError: the table cannot be read, or a column is missing or of the wrong type.
    """
    table = open_table(path)
    meta = {key: table.meta[key] for key in META if key in table.meta} | dict(columns.meta)
    meta["units"] = _unit_table(path, meta)
    sheet = _wide(path, table, columns, meta) if columns.measured else _long(path, table, columns, meta)
    names = _flare_names(path, table, columns, meta)[sheet.row - 1]
    order = dict.fromkeys(names.tolist())
    several = len(order) > 1
    return tuple(
        sheet.take(names == name, flare=name, where=f"{path}, flare {name}" if several else str(path))
        for name in order
    )


def _long(path: str | Path, table: Table, columns: ColumnMap, meta: Mapping[str, Any]) -> Sheet:
    words = _texts(path, table, columns.theirs("what"))
    value, error = (_numbers(path, table, columns.theirs(name)) for name in ("value", "error"))
    sheet = Sheet(
        where=str(path),
        flare="",
        row=np.arange(1, len(table) + 1),
        what=np.array([columns.what.get(word, word) for word in words]),
        value=value,
        error=error,
        time=_column(path, table, columns.theirs("time")),
        units={name: _unit(table, columns.theirs(name)) for name in ("time", "value", "error")},
        meta=meta,
    )
    for place in np.flatnonzero(~np.isin(sheet.what, NAMES)):
        raise sheet.refuse(place, f"unknown what {words[place]!r}; one of {', '.join(NAMES)}")
    return sheet


def _wide(path: str | Path, table: Table, columns: ColumnMap, meta: Mapping[str, Any]) -> Sheet:
    parts, units = [], dict(meta["units"])
    time = _column(path, table, columns.theirs("time"))
    for name, pair in columns.measured.items():
        value, error = (_numbers(path, table, pair[column]) for column in ("value", "error"))
        # In a table of one row a time an empty pair of cells means: not measured then.
        measured = np.flatnonzero(~(_empty(table[pair["value"]]) & _empty(table[pair["error"]])))
        header = _unit(table, pair["value"])
        if header is not None:
            units.setdefault(name, header)
        parts.append((measured, np.full(measured.size, name), value[measured], error[measured]))
    place, what, value, error = (np.concatenate(column) for column in zip(*parts, strict=True))
    return Sheet(
        where=str(path),
        flare="",
        row=place + 1,
        what=what,
        value=value,
        error=error,
        time=time[place],
        units={"time": _unit(table, columns.theirs("time")), "value": None, "error": None},
        meta={**meta, "units": units},
    )


def _column(path: str | Path, table: Table, name: str) -> Any:
    if name not in table.colnames:
        there = ", ".join(table.colnames)
        raise UserError(f"{path}: has no column {name!r} but {there}; rename it or map it with --columns")
    column = table[name]
    if column.ndim != 1:
        raise UserError(f"{path}: column {name!r} holds several numbers a row; give one a row")
    return column


def _numbers(path: str | Path, table: Table, name: str) -> NDArray[np.float64]:
    """Return a column as float64 with NaN in empty cells."""
    column = _column(path, table, name)
    if isinstance(column, Time):
        raise UserError(f"{path}: column {name!r} holds times; give numbers")
    numbers = np.full(len(column), np.nan)
    for place, cell in enumerate(column.tolist()):
        try:
            numbers[place] = np.nan if cell is None else float(cell)
        except (TypeError, ValueError):
            raise UserError(f"{path}, row {place + 1}: {name} is {cell!r}; give a number") from None
    return numbers


def _empty(column: Any) -> NDArray[np.bool_]:
    return np.broadcast_to(np.asarray(getattr(column, "mask", False), dtype=bool), (len(column),))


def _texts(path: str | Path, table: Table, name: str) -> list[str]:
    column = _column(path, table, name)
    for place in np.flatnonzero(_empty(column)):
        raise UserError(f"{path}, row {place + 1}: {name} is empty; fill it in or remove the row")
    return [str(cell).strip() for cell in column.tolist()]


def _unit(table: Table, name: str) -> str | None:
    unit = getattr(table[name], "unit", None)
    return None if unit is None else str(unit)


def _unit_table(path: str | Path, meta: Mapping[str, Any]) -> Mapping[str, Any]:
    units = meta.get("units", {})
    if not isinstance(units, Mapping) or not all(isinstance(unit, str) for unit in units.values()):
        raise UserError(f"{path}: units is {units!r}; give a table of texts by kind, such as {{flux: mJy}}")
    check_keys(units, (), ("time", *NAMES), f"{path}: units")
    return units


def _flare_names(
    path: str | Path, table: Table, columns: ColumnMap, meta: Mapping[str, Any]
) -> NDArray[np.str_]:
    if columns.theirs("flare") in table.colnames or "flare" in columns.columns:
        return np.array(_texts(path, table, columns.theirs("flare")))
    return np.full(len(table), str(meta.get("flare", Path(path).stem)))
