"""A campaign: what an observing season gives, from which schedules are drawn and flares are judged."""

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from emu.configs import check_keys, config_text
from emu.errors import UserError
from emu.observe.nuisance import Nuisance, nuisances
from emu.observe.outside import outside
from emu.observe.ranges import number_range
from emu.observe.rows import KINDS, RowBatch, Rows
from emu.observe.schedule import MIN_ROWS, Season, draw
from emu.observe.stream import Gaps, Stream
from emu.units import Target

__all__ = ["Campaign", "campaign", "parse_campaign"]


@dataclass(frozen=True)
class Campaign:
    """Hold one season's way of observing one target.

    Args:
        name: as in the TOML.
        description: one sentence for people.
        target: converts minutes and microarcseconds to geometric units.
        flux_unit: unit of flux, Q and U rows and of their errors, as astropy.units reads it.
        season: windows, streams and gaps, in minutes.
        nuisances: instrument effects whose parameters are inferred with the model's.
        text: the TOML it was read from.
    """

    name: str
    description: str
    target: Target
    flux_unit: str
    season: Season
    nuisances: tuple[Nuisance, ...]
    text: str

    @property
    def window(self) -> tuple[float, float]:
        """Shortest and longest window, minutes."""
        return self.season.window

    @property
    def streams(self) -> tuple[Stream, ...]:
        """What is measured."""
        return self.season.streams

    @property
    def max_rows(self) -> int:
        """The largest number of rows a flare can have."""
        return self.season.max_rows

    @property
    def half_span(self) -> float:
        """The largest |time| of a row, GM/c^3."""
        return 0.5 * self.window[1] * self._per_minute

    @property
    def _per_minute(self) -> float:
        return 60.0 / self.target.time_unit

    def draw(self, n: int, rng: np.random.Generator) -> RowBatch:
        """Draw times, kinds and errors of n flares; parameters have no way in.

        Args:
            n: number of flares.
            rng: source of randomness.

        Returns:
            A batch of max_rows columns in the geometric units of the target, values 0, each flare's rows
            first and in order of time, counted from the middle between its first and last row.
        """
        drawn = draw(self.season, n, rng)
        error = drawn.error / self._per_unit[drawn.kind]
        return RowBatch(
            time=drawn.time * self._per_minute,
            kind=drawn.kind,
            value=np.zeros_like(drawn.time),
            error=np.where(drawn.keep, error, 1.0),
            mask=drawn.keep,
        )

    @property
    def _per_unit(self) -> NDArray[np.float64]:
        """Measured units in one internal unit, by kind code."""
        length = self.target.length_unit
        return np.array([length if kind in ("east", "north") else 1.0 for kind in KINDS])

    def outside(self, rows: Rows) -> tuple[str, ...]:
        """Say why rows could not have come from this campaign.

        Args:
            rows: one flare in geometric units.

        Returns:
            One line a reason; empty where the rows are inside in every respect.
        """
        return outside(
            self.season, rows.time / self._per_minute, rows.kind, rows.error * self._per_unit[rows.kind]
        )


def campaign(name: str) -> Campaign:
    """Read a campaign.

    Args:
        name: a shipped campaign, or the path of a `.toml` file.

    Raises:
        UserError: it cannot be found or read, or makes no sense.
    """
    return parse_campaign(*config_text("campaigns", name))


def parse_campaign(text: str, where: str) -> Campaign:
    """Build a campaign from its TOML text.

    Args:
        text: TOML with name, description, flux_unit, window, [target], [[stream]] and optionally [gaps]
            and [nuisance].
        where: name of the file, for error messages.

    Raises:
        UserError: one line that names file, table and cure.
    """
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as problem:
        raise UserError(f"{where}: not valid TOML: {problem}") from problem
    check_keys(
        table, ("name", "description", "flux_unit", "window", "target", "stream"), ("gaps", "nuisance"), where
    )
    for key in ("name", "description", "flux_unit"):
        if not isinstance(table[key], str):
            raise UserError(f"{where}: {key} is {table[key]!r}; give a text")
    return Campaign(
        name=table["name"],
        description=table["description"],
        target=Target.from_table(_table(table, "target", where), f"{where}: [target]"),
        flux_unit=table["flux_unit"],
        season=_season(table, where),
        nuisances=nuisances(_table(table, "nuisance", where), f"{where}: nuisance"),
        text=text,
    )


def _table(table: Mapping[str, Any], key: str, where: str) -> Mapping[str, Any]:
    entry = table.get(key, {})
    if not isinstance(entry, dict):
        raise UserError(f"{where}: {key} is {entry!r}; write a table [{key}]")
    return entry


def _season(table: Mapping[str, Any], where: str) -> Season:
    entries = table["stream"]
    if not isinstance(entries, list) or not entries or not all(isinstance(entry, dict) for entry in entries):
        raise UserError(f"{where}: stream must be one or more tables [[stream]]")
    season = Season(
        window=number_range(table, "window", where),
        streams=tuple(
            Stream.from_table(entry, f"{where}: stream {place}") for place, entry in enumerate(entries, 1)
        ),
        gaps=Gaps.from_table(_table(table, "gaps", where), f"{where}: [gaps]") if "gaps" in table else None,
    )
    _check_season(season, where)
    return season


def _check_season(season: Season, where: str) -> None:
    kinds = [kind for stream in season.streams for kind in stream.kinds]
    always = [stream for stream in season.streams if stream.share == 1.0]
    shortest = season.window[0]
    if len(set(kinds)) != len(kinds):
        raise UserError(f"{where}: a kind stands in two streams; give each kind one stream")
    if not always:
        raise UserError(f"{where}: no stream is in every flare; give one share = 1")
    slowest = max(stream.cadence[1] for stream in season.streams)
    if shortest < MIN_ROWS * season.edge or shortest < slowest:
        least = max(MIN_ROWS * season.edge, slowest)
        raise UserError(f"{where}: window {shortest} minutes holds too few rows; begin at {least} or more")
    if season.gaps is not None and season.gaps.length[1] > shortest - 2.0 * season.edge:
        most = shortest - 2.0 * season.edge
        raise UserError(f"{where}: [gaps]: a gap does not fit in the shortest window; length up to {most}")
