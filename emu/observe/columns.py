"""What a table does not say in our words: a small TOML that maps other people's headers and units.

The same keys, apart from `columns`, `measured` and `what`, may stand in the metadata of an ECSV table.
"""

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from emu.configs import check_keys
from emu.errors import UserError
from emu.observe.rows import KINDS

__all__ = ["NAMES", "META", "ColumnMap", "read_columns"]

NAMES = (*KINDS, "evpa", "polarised_fraction")
"""What a table's row may measure; the last two become q and u."""

META = ("units", "flare", "target", "t_ref", "time_format", "time_scale", "time_zero")
"""What the metadata of a table may say."""


@dataclass(frozen=True)
class ColumnMap:
    """Translate a table.

    Args:
        columns: our column (time, what, value, error, flare) -> theirs.
        measured: name of a measurement -> their two columns {value, error}: for tables with one row a
            time; empty for tables with one row a measured number.
        what: their word in the column `what` -> ours.
        meta: what the table's metadata leaves out; it wins over the metadata.
    """

    columns: Mapping[str, str] = field(default_factory=dict)
    measured: Mapping[str, Mapping[str, str]] = field(default_factory=dict)
    what: Mapping[str, str] = field(default_factory=dict)
    meta: Mapping[str, Any] = field(default_factory=dict)

    def theirs(self, column: str) -> str:
        """Return their header of one of our columns."""
        return self.columns.get(column, column)


def read_columns(path: str | Path | None) -> ColumnMap:
    """Read a column map.

    Args:
        path: a TOML file; None for a table that is in our words already.

    Raises:
        UserError: the file cannot be read, or a key is unknown.
    """
    if path is None:
        return ColumnMap()
    where = str(path)
    try:
        table = tomllib.loads(Path(path).read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as problem:
        raise UserError(f"{where}: cannot be read as a column map in TOML: {problem}") from problem
    check_keys(table, (), ("columns", "measured", "what", *META), where)
    columns = _texts(table.get("columns", {}), f"{where}: [columns]")
    check_keys(columns, (), ("time", "what", "value", "error", "flare"), f"{where}: [columns]")
    measured = _measured(table.get("measured", {}), where)
    if measured and {"what", "value", "error"} & set(columns):
        raise UserError(f"{where}: [measured] replaces columns what, value and error; give one or the other")
    return ColumnMap(
        columns=columns,
        measured=measured,
        what=_texts(table.get("what", {}), f"{where}: [what]"),
        meta={key: table[key] for key in META if key in table},
    )


def _measured(table: Any, where: str) -> dict[str, dict[str, str]]:
    if not isinstance(table, dict):
        raise UserError(f"{where}: measured must be tables [measured.NAME]")
    check_keys(table, (), NAMES, f"{where}: [measured]")
    columns = {name: _texts(entry, f"{where}: [measured.{name}]") for name, entry in table.items()}
    for name, entry in columns.items():
        check_keys(entry, ("value", "error"), (), f"{where}: [measured.{name}]")
    return columns


def _texts(table: Any, where: str) -> dict[str, str]:
    if not isinstance(table, dict) or not all(isinstance(value, str) for value in table.values()):
        raise UserError(f"{where}: give a table of texts")
    return dict(table)
