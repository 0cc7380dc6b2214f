"""Find the season that a set of flares could have been drawn from."""

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from emu.errors import UserError
from emu.observe.cadence import Cadence, measure_cadence, outward
from emu.observe.rows import KINDS, Rows
from emu.observe.schedule import MIN_ROWS, Season
from emu.observe.stream import Gaps, Stream

__all__ = ["season_from"]

_PAIRS = (("q", "u"), ("Q", "U"), ("east", "north"))
_SAME = 1e-6
# A pair counts as measured in turn where so many neighbouring exposures differ in kind.
_IN_TURN = 0.8


def season_from(flares: Sequence[Rows]) -> Season:
    """Describe flares by windows, streams and gaps.

    Args:
        flares: rows in minutes and in measured units.

    Raises:
        UserError: no kind of row is in every flare, or a kind is never measured twice.
    """
    found = [_stream(kinds, flares) for kinds in _kinds_by_stream(flares)]
    streams = tuple(stream for stream, _ in found)
    always = [stream.cadence[1] for stream in streams if stream.share == 1.0]
    if not always:
        raise UserError("no kind of row is in every flare; leave out the flares that lack the usual ones")
    edge = min(always)
    spans = [float(np.ptp(rows.time)) for rows in flares]
    # On average a window is one interval longer than its rows; it must hold some of every stream.
    shortest = max(min(spans) + edge, MIN_ROWS * edge, *(stream.cadence[1] for stream in streams))
    longest = max(outward(shortest, max(max(spans) + edge, shortest), digits=3)[1], shortest)
    return Season((shortest, longest), streams, _gaps([cadence for _, cadence in found], shortest - 2.0 * edge))


def _kinds_by_stream(flares: Sequence[Rows]) -> list[tuple[str, ...]]:
    """Put a pair of kinds in one stream where they come together or in turn, else each in its own."""
    present = {KINDS[code] for rows in flares for code in np.unique(rows.kind)}
    streams: list[tuple[str, ...]] = [("flux",)] if "flux" in present else []
    for pair in _PAIRS:
        there = tuple(kind for kind in pair if kind in present)
        joined = len(there) == 2 and (_together(there, flares) or _in_turn(there, flares))
        streams += [there] if joined else [(kind,) for kind in there]
    return streams


def _codes(kinds: Sequence[str]) -> list[int]:
    return [KINDS.index(kind) for kind in kinds]


def _together(kinds: Sequence[str], flares: Sequence[Rows]) -> bool:
    for rows in flares:
        one, other = (np.sort(rows.time[rows.kind == code]) for code in _codes(kinds))
        if one.size != other.size or not np.allclose(one, other, rtol=0.0, atol=_SAME):
            return False
    return True


def _in_turn(kinds: Sequence[str], flares: Sequence[Rows]) -> bool:
    changes = []
    for rows in flares:
        mine = np.isin(rows.kind, _codes(kinds))
        order = np.argsort(rows.time[mine], kind="stable")
        if np.any(np.diff(rows.time[mine][order]) < _SAME):
            return False
        changes.append(np.diff(rows.kind[mine][order]) != 0)
    every = np.concatenate(changes)
    return every.size > 0 and float(np.mean(every)) >= _IN_TURN


def _stream(kinds: tuple[str, ...], flares: Sequence[Rows]) -> tuple[Stream, Cadence]:
    masks = [np.isin(rows.kind, _codes(kinds)) for rows in flares]
    mine = [(rows.time[mask], rows.error[mask]) for rows, mask in zip(flares, masks, strict=True) if mask.any()]
    cadence = measure_cadence([_distinct(time) for time, _ in mine])
    if cadence is None:
        raise UserError(f"{', '.join(kinds)}: measured once a flare at most, which gives no cadence; remove it")
    scatter = float(np.median([np.std(np.log(error)) for _, error in mine]))
    errors = np.concatenate([error for _, error in mine])
    stream = Stream(
        kinds=kinds,
        alternate=len(kinds) > 1 and not _together(kinds, flares),
        cadence=(cadence.low, cadence.high),
        unsteady=cadence.unsteady,
        error=outward(float(errors.min()), float(errors.max())),
        error_scatter=round(scatter, 2),
        share=len(mine) / len(flares),
    )
    return stream, cadence


def _distinct(time: NDArray[np.float64]) -> NDArray[np.float64]:
    ordered = np.sort(time)
    return np.extract(np.diff(ordered, prepend=-np.inf) > _SAME, ordered)


def _gaps(cadences: Sequence[Cadence], room: float) -> Gaps | None:
    """Describe the gaps; one longer than the shortest window has room for is taken as several that touch."""
    every = np.concatenate([cadence.gaps for cadence in cadences])
    if not every.size:
        return None
    least, most = outward(float(every.min()), float(every.max()))
    longest = min(most, room)
    count = max(math.ceil(most / longest), *(cadence.most_gaps for cadence in cadences))
    return Gaps((0, count), (min(least, longest), longest))
