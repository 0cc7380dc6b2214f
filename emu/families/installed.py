"""Models that other packages bring along, beside our families."""

from __future__ import annotations

from importlib.metadata import EntryPoint, entry_points

from emu.errors import UserError
from emu.families.catalogue import family, family_names
from emu.families.model import Model

__all__ = ["model", "model_names"]

GROUP = "emu.models"


def model_names() -> tuple[str, ...]:
    """Return the names of the shipped families, then those of installed models."""
    return (*family_names(), *sorted(_installed()))


def model(name: str) -> Model:
    """Return a model.

    Args:
        name: a shipped family, the path of a family's `.toml`, or the entry-point name of an installed
            model.

    Raises:
        UserError: there is none of this name, or what was installed is no model.
    """
    installed = _installed()
    if name not in installed:
        known = family_names()
        if name in known or name.endswith(".toml"):
            return family(name)
        others = f", an installed model ({', '.join(sorted(installed))})" if installed else ""
        raise UserError(f"no model {name!r}: one of {', '.join(known)}{others}, or the path of a .toml file")
    if name in family_names():
        raise UserError(f"installed model {name!r} has the name of a shipped family; rename its entry point")
    return _load(installed[name])


def _installed() -> dict[str, EntryPoint]:
    """Find entry points of our group by name."""
    return {point.name: point for point in entry_points(group=GROUP)}


def _load(point: EntryPoint) -> Model:
    """Import a model: the object itself, or what a factory without arguments makes."""
    where = f"installed model {point.name!r} ({point.value})"
    try:
        loaded = point.load()
        found = loaded() if isinstance(loaded, type) or not isinstance(loaded, Model) else loaded
    except Exception as problem:
        raise UserError(f"{where} cannot be loaded: {type(problem).__name__}: {problem}") from problem
    if not isinstance(found, Model):
        missing = [word for word in _SEAM if not hasattr(found, word)]
        raise UserError(f"{where} is no model: it lacks {', '.join(missing)}")
    return found


_SEAM = ("name", "parameters", "kinds", "standard_frame", "valid", "curves", "scatter")
