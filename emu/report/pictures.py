"""All figures of one flare under one family, as files."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from emu.families.density import Array
from emu.observe.rows import KINDS, Rows
from emu.report.corner import corner_figure
from emu.report.figures import data_figure, plane_figure, planes
from emu.report.posterior import Posterior, Unanswered
from emu.report.predictive import predict
from emu.report.solve import opened, prior_draws
from emu.report.style import Scale, save
from emu.report.toolbox import Recipe

__all__ = ["Album", "draw_album", "safe_name"]

_SHOWN = 150  # draws whose curves are computed
_TIMES = 240
_PLANE_FILES = {("q", "u"): "loop", ("Q", "U"): "loop-stokes", ("east", "north"): "sky"}


@dataclass(frozen=True)
class Album:
    """Name what one process needs to draw the figures of a posterior.

    Attributes:
        recipe: opens the problem.
        posterior: draws and intervals.
        rows: the measurements in geometric units.
        scale: units of the axes.
        folder: where the files go.
    """

    recipe: Recipe
    posterior: Posterior
    rows: Rows
    scale: Scale
    folder: Path


def draw_album(album: Album) -> Unanswered | None:
    """Write the figures of one flare under one family.

    Returns:
        None, or why the curves could not be drawn.
    """
    posterior, rows, scale = album.posterior, album.rows, album.scale
    toolbox = opened(album.recipe)
    problem = toolbox.problems[posterior.family]
    title = f"{posterior.flare}, {posterior.family}"
    corner = corner_figure(
        posterior.flat,
        prior_draws(album.recipe, posterior.family),
        toolbox.parameters(posterior.family),
        posterior.intervals,
        title,
    )
    save(corner, album.folder / "corner.png")
    draws = posterior.flat
    shown = draws[np.unique(np.linspace(0, len(draws) - 1, _SHOWN).astype(int))]
    prediction = predict(problem, shown, _times(rows), _typical_errors(rows), _likeliest(posterior))
    if prediction.dropped == len(shown):
        reason = f"{posterior.family}: none of {len(shown)} draws has curves to draw"
        return Unanswered(posterior.flare, "figures", reason)
    save(data_figure(rows, prediction, scale, title), album.folder / "data.png")
    for pair in planes(rows):
        save(plane_figure(pair, rows, prediction, scale, title), album.folder / f"{_PLANE_FILES[pair]}.png")
    return None


def safe_name(name: str) -> str:
    """Make a name that every file system takes: other characters become underscores.

    Examples:
        >>> safe_name("night 3/flare:2")
        'night_3_flare_2'
    """
    return re.sub(r"[^A-Za-z0-9.+-]", "_", name).strip(".") or "_"


def _likeliest(posterior: Posterior) -> Array | None:
    """Return the draw (P,) of the highest posterior density; None where no density is known or possible."""
    if "log_likelihood" not in posterior.stats:
        return None
    density = (posterior.stats["log_prior"] + posterior.stats["log_likelihood"]).reshape(-1)
    best = int(np.argmax(density))
    return posterior.flat[best] if np.isfinite(density[best]) else None


def _times(rows: Rows) -> Array:
    """Choose evenly spaced times from the first row to the last."""
    return np.linspace(rows.time.min(), rows.time.max(), _TIMES)


def _typical_errors(rows: Rows) -> dict[str, float]:
    """Return the median error of every measured kind."""
    return {KINDS[code]: float(np.median(rows.error[rows.kind == code])) for code in np.unique(rows.kind)}
