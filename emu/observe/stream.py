"""The parts of a campaign's season: streams of measurements at a cadence, and gaps in them."""

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

from emu.configs import check_keys, number
from emu.errors import UserError
from emu.observe.ranges import count_range, number_range
from emu.observe.rows import KINDS

__all__ = ["Stream", "Gaps"]


@dataclass(frozen=True)
class Stream:
    """Say how some kinds are measured: how often, how well, and in how many flares.

    Args:
        kinds: kinds of row, from KINDS.
        alternate: True where each exposure gives one of the kinds, in turn; False where it gives all.
        cadence: shortest and longest time between exposures, minutes. Each flare has a cadence of its
            own, drawn uniformly.
        unsteady: relative amplitude by which a single interval departs from its flare's cadence.
        error: smallest and largest 1-sigma error: in the flux unit, as a fraction (q, u) or in
            microarcseconds (east, north). Each flare has a level of its own, drawn log-uniformly.
        error_scatter: standard deviation of ln(error / level) from row to row; errors stay in range.
        share: part of the flares that have this stream.
    """

    kinds: tuple[str, ...]
    alternate: bool
    cadence: tuple[float, float]
    unsteady: float
    error: tuple[float, float]
    error_scatter: float
    share: float

    def exposures(self, window: float) -> int:
        """Return the largest number of exposures in a window of so many minutes."""
        # The tiny excess counts the exposure that falls on the window's very end.
        return math.floor(window / self.cadence[0] * (1.0 + 1e-12)) + 1

    def width(self, window: float) -> int:
        """Return the largest number of rows in a window of so many minutes."""
        return self.exposures(window) * (1 if self.alternate else len(self.kinds))

    @classmethod
    def from_table(cls, table: Mapping[str, Any], where: str) -> "Stream":
        """Build a stream from a parsed TOML table.

        Args:
            table: keys kinds, cadence, error; optional alternate, unsteady, error_scatter, share.
            where: file and table, for error messages.

        Raises:
            UserError: an unknown or missing key, or a value that makes no sense.
        """
        check_keys(
            table, ("kinds", "cadence", "error"), ("alternate", "unsteady", "error_scatter", "share"), where
        )
        filled = {"unsteady": 0.0, "error_scatter": 0.0, "share": 1.0, "alternate": False, **table}
        stream = cls(
            kinds=_kinds(filled["kinds"], where),
            alternate=filled["alternate"],
            cadence=number_range(filled, "cadence", where),
            unsteady=number(filled, "unsteady", where),
            error=number_range(filled, "error", where),
            error_scatter=number(filled, "error_scatter", where),
            share=number(filled, "share", where),
        )
        stream._check(where)
        return stream

    def to_table(self) -> dict[str, Any]:
        """Return the table that `from_table` reads back unchanged."""
        table = asdict(self)
        # Where all kinds come together there is nothing to alternate: the key would only distract.
        return {key: table[key] for key in table if key != "alternate" or self.alternate}

    def _check(self, where: str) -> None:
        complaints = (
            (not isinstance(self.alternate, bool), "alternate must be true or false"),
            (self.alternate is True and len(self.kinds) < 2, "alternate needs at least two kinds"),
            (self.cadence[0] <= 0, "cadence must be positive (minutes)"),
            (not 0 <= self.unsteady < 1, "unsteady must lie in 0 to 1"),
            (self.error[0] <= 0, "error must be positive"),
            (self.error_scatter < 0, "error_scatter must not be negative"),
            (not 0 < self.share <= 1, "share must lie above 0 and up to 1"),
        )
        for wrong, cure in complaints:
            if wrong:
                raise UserError(f"{where}: {cure}")


def _kinds(names: Any, where: str) -> tuple[str, ...]:
    if not isinstance(names, list) or not names or len({str(name) for name in names}) != len(names):
        raise UserError(f"{where}: kinds is {names!r}; give a list of different kinds")
    for name in names:
        if name not in KINDS:
            raise UserError(f"{where}: unknown kind {name!r}; one of {', '.join(KINDS)}")
    return tuple(names)


@dataclass(frozen=True)
class Gaps:
    """Say how often and how long nothing at all is measured.

    Args:
        count: fewest and most gaps a flare.
        length: shortest and longest gap, minutes.
    """

    count: tuple[int, int]
    length: tuple[float, float]

    @property
    def longest(self) -> float:
        """Most minutes that the gaps of one flare can take together."""
        return self.count[1] * self.length[1]

    @classmethod
    def from_table(cls, table: Mapping[str, Any], where: str) -> "Gaps":
        """Build the gaps from a parsed TOML table with the keys count and length.

        Args:
            table: {count: [fewest, most], length: [minutes, minutes]}.
            where: file and table, for error messages.

        Raises:
            UserError: an unknown or missing key, or a value that makes no sense.
        """
        check_keys(table, ("count", "length"), (), where)
        gaps = cls(count_range(table, "count", where), number_range(table, "length", where))
        if gaps.length[0] < 0:
            raise UserError(f"{where}: length must not be negative (minutes)")
        return gaps

    def to_table(self) -> dict[str, Any]:
        """Return the table that `from_table` reads back unchanged."""
        return asdict(self)
