"""A run's folder: all of it, or nothing."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from emu.errors import UserError

if TYPE_CHECKING:
    from astropy.table import Table

__all__ = ["check_free", "run_folder", "write_record", "write_tables"]

RECORD = "run.json"
MADE_BY = "emu infer"


def check_free(out: Path, overwrite: bool) -> None:
    """Refuse a folder that holds something else, before any work is done.

    Args:
        out: where the run shall stand.
        overwrite: whether an earlier run there may be replaced.

    Raises:
        UserError: it exists and may not be replaced.
    """
    if not out.exists():
        return
    if not out.is_dir():
        raise UserError(f"{out} is a file; give --out a folder")
    if not any(out.iterdir()):
        return
    if not _is_run(out):
        raise UserError(f"{out} is not empty and not an earlier run; give --out a new folder")
    if not overwrite:
        raise UserError(f"{out} holds an earlier run; give another --out, or --overwrite")


@contextmanager
def run_folder(out: Path, overwrite: bool) -> Iterator[Path]:
    """Give a hidden folder beside the final one, and rename it when all is written.

    An error or an interrupt removes it; after a kill it stays as `.<name>.partial-*` and can be deleted.

    Args:
        out: where the run shall stand.
        overwrite: whether an earlier run there may be replaced.

    Raises:
        UserError: the folder cannot be made or may not be replaced.
    """
    check_free(out, overwrite)
    out = out.absolute()
    try:
        out.parent.mkdir(parents=True, exist_ok=True)
        part = Path(tempfile.mkdtemp(prefix=f".{out.name}.partial-", dir=out.parent))
    except OSError as problem:
        raise UserError(f"{out}: cannot be made: {problem.strerror}; choose another --out") from problem
    try:
        yield part
        part.chmod(0o777 & ~_umask())  # mkdtemp lets nobody else in
        check_free(out, overwrite)
        _put(part, out)
    except BaseException:
        shutil.rmtree(part, ignore_errors=True)
        raise


def write_tables(folder: Path, tables: Mapping[str, Table]) -> None:
    """Write tables as <name>.ecsv."""
    for name, table in tables.items():
        table.write(folder / f"{name}.ecsv", format="ascii.ecsv")


def write_record(folder: Path, record: Mapping[str, Any]) -> None:
    """Write run.json; strictly JSON, so a number that is not finite is an error."""
    text = json.dumps({"made_by": MADE_BY, **record}, indent=2, ensure_ascii=False, allow_nan=False)
    (folder / RECORD).write_text(text + "\n", encoding="utf-8")


def _is_run(folder: Path) -> bool:
    """Tell whether a folder holds a run of this command."""
    try:
        record = json.loads((folder / RECORD).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return isinstance(record, dict) and record.get("made_by") == MADE_BY


def _put(part: Path, out: Path) -> None:
    """Rename the finished folder; an earlier run steps aside first and is then removed."""
    if not out.exists() or not any(out.iterdir()):
        os.replace(part, out)
        return
    aside = Path(tempfile.mkdtemp(prefix=f".{out.name}.replaced-", dir=out.parent))
    os.replace(out, aside)
    os.replace(part, out)
    shutil.rmtree(aside)


def _umask() -> int:
    """Read the mask of new files, which can only be read by setting it."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
