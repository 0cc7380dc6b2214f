"""Open one table, ECSV or plain CSV, and find its columns; numbers are judged later, flare by flare."""

import csv
import re
import warnings
from collections.abc import Sequence
from pathlib import Path

from astropy.table import Table

from emu.errors import UserError

__all__ = ["open_table"]


def open_table(path: str | Path) -> Table:
    """Read an ECSV or CSV file into an astropy table.

    A file that begins with `# %ECSV` is ECSV whatever its name is; any other is taken as CSV.

    Args:
        path: the file.

    Returns:
        A table of at least one row.

    Raises:
        UserError: unreadable, empty, a header twice, ragged rows, or text where numbers belong.
    """
    lines = _lines(path)
    ecsv = lines[0].startswith("# %ECSV")
    body = [line for line in lines if line.strip() and not line.lstrip().startswith("#")]
    if len(body) < 2:
        raise UserError(f"{path}: holds no rows; give a header line and at least three rows")
    cells = _cells(body, _delimiter(lines) if ecsv else ",")
    _check_header(cells[0], path)
    if not ecsv:
        _check_widths(cells, path)
    try:
        with warnings.catch_warnings():
            # Doubtful units or dates are judged where they are used, with the row at hand.
            warnings.simplefilter("ignore")
            return Table.read(lines if ecsv else body, format="ascii.ecsv" if ecsv else "ascii.csv")
    # Astropy raises many classes (YAML, units, types) for a damaged table; each means the same to a user.
    except Exception as problem:
        raise UserError(_explain(problem, cells, path)) from problem


def _lines(path: str | Path) -> list[str]:
    try:
        # Spreadsheets put a byte-order mark before the first header.
        text = Path(path).read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as problem:
        raise UserError(f"{path}: is not a text file; give an ECSV or CSV table") from problem
    except OSError as problem:
        raise UserError(f"{path}: cannot be read: {problem.strerror}") from problem
    if "\0" in text:
        raise UserError(f"{path}: is not a text file; give an ECSV or CSV table")
    if not text.strip():
        raise UserError(f"{path}: is empty; give an ECSV or CSV table")
    return text.strip().splitlines()


def _delimiter(lines: Sequence[str]) -> str:
    comma = any(re.match(r"#\s*delimiter:\s*['\"]?,", line) for line in lines)
    return "," if comma else " "


def _cells(body: Sequence[str], delimiter: str) -> list[list[str]]:
    return [[cell.strip() for cell in row] for row in csv.reader(body, delimiter=delimiter)]


def _check_header(header: Sequence[str], path: str | Path) -> None:
    for name in header:
        if not name:
            raise UserError(f"{path}: a column has no header; name it or remove it")
        if header.count(name) > 1:
            raise UserError(f"{path}: column {name!r} stands twice; remove or rename one")


def _check_widths(cells: Sequence[Sequence[str]], path: str | Path) -> None:
    for row, line in enumerate(cells[1:], 1):
        if len(line) != len(cells[0]):
            given = f"{len(line)} cells under {len(cells[0])} headers"
            raise UserError(f"{path}, row {row}: {given}; correct the row")


def _explain(problem: Exception, cells: Sequence[Sequence[str]], path: str | Path) -> str:
    """Say what astropy could not read, with the row where a cell is not a number."""
    named = re.search(r"column '(.+)' failed to convert", str(problem))
    if named and named[1] in cells[0]:
        place = cells[0].index(named[1])
        for row, line in enumerate(cells[1:], 1):
            if place < len(line) and not _is_number(line[place]):
                return f"{path}, row {row}: {named[1]} is {line[place]!r}; give a number"
    reason = f"its header lacks {problem}" if isinstance(problem, KeyError) else problem
    return f"{path}: cannot be read as a table: {reason}"


def _is_number(cell: str) -> bool:
    """Tell whether a cell is empty or can be read as a number."""
    try:
        float(cell or "nan")
    except ValueError:
        return False
    return True
