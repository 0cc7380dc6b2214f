"""Figures of the checks."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import matplotlib
import numpy as np

matplotlib.use("Agg")

import matplotlib.pyplot as plt
from matplotlib.axes import Axes

from training.checks.across import Across
from training.checks.bands import simultaneous_band
from training.checks.calibration import Calibration
from training.checks.efficiency import Efficiency
from training.checks.sharpness import Against

__all__ = ["draw_across", "draw_checks"]

_COLUMNS = 4


def draw_checks(out: Path, calibration: Calibration, efficiency: tuple[Efficiency, ...],
                against: tuple[Against, ...]) -> None:
    """Draw what was checked into PNG files in a folder.

    Args:
        out: folder, made if needed.
        calibration: drawn as ranks.png, coverage.png and contraction.png.
        efficiency: drawn as efficiency.png, unless empty.
        against: drawn as references.png, unless empty.
    """
    out.mkdir(parents=True, exist_ok=True)
    _ranks(out / "ranks.png", calibration)
    _coverage(out / "coverage.png", calibration)
    _contraction(out / "contraction.png", calibration)
    if efficiency:
        _efficiency(out / "efficiency.png", efficiency)
    if any(one.closeness is not None for one in against):
        _references(out / "references.png", against)


def draw_across(place: Path, across: Across) -> None:
    """Draw coverage and contraction of every shared parameter as matrices in per cent, into one PNG file."""
    side = 1.2 + 0.28 * len(across.families)
    with _figure(place, 2, len(across.shared), (side, side)) as axes:
        rows = ((across.coverage, "coverage of 68 % intervals"), (across.contraction, "contraction"))
        for line, (value, label) in enumerate(rows):
            for column, name in enumerate(across.shared):
                _matrix(axes[line, column], value[..., column], f"{name}: {label}, %")
        for ax in axes[-1]:
            ax.set_xticks(range(len(across.families)), across.families, rotation=90, fontsize=7)
            ax.set_xlabel("family that made the flares", fontsize=8)
        for ax in axes[:, 0]:
            ax.set_yticks(range(len(across.families)), across.families, fontsize=7)
            ax.set_ylabel("family assumed", fontsize=8)


def _ranks(place: Path, calibration: Calibration) -> None:
    """Draw the distribution of ranks less the diagonal, in the simultaneous band of one parameter."""
    ranks = calibration.ranks.ranks
    band = simultaneous_band(len(ranks))
    lines = -(-ranks.shape[1] // _COLUMNS)
    with _figure(place, lines, _COLUMNS, (2.6, 2.0)) as axes:
        for ax, values, name in zip(axes.flat, ranks.T, calibration.ranks.names, strict=False):
            count = np.searchsorted(np.sort(values), band.point, side="right")
            ax.fill_between(band.point, band.low / len(ranks) - band.point,
                            band.high / len(ranks) - band.point, alpha=0.3)
            ax.plot(band.point, count / len(ranks) - band.point)
            ax.set_title(name, fontsize=8)
        for ax in axes.flat[ranks.shape[1]:]:
            ax.set_axis_off()
        axes[0, 0].figure.supxlabel("rank of the truth among the draws, as a share", fontsize=9)
        axes[0, 0].figure.supylabel("share of flares below it, less that rank (band: 95 %)", fontsize=9)


def _coverage(place: Path, calibration: Calibration) -> None:
    """Draw empirical against nominal coverage of three kinds of regions."""
    levels = np.linspace(0.0, 1.0, 101)
    with _figure(place, 1, 3, (3.4, 3.2)) as axes:
        for check in calibration.central:
            axes[0, 0].plot(levels, [np.mean(check.levels <= x) for x in levels], lw=0.7)
        axes[0, 1].plot(levels, [np.mean(calibration.density.levels <= x) for x in levels])
        tarp = calibration.tarp
        axes[0, 2].fill_between(tarp.point, tarp.low, tarp.high, alpha=0.3)
        axes[0, 2].plot(tarp.point, tarp.curve)
        band = simultaneous_band(len(calibration.density.levels))
        for ax, title in zip(axes[0], ("central intervals", "highest density", "balls (TARP)"), strict=True):
            if title != "balls (TARP)":
                n = len(calibration.density.levels)
                ax.fill_between(band.point, band.low / n, band.high / n, alpha=0.3)
            ax.plot([0, 1], [0, 1], "k:", lw=0.8)
            ax.set(title=title, xlabel="level", ylabel="share of truths inside")


def _contraction(place: Path, calibration: Calibration) -> None:
    """Draw the spread over flares of each parameter's contraction."""
    names = calibration.ranks.names
    with _figure(place, 1, 1, (6.0, 0.3 * len(names) + 1.0)) as axes:
        axes[0, 0].boxplot(calibration.contraction, orientation="horizontal", showfliers=False,
                           tick_labels=names)
        axes[0, 0].axvline(0.0, color="k", lw=0.8)
        axes[0, 0].set_xlabel("contraction: 1 - posterior variance / prior variance")


def _efficiency(place: Path, found: tuple[Efficiency, ...]) -> None:
    """Draw efficiencies in rising order, with their halves."""
    order = np.argsort([one.full for one in found])
    floor = 1.0 / found[0].draws
    with _figure(place, 1, 1, (5.0, 3.2)) as axes:
        ax = axes[0, 0]
        ax.semilogy([max(found[k].full, floor) for k in order], "o")
        for half in (0, 1):
            ax.semilogy([max(found[k].halves[half], floor) for k in order], "_", color="0.5")
        ax.axhline(floor, color="k", lw=0.8, ls=":")
        ax.set(xlabel="flare, in rising order", ylabel=f"ESS / N, N = {found[0].draws}; bars: halves")


def _references(place: Path, against: tuple[Against, ...]) -> None:
    """Draw distances and width ratios of every parameter on every reference flare."""
    shown = [(one, one.closeness) for one in against if one.closeness is not None]
    with _figure(place, 1, 2, (5.0, 4.0)) as axes:
        for one, near in shown:
            mark = "o" if one.exact else "x"
            axes[0, 0].plot(near.wasserstein, range(len(near.names)), mark,
                            label=f"{one.name}: C2ST {near.test.accuracy:.2f}")
            axes[0, 1].plot(near.width_ratio, range(len(near.names)), mark)
        names = shown[0][1].names
        for ax, label in zip(axes[0], ("distance / exact width", "width / exact width"), strict=True):
            ax.set_yticks(range(len(names)), names, fontsize=7)
            ax.set_xlabel(label)
        axes[0, 1].axvline(1.0, color="k", lw=0.8)
        axes[0, 0].legend(fontsize=7)


def _matrix(ax: Axes, value: np.ndarray, title: str) -> None:
    """Draw a matrix of shares with its numbers in per cent, without ticks."""
    ax.imshow(value, vmin=0.0, vmax=1.0, cmap="viridis")
    for a, b in np.ndindex(value.shape):
        ax.text(b, a, f"{100.0 * value[a, b]:.0f}", ha="center", va="center", fontsize=7,
                color="w" if value[a, b] < 0.6 else "k")
    ax.set_xticks([])
    ax.set_yticks([])
    ax.set_title(title, fontsize=8)


@contextmanager
def _figure(place: Path, lines: int, columns: int, size: tuple[float, float]) -> Iterator[np.ndarray]:
    """Open a grid of axes of a given size in inches each, and save it at the end."""
    figure, axes = plt.subplots(lines, columns, figsize=(size[0] * columns, size[1] * lines),
                                squeeze=False, layout="constrained")
    try:
        yield axes
        figure.savefig(place, dpi=120)
    finally:
        plt.close(figure)
