"""Draw the times, kinds and errors of many flares at once, in minutes and measured units.

Nothing here can look at a flare's parameters or values: a random generator is all that comes in.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.observe.rows import KINDS
from emu.observe.stream import Gaps, Stream

__all__ = ["MIN_ROWS", "Season", "Drawn", "draw"]

MIN_ROWS = 3
"""Fewest rows that make a flare."""


@dataclass(frozen=True)
class Season:
    """Say when and what is measured.

    Args:
        window: shortest and longest time of observing, minutes; each flare's is drawn uniformly.
        streams: what is measured; at least one of them in every flare.
        gaps: interruptions, None without any.
    """

    window: tuple[float, float]
    streams: tuple[Stream, ...]
    gaps: Gaps | None

    @property
    def edge(self) -> float:
        """Minutes at either end of a window that no gap touches, so that rows mark both ends."""
        return min(stream.cadence[1] for stream in self.streams if stream.share == 1.0)

    @property
    def max_rows(self) -> int:
        """The largest number of rows a flare can have."""
        return sum(stream.width(self.window[1]) for stream in self.streams)


@dataclass(frozen=True)
class Drawn:
    """Hold the schedules of n flares, all columns (n,R).

    Args:
        time: minutes.
        kind: int8 index in KINDS.
        error: 1-sigma, in the unit of the row's stream.
        keep: True where the row belongs to the flare.
    """

    time: NDArray[np.float64]
    kind: NDArray[np.int8]
    error: NDArray[np.float64]
    keep: NDArray[np.bool_]


def draw(season: Season, n: int, rng: np.random.Generator) -> Drawn:
    """Draw the schedules of n flares.

    A gap is put off where it would leave fewer than MIN_ROWS rows, or none of a stream.

    Args:
        season: what to draw from.
        n: number of flares.
        rng: source of randomness; the same number of draws whatever comes out.

    Returns:
        (n, season.max_rows) columns time (minutes after the middle between first and last row), kind,
        error and keep, the kept rows first and in order of time; the others have 0, 0, 1 and False.
    """
    window = rng.uniform(*season.window, size=(n, 1))
    parts = [_draw_stream(stream, window, season.window[1], rng) for stream in season.streams]
    if season.gaps is not None:
        parts = _interrupt(parts, _draw_gaps(season.gaps, window, season.edge, rng))
    return _centre(_in_order(_join(parts)))


def _draw_stream(
    stream: Stream, window: NDArray[np.float64], longest: float, rng: np.random.Generator
) -> Drawn:
    n, steps, kinds = window.shape[0], stream.exposures(longest), len(stream.kinds)
    cadence = rng.uniform(*stream.cadence, size=(n, 1))
    wobble = 1.0 + stream.unsteady * rng.uniform(-1.0, 1.0, size=(n, steps))
    interval = np.clip(cadence * wobble, *stream.cadence)
    interval[:, 0] *= rng.uniform(size=n)  # the first exposure starts anywhere within its interval
    time = np.cumsum(interval, axis=1)
    keep = (time <= window) & (rng.uniform(size=(n, 1)) < stream.share)
    codes = np.array([KINDS.index(name) for name in stream.kinds], dtype=np.int8)
    if stream.alternate:
        first = rng.integers(kinds, size=(n, 1))
        kind = codes[(first + np.arange(steps)) % kinds]
    else:
        kind = np.broadcast_to(np.tile(codes, steps), (n, steps * kinds))
        time, keep = np.repeat(time, kinds, axis=1), np.repeat(keep, kinds, axis=1)
    return Drawn(time, kind, _draw_errors(stream, time.shape, rng), keep)


def _draw_errors(stream: Stream, shape: tuple[int, ...], rng: np.random.Generator) -> NDArray[np.float64]:
    low, high = np.log(stream.error)
    level = rng.uniform(low, high, size=(shape[0], 1))
    scattered = level + stream.error_scatter * rng.standard_normal(shape)
    # exp(log(x)) may miss x by a rounding error, and an error must never leave its range.
    return np.clip(np.exp(scattered), *stream.error)


def _draw_gaps(
    gaps: Gaps, window: NDArray[np.float64], edge: float, rng: np.random.Generator
) -> NDArray[np.float64]:
    """Return (n, most, 2) start and end of each gap, minutes; a gap that is absent has both at infinity."""
    n, most = window.shape[0], gaps.count[1]
    length = rng.uniform(*gaps.length, size=(n, most))
    start = edge + rng.uniform(size=(n, most)) * (window - 2.0 * edge - length)
    count = rng.integers(gaps.count[0], most + 1, size=(n, 1))
    absent = np.arange(most) >= count
    return np.where(absent[..., None], np.inf, np.stack([start, start + length], axis=-1))


def _interrupt(parts: Sequence[Drawn], gaps: NDArray[np.float64]) -> list[Drawn]:
    left = []
    for part in parts:
        keep = part.keep.copy()
        for start, end in np.moveaxis(gaps, (1, 2), (0, 1)):
            keep &= (part.time < start[:, None]) | (part.time > end[:, None])
        left.append(keep)
    emptied = [part.keep.any(axis=1) & ~keep.any(axis=1) for part, keep in zip(parts, left, strict=True)]
    few = sum(keep.sum(axis=1) for keep in left) < MIN_ROWS
    put_off = (few | np.any(emptied, axis=0))[:, None]
    return [
        Drawn(part.time, part.kind, part.error, np.where(put_off, part.keep, keep))
        for part, keep in zip(parts, left, strict=True)
    ]


def _join(parts: Sequence[Drawn]) -> Drawn:
    return Drawn(
        np.concatenate([part.time for part in parts], axis=1),
        np.concatenate([part.kind for part in parts], axis=1),
        np.concatenate([part.error for part in parts], axis=1),
        np.concatenate([part.keep for part in parts], axis=1),
    )


def _in_order(drawn: Drawn) -> Drawn:
    order = np.argsort(np.where(drawn.keep, drawn.time, np.inf), axis=1, kind="stable")
    keep = np.take_along_axis(drawn.keep, order, axis=1)
    time, kind, error = (
        np.take_along_axis(column, order, axis=1) for column in (drawn.time, drawn.kind, drawn.error)
    )
    return Drawn(
        np.where(keep, time, 0.0), np.where(keep, kind, 0).astype(np.int8), np.where(keep, error, 1.0), keep
    )


def _centre(drawn: Drawn) -> Drawn:
    # Kept rows come first, at positive times; all others are 0, so that the maximum is the last row.
    middle = 0.5 * (drawn.time[:, :1] + drawn.time.max(axis=1, keepdims=True))
    return Drawn(np.where(drawn.keep, drawn.time - middle, 0.0), drawn.kind, drawn.error, drawn.keep)
