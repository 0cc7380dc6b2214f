"""The driver of `emu infer`: turn its options into a recipe and a wish."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from emu.configs import read_toml
from emu.errors import UserError
from emu.report.run import Wish, run
from emu.report.toolbox import FromBundle, FromConfigs, Recipe
from emu.units import Target

__all__ = ["answer"]


def answer(
    paths: Sequence[Path],
    bundle: Path | None,
    out: Path,
    *,
    families: Sequence[str] | None = None,
    draws: int = 1000,
    finish: str = "none",
    raymap: str = "exact",
    columns: Path | None = None,
    campaign: str | None = None,
    target: str | None = None,
    figures: bool = True,
    likelihood: bool = True,
    as_json: bool = False,
    seed: int = 0,
    workers: int = 1,
    overwrite: bool = False,
) -> int:
    """Answer flares from files and write a run's folder.

    Args:
        paths: flare tables, or folders of them.
        bundle: a trained bundle; None only with finish "exact".
        out: folder of the run, which appears only when all is written.
        families: which to answer under; None for all of the bundle.
        draws: draws a flare and family.
        finish: "none" for the estimator's draws, "exact" for exact sampling.
        raymap: "exact", or "learned", for the likelihood: the same within a stated accuracy, and much faster.
        columns: TOML that translates other people's headers.
        campaign: name or path of a campaign, only without a bundle.
        target: name or path of a target; the campaign's where None.
        figures, likelihood, as_json, seed, workers, overwrite: as in `Wish`.

    Returns:
        0, or 3 where something was left out.

    Raises:
        UserError: options do not fit together, or a config or the bundle cannot be used.
    """
    _check_choice("finish", finish, ("none", "exact"))
    _check_choice("raymap", raymap, ("exact", "learned"))
    _check_count("draws", draws)
    _check_count("workers", workers)
    asked = None if families is None else tuple(families)
    recipe = _recipe(bundle, campaign, asked, finish == "exact", raymap)
    wish = Wish(
        families=asked if bundle is not None else None,
        draws=draws,
        exact=finish == "exact",
        likelihood=likelihood,
        figures=figures,
        seed=seed,
        workers=workers,
        overwrite=overwrite,
        as_json=as_json,
        columns=columns,
        target=None if target is None else Target.from_table(read_toml("targets", target), target),
    )
    return run(recipe, paths, out, wish)


def _check_choice(option: str, value: str, allowed: tuple[str, ...]) -> None:
    """Refuse what is not one of a few words."""
    if value not in allowed:
        raise UserError(f"--{option} is {value!r}; one of {', '.join(allowed)}")


def _check_count(option: str, value: int) -> None:
    """Refuse a number below one."""
    if value < 1:
        raise UserError(f"--{option} is {value}; give 1 or more")


def _recipe(
    bundle: Path | None, campaign: str | None, families: tuple[str, ...] | None, exact: bool, raymap: str
) -> Recipe:
    """Choose where answers come from."""
    if bundle is not None:
        if campaign is not None:
            raise UserError("a bundle holds its own campaign; leave --campaign or --bundle out")
        return FromBundle(bundle, raymap)
    if not exact:
        raise UserError("give --bundle; or --finish exact with --campaign and --families, which is slow")
    if campaign is None or families is None:
        raise UserError("without a bundle, --finish exact needs --campaign and --families")
    return FromConfigs(campaign, families, raymap)
