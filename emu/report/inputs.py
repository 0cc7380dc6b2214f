"""Find flares in files and folders, and part those that can be answered from those that cannot."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from emu.errors import UserError
from emu.observe.campaign import Campaign
from emu.observe.flare import Flare
from emu.observe.gather import flare_files, gather
from emu.observe.rows import Rows
from emu.report.checksum import checksum
from emu.report.posterior import Unanswered
from emu.units import Target

__all__ = ["Found", "Inputs", "screen"]


@dataclass(frozen=True)
class Found:
    """Hold a flare that can be answered.

    Attributes:
        flare: as it was read.
        rows: its measurements in geometric units and the campaign's flux unit.
        target: what converted them.
    """

    flare: Flare
    rows: Rows
    target: Target

    @property
    def name(self) -> str:
        """Return the flare's name, unique in the run."""
        return self.flare.name


@dataclass(frozen=True)
class Inputs:
    """Hold what was found, what was left out and why, and the checksum of every file that was read."""

    found: tuple[Found, ...]
    skipped: tuple[Unanswered, ...]
    checksums: dict[str, str]


def screen(
    paths: Sequence[Path], columns: Path | None, campaign: Campaign, target: Target | None = None
) -> Inputs:
    """Read all flares and compare each with the campaign.

    Args:
        paths: tables, or folders of them.
        columns: translation of other people's headers.
        campaign: what the flares must lie within.
        target: for flares whose table names none; the campaign's where None.

    Returns:
        Flares in the order of the files, and one entry for everything that was left out.

    Raises:
        UserError: no files, or a wrong column map.
    """
    read = gather(paths, columns)
    found: list[Found] = []
    skipped = [Unanswered("", "read", refusal) for refusal in read.refusals]
    for flare in read.flares:
        one = _judged(flare, campaign, target or campaign.target)
        if isinstance(one, Found):
            found.append(one)
        else:
            skipped.append(one)
    sums = {str(file): checksum(file) for file in flare_files(paths) if file.is_file()}
    return Inputs(tuple(found), tuple(skipped), sums)


def _judged(flare: Flare, campaign: Campaign, target: Target) -> Found | Unanswered:
    """Convert a flare and say whether it lies within the campaign."""
    try:
        rows = flare.rows(target, campaign.flux_unit)
    except UserError as problem:
        return Unanswered(flare.name, "read", str(problem))
    reasons = campaign.outside(rows)
    if reasons:
        where = f"{flare.where}: outside campaign {campaign.name}: {'; '.join(reasons)}"
        return Unanswered(flare.name, "campaign", where)
    return Found(flare, rows, flare.target or target)
