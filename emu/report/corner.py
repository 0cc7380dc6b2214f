"""Every parameter, and every pair of them, of one posterior."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from scipy.ndimage import gaussian_filter

from emu.families.density import Array
from emu.families.parameters import Parameter
from emu.report.intervals import Interval, unwrapped
from emu.report.style import COLOURS, axis_label

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["corner_figure"]

_BINS = 28
_SMOOTH = 1.3  # bins
_EDGE = 0.005  # share of draws beyond each end of an axis
_LABEL = -0.38  # place of a label beside its panel, in panels
_HELD = (0.95, 0.68)


def corner_figure(
    draws: Array, prior: Array, parameters: Sequence[Parameter], intervals: Sequence[Interval], title: str
) -> Figure:
    """Draw the marginals on the diagonal and the pairs below it.

    Args:
        draws: (N, P) draws of the posterior.
        prior: (M, P) draws of the prior.
        parameters: P parameters.
        intervals: P intervals of the draws.
        title: heading.

    Returns:
        Filled regions that hold 95 and 68 % of the draws of a pair; on the diagonal the posterior (filled),
        the prior (dashed line), the 68 % interval (dotted lines), and above it the numbers.
    """
    from matplotlib.figure import Figure

    count = len(parameters)
    draws, prior = draws.copy(), prior.copy()
    for k, parameter in enumerate(parameters):
        if parameter.circular:
            start = parameter.bounds[0]
            prior[:, k] = unwrapped(prior[:, k], draws[:, k], start)
            draws[:, k] = unwrapped(draws[:, k], draws[:, k], start)
    spans = [_span(draws[:, k]) for k in range(count)]
    size = 1.6 + 1.25 * count
    edge = 0.75 / size
    figure = Figure(figsize=(size, size))
    grid = figure.add_gridspec(
        count, count, left=edge, bottom=edge, right=1 - edge / 2, top=1 - edge, wspace=0.1, hspace=0.22
    )
    for row in range(count):
        for column in range(row):
            axes = figure.add_subplot(grid[row, column])
            _pair(axes, draws[:, column], draws[:, row], spans[column], spans[row])
            _ticks(axes, row, column, parameters)
        axes = figure.add_subplot(grid[row, row])
        _marginal(axes, draws[:, row], prior[:, row], spans[row], intervals[row])
        axes.set_title(_numbers(parameters[row], intervals[row]), fontsize=8, loc="left")
        _ticks(axes, row, row, parameters)
    _legend(figure, figure.axes[0], title, 1 - edge / 2)
    return figure


def _legend(figure: Figure, axes: Axes, title: str, corner: float) -> None:
    """Explain the marks in the empty upper right."""
    from matplotlib.patches import Patch

    prior, interval = axes.patches[1], axes.lines[0]
    handles = [Patch(color=COLOURS["wide"]), Patch(color=COLOURS["narrow"]), prior, interval]
    labels = ["holds 95 %", "holds 68 %", "prior", "central 68 %"]
    figure.legend(
        handles,
        labels,
        title=title,
        loc="upper right",
        bbox_to_anchor=(corner, corner),
        fontsize=9,
        frameon=False,
    )


def _span(draws: Array) -> tuple[float, float]:
    """Choose the ends of an axis, a little beyond almost all draws."""
    low, high = (float(x) for x in np.quantile(draws, (_EDGE, 1.0 - _EDGE)))
    room = 0.08 * (high - low) or max(abs(low), 1.0) * 1e-6
    return low - room, high + room


def _marginal(axes: Axes, draws: Array, prior: Array, span: tuple[float, float], interval: Interval) -> None:
    """Draw one marginal beside the prior's."""
    edges = np.linspace(*span, _BINS + 1)
    axes.stairs(
        _heights(draws, edges),
        edges,
        color=COLOURS["wide"],
        edgecolor=COLOURS["model"],
        fill=True,
        linewidth=1.0,
    )
    axes.stairs(_heights(prior, edges), edges, color=COLOURS["prior"], linestyle="--", linewidth=1.0)
    for end in (interval.low68, interval.high68):
        axes.axvline(end, color="black", linestyle=":", linewidth=0.9)
    if not interval.informed:
        box = {"facecolor": "white", "alpha": 0.85, "linewidth": 0, "pad": 0.8}
        axes.text(0.5, 0.04, "not informed", transform=axes.transAxes, fontsize=7, ha="center", bbox=box)
    axes.set_xlim(*span)
    axes.set_ylim(bottom=0.0)


def _heights(values: Array, edges: Array) -> Array:
    """Return the density in every bin; what lies beyond the edges counts as well."""
    return np.asarray(np.histogram(values, edges)[0] / (len(values) * (edges[1] - edges[0])))


def _pair(axes: Axes, x: Array, y: Array, xspan: tuple[float, float], yspan: tuple[float, float]) -> None:
    """Draw the regions that hold 95 and 68 % of the draws of a pair."""
    counts, xedges, yedges = np.histogram2d(x, y, bins=_BINS, range=(xspan, yspan))
    density = gaussian_filter(counts, _SMOOTH, mode="nearest")
    ordered = np.sort(density, axis=None)[::-1]
    held = np.cumsum(ordered) / ordered.sum()
    levels = [float(ordered[np.searchsorted(held, share)]) for share in _HELD]
    if levels[0] < levels[1] < density.max():
        centres = (0.5 * (xedges[:-1] + xedges[1:]), 0.5 * (yedges[:-1] + yedges[1:]))
        colours = [COLOURS["wide"], COLOURS["narrow"]]
        axes.contourf(*centres, density.T, levels=[*levels, density.max()], colors=colours)
        axes.contour(*centres, density.T, levels=levels, colors=COLOURS["model"], linewidths=0.7)
    else:  # all draws in a bin or two: contours would be empty
        axes.plot(x, y, ".", color=COLOURS["model"], markersize=2)
    axes.set(xlim=xspan, ylim=yspan)


def _numbers(parameter: Parameter, interval: Interval) -> str:
    """Write median and 68 % interval with as many digits as the interval warrants."""
    up, down = interval.high68 - interval.median, interval.median - interval.low68
    smallest = max(min(up, down), 1e-12)
    digits = int(np.clip(1 - np.floor(np.log10(smallest)), 0, 6))
    return f"${parameter.symbol} = {interval.median:.{digits}f}^{{+{up:.{digits}f}}}_{{-{down:.{digits}f}}}$"


def _ticks(axes: Axes, row: int, column: int, parameters: Sequence[Parameter]) -> None:
    """Give numbers, few and slanted, and labels to the outer axes; ticks on all would double the time."""
    from matplotlib.ticker import MaxNLocator

    axes.tick_params(labelsize=7, length=2.5, direction="in", labelrotation=45)
    if row == len(parameters) - 1:
        axes.xaxis.set_major_locator(MaxNLocator(3, prune="both"))
        axes.set_xlabel(axis_label(parameters[column]), fontsize=9)
        axes.xaxis.set_label_coords(0.5, _LABEL)
    else:
        axes.set_xticks([])
    if column == 0 and row > 0:
        axes.yaxis.set_major_locator(MaxNLocator(3, prune="both"))
        axes.set_ylabel(axis_label(parameters[row]), fontsize=9)
        axes.yaxis.set_label_coords(_LABEL, 0.5)
    else:
        axes.set_yticks([])
