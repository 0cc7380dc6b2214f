"""Figures of one flare against its posterior: over time, in the polarisation plane, and on the sky."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from emu.families.density import Array
from emu.observe.rows import KINDS, Rows
from emu.report.predictive import Prediction, spread
from emu.report.style import COLOURS, TIMES, Scale

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["data_figure", "plane_figure", "planes"]

_LEVELS = (0.025, 0.16, 0.5, 0.84, 0.975)
_LINES = 40  # draws shown as single lines in a plane
_SAME = 1e-6  # relative difference of times that counts as simultaneous
_PLANES = (("q", "u"), ("Q", "U"), ("east", "north"))


def planes(rows: Rows) -> tuple[tuple[str, str], ...]:
    """Say which pairs of kinds a flare measures, and so which planes can be drawn."""
    present = {KINDS[code] for code in np.unique(rows.kind)}
    return tuple(pair for pair in _PLANES if set(pair) <= present)


def data_figure(rows: Rows, prediction: Prediction, scale: Scale, title: str) -> Figure:
    """Draw every measured kind over time with bands of the posterior.

    Args:
        rows: the measurements in geometric units.
        prediction: curves of the draws, with every measured kind.
        scale: units of the axes.
        title: heading.

    Returns:
        One panel a kind: bands that hold the curve with 68 and 95 %, dashed lines that hold 95 % of new
        measurements of typical error.
    """
    from matplotlib.figure import Figure

    kinds = [kind for kind in KINDS if kind in prediction.curves]
    figure = Figure(figsize=(7.5, 1.2 + 1.75 * len(kinds)), layout="constrained")
    panels = figure.subplots(len(kinds), 1, sharex=True, squeeze=False)[:, 0]
    for panel, kind in zip(panels, kinds, strict=True):
        _bands(panel, kind, prediction, scale)
        here = rows.kind == KINDS.index(kind)
        factor = scale.factor(kind)
        panel.errorbar(
            rows.time[here] * scale.minutes,
            rows.value[here] * factor,
            rows.error[here] * factor,
            **_MARKS,
            label="measured",
        )
        panel.set_ylabel(scale.label(kind))
        panel.margins(x=0.01)
    figure.align_ylabels(panels)
    panels[-1].set_xlabel("minutes from t_ref")
    handles, labels = panels[0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside lower center", ncols=5, fontsize="small", frameon=False)
    figure.suptitle(_heading(title, prediction), fontsize="medium")
    return figure


def plane_figure(pair: tuple[str, str], rows: Rows, prediction: Prediction, scale: Scale, title: str) -> Figure:
    """Draw the track of a pair of kinds, coloured by time: the polarisation loop or the path on the sky.

    Args:
        pair: ("q", "u"), ("Q", "U") or ("east", "north").
        rows: the measurements in geometric units.
        prediction: curves of the draws, with both kinds.
        scale: units of the axes.
        title: heading.

    Returns:
        Thin lines for single draws, a line coloured by time for the likeliest (or most central), and the data:
        circles where both were measured together, squares where one is interpolated to the other's time.
    """
    from matplotlib.figure import Figure

    figure = Figure(figsize=(6.2, 5.6), layout="constrained")
    axes = figure.subplots()
    x, y = (prediction.curves[kind] * scale.factor(kind) for kind in pair)
    chosen = np.unique(np.linspace(0, len(x) - 1, _LINES).astype(int))
    axes.plot(x[chosen].T, y[chosen].T, color=COLOURS["narrow"], linewidth=0.6, alpha=0.45, zorder=1)
    axes.plot([], [], color=COLOURS["narrow"], linewidth=0.8, label="single draws")
    coloured = _coloured_line(axes, *_track(pair, prediction, scale), prediction.times * scale.minutes)
    _points(axes, _pairs(rows, pair), scale, pair, coloured)
    axes.plot(
        0.0,
        0.0,
        marker="+",
        markersize=11,
        color="black",
        linestyle="none",
        zorder=2,
        label="the hole" if pair[0] == "east" else "origin",
    )
    axes.set(xlabel=scale.label(pair[0]), ylabel=scale.label(pair[1]))
    axes.set_aspect("equal", adjustable="datalim")
    if pair[0] == "east":
        axes.invert_xaxis()  # east is to the left on the sky
    figure.colorbar(coloured, ax=axes, label="minutes from t_ref", shrink=0.9)
    figure.legend(loc="outside lower center", ncols=5, fontsize="small", frameon=False)
    figure.suptitle(_heading(title, prediction), fontsize="medium")
    return figure


_MARKS: dict[str, Any] = {
    "fmt": "o",
    "color": COLOURS["data"],
    "markersize": 3.5,
    "linewidth": 0.9,
    "zorder": 3,
}


def _heading(title: str, prediction: Prediction) -> str:
    """Add to a heading how many draws could not be shown."""
    return f"{title} ({prediction.dropped} draws left out)" if prediction.dropped else title


def _bands(panel: Axes, kind: str, prediction: Prediction, scale: Scale) -> None:
    """Draw the bands of one kind."""
    minutes = prediction.times * scale.minutes
    curves = prediction.curves[kind] * scale.factor(kind)
    levels = spread(curves, _LEVELS)
    new = spread(curves, (_LEVELS[0], _LEVELS[-1]), prediction.deviation[kind] * scale.factor(kind))
    panel.fill_between(minutes, levels[0], levels[4], color=COLOURS["wide"], linewidth=0, label="curve, 95 %")
    panel.fill_between(minutes, levels[1], levels[3], color=COLOURS["narrow"], linewidth=0, label="curve, 68 %")
    if kind in prediction.likeliest:
        best = prediction.likeliest[kind] * scale.factor(kind)
        panel.plot(minutes, best, color="black", linewidth=0.9, linestyle=":", label="likeliest draw")
    panel.plot(minutes, levels[2], color=COLOURS["model"], linewidth=1.2)
    for number, line in enumerate(new):
        label = "new measurement, 95 %" if number == 0 else None
        panel.plot(minutes, line, color=COLOURS["model"], linewidth=0.8, linestyle="--", label=label)


def _track(pair: tuple[str, str], prediction: Prediction, scale: Scale) -> tuple[str, Array, Array]:
    """Choose the track that stands for all: the likeliest draw, else the one closest to the median track."""
    if prediction.likeliest:
        x, y = (prediction.likeliest[kind] * scale.factor(kind) for kind in pair)
        return "likeliest draw", x, y
    x, y = (prediction.curves[kind] * scale.factor(kind) for kind in pair)
    distance = (x - np.median(x, axis=0)) ** 2 + (y - np.median(y, axis=0)) ** 2
    central = int(np.argmin(distance.mean(axis=1)))
    return "most central draw", x[central], y[central]


def _coloured_line(axes: Axes, label: str, x: Array, y: Array, minutes: Array) -> Any:
    """Draw a track coloured by time; return it for the colour bar."""
    from matplotlib.collections import LineCollection

    points = np.stack([x, y], axis=1)
    segments = np.stack([points[:-1], points[1:]], axis=1)
    axes.add_collection(LineCollection(list(segments), colors="black", linewidths=4.2, zorder=2))
    line = LineCollection(list(segments), cmap=TIMES, linewidths=2.8, zorder=2.1)
    line.set_array(0.5 * (minutes[:-1] + minutes[1:]))
    axes.add_collection(line)
    axes.plot([], [], color="0.45", linewidth=2.8, label=label)
    return line


def _points(axes: Axes, pairs: Array, scale: Scale, pair: tuple[str, str], coloured: Any) -> None:
    """Draw measured pairs in the colours of their times."""
    fx, fy = scale.factor(pair[0]), scale.factor(pair[1])
    time, x, dx, y, dy, both = pairs.T
    axes.errorbar(x * fx, y * fy, dy * fy, dx * fx, fmt="none", color="0.35", linewidth=0.7, zorder=3)
    for together, marker, label in ((True, "o", "measured together"), (False, "s", "one interpolated")):
        here = (both > 0) == together
        if here.any():
            axes.scatter(
                x[here] * fx,
                y[here] * fy,
                c=time[here] * scale.minutes,
                marker=marker,
                s=26,
                cmap=coloured.cmap,
                norm=coloured.norm,
                edgecolors="black",
                linewidths=0.8,
                zorder=4,
                label=label,
            )


def _pairs(rows: Rows, pair: Sequence[str]) -> Array:
    """Pair the rows of two kinds.

    Returns:
        (M, 6) columns time, x, its error, y, its error, and 1 where both were measured at that time, 0
        where one was interpolated linearly between its neighbours (none is extrapolated).
    """
    first, second = (_sorted(rows, kind) for kind in pair)
    found = [_at(first, second), _at(second, first)[:, [0, 3, 4, 1, 2, 5]]]
    found[1] = found[1][found[1][:, 5] == 0.0]  # simultaneous pairs are in the first part already
    return np.concatenate(found)


def _sorted(rows: Rows, kind: str) -> Array:
    """Return time, value and error (n, 3) of the rows of a kind in order of time."""
    here = rows.kind == KINDS.index(kind)
    table = np.stack([rows.time[here], rows.value[here], rows.error[here]], axis=1)
    return np.asarray(table[np.argsort(table[:, 0], kind="stable")])


def _at(own: Array, other: Array) -> Array:
    """Read `other` at the times of `own`, as `_pairs` returns it."""
    inside = (own[:, 0] >= other[0, 0]) & (own[:, 0] <= other[-1, 0])
    own = own[inside]
    value, error = (np.interp(own[:, 0], other[:, 0], other[:, k]) for k in (1, 2))
    gap = np.abs(own[:, :1] - other[None, :, 0]).min(axis=1, initial=np.inf)
    together = gap <= _SAME * (1.0 + np.abs(own[:, 0]))
    return np.column_stack([own, value, error, together.astype(float)])
