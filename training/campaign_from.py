"""`emu-train campaign-from`: write a campaign that matches one's own tables."""

import sys
from collections.abc import Sequence
from pathlib import Path

from emu.configs import read_toml
from emu.errors import UserError
from emu.observe.campaign_from import campaign_from
from emu.observe.gather import gather
from emu.units import Target

__all__ = ["write_campaign"]

_SOME_LEFT_OUT = 3


def write_campaign(
    paths: Sequence[Path], out: Path, columns: Path | None = None, target: str | None = None
) -> int:
    """Read flares and write the campaign they could have come from, named after its file.

    Args:
        paths: files and folders.
        out: the campaign's .toml; an existing one is not replaced.
        columns: TOML that translates headers.
        target: name or path of a target's TOML; None for the one that the tables name.

    Returns:
        0; 3 where a file or flare was refused and the campaign is made from the others.

    Raises:
        UserError: nothing could be read, no target is known, or the file exists.
    """
    if out.suffix != ".toml":
        raise UserError(f"{out}: a campaign is TOML; give a name in .toml")
    if out.exists():
        raise UserError(f"{out}: exists already; give another name, or remove it")
    read = gather(paths, columns)
    for line in read.refusals:
        print(f"refused: {line}", file=sys.stderr)
    if not read.flares:
        raise UserError(f"none of {len(read.refusals)} flares or files could be read")
    stated = None if target is None else Target.from_table(read_toml("targets", target), target)
    known = stated or next((flare.target for flare in read.flares if flare.target), None)
    if known is None:
        raise UserError("no target: give its name, mass and distance in the tables' metadata, or --target")
    try:
        out.write_text(campaign_from(read.flares, known, out.stem), encoding="utf-8")
    except OSError as problem:
        raise UserError(f"{out}: cannot be written: {problem.strerror}") from problem
    print(f"{out}: a campaign from {len(read.flares)} flares")
    return _SOME_LEFT_OUT if read.refusals else 0
