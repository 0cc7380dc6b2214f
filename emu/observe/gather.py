"""Read any number of files and folders; what cannot be read is reported, and the others go on."""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

from emu.errors import UserError
from emu.observe.columns import ColumnMap, read_columns
from emu.observe.decode import decode
from emu.observe.record import Flare
from emu.observe.sheet import read_sheets

__all__ = ["Gathered", "gather", "flare_files"]

_SUFFIXES = (".ecsv", ".csv")


@dataclass(frozen=True)
class Gathered:
    """Hold what was read.

    Args:
        flares: all that could be read, in the order of the files and of their first rows.
        refusals: one line for each file or flare that could not.
    """

    flares: tuple[Flare, ...]
    refusals: tuple[str, ...]


def flare_files(paths: Iterable[str | Path]) -> tuple[Path, ...]:
    """List files; a folder stands for the .ecsv and .csv files within it, in alphabetical order.

    Args:
        paths: files and folders.

    Raises:
        UserError: no path at all, or a folder without such files.
    """
    files: list[Path] = []
    for path in map(Path, paths):
        found = sorted(p for p in path.rglob("*") if p.suffix in _SUFFIXES) if path.is_dir() else [path]
        if not found:
            raise UserError(f"{path}: holds no {' or '.join(_SUFFIXES)} files")
        files += found
    if not files:
        raise UserError("no flares: give files or folders")
    return tuple(dict.fromkeys(files))


def gather(paths: Iterable[str | Path], columns: str | Path | None = None) -> Gathered:
    """Read all flares of files and folders.

    Args:
        paths: files and folders.
        columns: a TOML file that translates headers; None where they are ours.

    Returns:
        The flares, and a refusal for each file or flare that could not be read. A bad row refuses its
        flare, not its table. Of two flares with one name the second is refused.

    Raises:
        UserError: the column map is wrong, or there are no files.
    """
    mapping = read_columns(columns)
    flares: dict[str, Flare] = {}
    refusals: list[str] = []
    for file in flare_files(paths):
        for outcome in _outcomes(file, mapping):
            if isinstance(outcome, str):
                refusals.append(outcome)
            elif outcome.name in flares:
                other = flares[outcome.name].where
                refusals.append(f"{outcome.where}: flare {outcome.name!r} stands in {other} too; rename one")
            else:
                flares[outcome.name] = outcome
    return Gathered(tuple(flares.values()), tuple(refusals))


def _outcomes(file: Path, mapping: ColumnMap) -> Iterator[Flare | str]:
    try:
        sheets = read_sheets(file, mapping)
    except UserError as refusal:
        yield str(refusal)
        return
    for sheet in sheets:
        try:
            yield decode(sheet)
        except UserError as refusal:
            yield str(refusal)
