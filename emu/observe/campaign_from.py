"""Write the campaign that matches one's own flares."""

import json
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from emu.errors import UserError
from emu.observe.cadence import outward
from emu.observe.campaign import parse_campaign
from emu.observe.record import Flare
from emu.observe.rows import KINDS, Rows
from emu.observe.season_from import season_from
from emu.units import Target

__all__ = ["campaign_from"]

_POSITIONS = [KINDS.index(kind) for kind in ("east", "north")]
_FRACTIONS = [KINDS.index(kind) for kind in ("q", "u")]


def campaign_from(flares: Sequence[Flare], target: Target, name: str = "mine") -> str:
    """Describe flares as a campaign.

    Args:
        flares: at least one; the more, the more like the season are the ranges.
        target: in whose minutes and microarcseconds the campaign is written; flares whose tables name
            another one are scaled to it.
        name: of the campaign.

    Returns:
        TOML text. Every flare lies inside the campaign.

    Raises:
        UserError: there are no flares, or they do not fit one campaign.
    """
    if not flares:
        raise UserError("no flares to make a campaign from")
    unit = next((flare.flux_unit for flare in flares if flare.flux_unit), "")
    rows = [flare.rows(target, unit) for flare in flares]
    season = season_from([_measured(each, target) for each in rows])
    lines = [
        f"# Made from {len(flares)} measured flares: minutes, microarcseconds and the flux unit throughout.",
        "# Widen the ranges to what the season may still bring.",
        *_lines(
            {
                "name": name,
                "description": f"A season like that of {len(flares)} measured flares.",
                "flux_unit": unit,
                "window": season.window,
            }
        ),
        *_section("[target]", target.to_table()),
    ]
    for stream in season.streams:
        lines += _section("[[stream]]", stream.to_table())
    if season.gaps is not None:
        lines += _section("[gaps]", season.gaps.to_table())
    text = "\n".join([*lines, *_jitter(rows)]) + "\n"
    _check(text, flares, rows)
    return text


def _measured(rows: Rows, target: Target) -> Rows:
    """Return rows in minutes and microarcseconds."""
    scale = np.where(np.isin(rows.kind, _POSITIONS), target.length_unit, 1.0)
    return replace(rows, time=rows.time * target.time_unit / 60.0, error=rows.error * scale)


def _jitter(rows: Sequence[Rows]) -> list[str]:
    errors = np.concatenate([each.error[np.isin(each.kind, _FRACTIONS)] for each in rows])
    if not errors.size:
        return []
    reason = "# From far below the best error, where it cannot be noticed, to the worst."
    span = outward(0.1 * float(errors.min()), float(errors.max()))
    return ["", reason, "[nuisance.jitter]", *_lines({"range": span})]


def _section(header: str, table: dict[str, Any]) -> list[str]:
    return ["", header, *_lines(table)]


def _lines(table: dict[str, Any]) -> list[str]:
    # JSON writes texts, numbers, booleans and lists as TOML does.
    return [f"{key} = {json.dumps(value, ensure_ascii=False)}" for key, value in table.items()]


def _check(text: str, flares: Sequence[Flare], rows: Sequence[Rows]) -> None:
    made = parse_campaign(text, "the campaign of these flares")
    for flare, each in zip(flares, rows, strict=True):
        for reason in made.outside(each):
            said = f"{flare.where}: fits no campaign with the others ({reason})"
            raise UserError(f"{said}; correct it or leave it out")
