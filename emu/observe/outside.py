"""Compare one flare with a season: could these rows have been drawn from it?"""

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from emu.observe.rows import KINDS
from emu.observe.schedule import MIN_ROWS, Season
from emu.observe.stream import Stream

__all__ = ["outside"]

# Times pass through other units and tables through decimals: allow for rounding, and no more.
_ROUNDING = 1e-6
# Schedules are drawn about the middle of their rows; a hundredth of the span is far less than an interval.
_OFF_CENTRE = 0.01


def outside(
    season: Season, minutes: NDArray[np.float64], kind: NDArray[np.int8], error: NDArray[np.float64]
) -> tuple[str, ...]:
    """Say in what respect rows could not have come from a season.

    Args:
        season: what schedules are drawn from.
        minutes: (R,) times after t_ref.
        kind: (R,) index in KINDS.
        error: (R,) in the units of the season's streams.

    Returns:
        One line a reason; empty where the rows are inside.
    """
    return (*_whole(season, minutes, kind), *_streams(season, minutes, kind, error))


def _whole(season: Season, minutes: NDArray[np.float64], kind: NDArray[np.int8]) -> Iterator[str]:
    if minutes.size < MIN_ROWS:
        yield f"{minutes.size} rows; at least {MIN_ROWS} are needed"
        return
    span = float(np.ptp(minutes))
    # The first and last row can miss the ends of the window by one interval each.
    low, high = season.window[0] - 2.0 * season.edge, season.window[1]
    if not low - _ROUNDING <= span <= high + _ROUNDING:
        yield f"its rows span {span:.1f} minutes; the campaign's {low:.1f} to {high:.1f}"
    middle = 0.5 * float(minutes.min() + minutes.max())
    if abs(middle) > _OFF_CENTRE * span:
        yield (
            f"t_ref is {abs(middle):.1f} minutes from the middle of its rows, where the campaign has it; "
            "leave t_ref out"
        )
    elif np.abs(minutes).max() > 0.5 * high * (1.0 + _ROUNDING):
        yield f"a row is {np.abs(minutes).max():.1f} minutes from t_ref; at most {0.5 * high:.1f} in the campaign"
    known = {name for stream in season.streams for name in stream.kinds}
    for name in dict.fromkeys(KINDS[code] for code in kind):
        if name not in known:
            yield f"it has {name} rows; the campaign measures {', '.join(sorted(known))}"


def _streams(
    season: Season, minutes: NDArray[np.float64], kind: NDArray[np.int8], error: NDArray[np.float64]
) -> Iterator[str]:
    for stream in season.streams:
        codes = [KINDS.index(name) for name in stream.kinds]
        mine = np.isin(kind, codes)
        label = ", ".join(stream.kinds)
        if not mine.any():
            if stream.share == 1.0:
                yield f"it has no {label} rows; the campaign always measures them"
            continue
        yield from (f"{label}: {reason}" for reason in _cadence(season, stream, np.sort(minutes[mine])))
        if not stream.alternate and not _together(minutes, kind, codes):
            yield f"{label}: not at the same times, as in the campaign"
        low, high = stream.error
        least, most = float(error[mine].min()), float(error[mine].max())
        if least < low * (1.0 - _ROUNDING) or most > high * (1.0 + _ROUNDING):
            yield f"{label}: errors {least:.3g} to {most:.3g}; the campaign's are {low:.3g} to {high:.3g}"


def _together(minutes: NDArray[np.float64], kind: NDArray[np.int8], codes: list[int]) -> bool:
    times = [np.sort(minutes[kind == code]) for code in codes]
    return all(
        other.size == times[0].size and np.allclose(other, times[0], rtol=0.0, atol=_ROUNDING)
        for other in times[1:]
    )


def _cadence(season: Season, stream: Stream, minutes: NDArray[np.float64]) -> Iterator[str]:
    exposures = minutes if stream.alternate else _distinct(minutes)
    most = stream.exposures(season.window[1])
    if exposures.size > most:
        yield f"{exposures.size} exposures; the campaign has at most {most}"
    if exposures.size < 2:
        return
    interval = np.diff(exposures)
    if float(np.median(interval)) < stream.cadence[0] - _ROUNDING:
        yield (
            f"one exposure in {np.median(interval):.2f} minutes; the campaign has at most one in "
            f"{stream.cadence[0]:.2f}"
        )
    longest = _longest_interval(season, stream)
    if interval.max() > longest + _ROUNDING:
        yield f"nothing for {interval.max():.1f} minutes; the campaign's longest gap is {longest:.1f}"


def _distinct(minutes: NDArray[np.float64]) -> NDArray[np.float64]:
    first = np.diff(minutes, prepend=-np.inf) > _ROUNDING
    return np.extract(first, minutes)


def _longest_interval(season: Season, stream: Stream) -> float:
    # Each gap can be met by an unfinished interval on either side; neighbouring gaps share one.
    if season.gaps is None:
        return stream.cadence[1]
    return season.gaps.longest + (season.gaps.count[1] + 1) * stream.cadence[1]
