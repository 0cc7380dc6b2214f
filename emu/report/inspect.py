"""`emu inspect`: show what tables hold, and whether a campaign covers it."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from emu.configs import read_toml
from emu.errors import UserError
from emu.observe.campaign import Campaign
from emu.observe.campaign import campaign as read_campaign
from emu.observe.gather import gather
from emu.observe.inspect import describe, unit_of
from emu.observe.record import Flare
from emu.observe.rows import KINDS
from emu.report.pictures import safe_name
from emu.report.style import COLOURS, save
from emu.units import Target

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["inspect", "flare_figure"]

_SOME_LEFT_OUT = 3


def inspect(
    paths: Sequence[Path],
    columns: Path | None = None,
    campaign: str | None = None,
    target: str | None = None,
    out: Path | None = None,
) -> int:
    """Print a table for every flare and draw it.

    Args:
        paths: files and folders.
        columns: TOML that translates headers.
        campaign: name or path of a campaign to compare with; None for no comparison.
        target: name or path of a target's TOML, which replaces what the tables name.
        out: a .png, or a folder for one .png a flare; None for no figures.

    Returns:
        0; 3 where a file or flare was refused, or lies outside the campaign; the others are shown.

    Raises:
        UserError: nothing could be read, or an option is wrong.
    """
    season = None if campaign is None else read_campaign(campaign)
    stated = None if target is None else Target.from_table(read_toml("targets", target), target)
    read = gather(paths, columns)
    flares = read.flares if stated is None else tuple(replace(each, target=stated) for each in read.flares)
    files = _figure_files(out, flares)
    complaints = list(read.refusals)
    for flare in flares:
        print(describe(flare, season.target if season else None))
        complaints += _compare(flare, season)
    for line in complaints:
        print(f"refused: {line}", file=sys.stderr)
    if not flares:
        raise UserError(f"none of {len(read.refusals)} flares or files could be read")
    for flare, file in zip(flares, files, strict=bool(files)):
        save(flare_figure(flare), file)
    return _SOME_LEFT_OUT if complaints else 0


def _compare(flare: Flare, season: Campaign | None) -> list[str]:
    """Say that a flare is inside a campaign, or return why it is not."""
    if season is None:
        return []
    try:
        reasons = season.outside(flare.rows(season.target, season.flux_unit))
    except UserError as refusal:
        return [str(refusal)]
    if not reasons:
        print(f"  inside campaign {season.name}")
        return []
    where = f"{flare.where}: outside campaign {season.name}"
    if flare.target not in (None, season.target):
        # The campaign's ranges hold for its own target; one in other units is scaled to it before comparing.
        where += f" (as if {season.target.name!r} had flared so)"
    return [f"{where}: {'; '.join(reasons)}"]


def _figure_files(out: Path | None, flares: Sequence[Flare]) -> list[Path]:
    """Name one file a flare; the number keeps names apart that a file system cannot."""
    if out is None:
        return []
    if out.suffix and out.suffix != ".png":
        raise UserError(f"{out}: figures are PNG; give a name in .png, or a folder")
    if out.suffix and len(flares) == 1:
        return [out]
    folder, stem = (out.parent, f"{out.stem}-") if out.suffix else (out, "")
    return [folder / f"{stem}{n:03}-{safe_name(flare.name)}.png" for n, flare in enumerate(flares, 1)]


def flare_figure(flare: Flare) -> Figure:
    """Draw a flare as it was measured, one panel a kind.

    Args:
        flare: in measured units.

    Returns:
        A figure with minutes after t_ref along its panels.
    """
    from matplotlib.figure import Figure

    codes = np.unique(flare.kind)
    figure = Figure(figsize=(7.0, 1.2 + 1.5 * codes.size), layout="constrained")
    panels = figure.subplots(codes.size, sharex=True, squeeze=False)[:, 0]
    for panel, code in zip(panels, codes, strict=True):
        mine = flare.kind == code
        panel.errorbar(
            flare.seconds[mine] / 60.0, flare.value[mine], flare.error[mine],
            fmt="o", ms=3, lw=1, color=COLOURS["data"],
        )  # fmt: skip
        unit = unit_of(KINDS[code], flare)
        panel.set_ylabel(f"{KINDS[code]} ({unit})" if unit else KINDS[code])
        if KINDS[code] != "flux":
            panel.axhline(0.0, color=COLOURS["data"], lw=0.5, alpha=0.4)
    panels[0].set_title(flare.name)
    panels[-1].set_xlabel(f"minutes after t_ref ({flare.t_ref})")
    return figure
