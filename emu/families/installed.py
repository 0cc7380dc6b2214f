"""Models that other packages bring along as entry points of the group `emu.models`."""

from __future__ import annotations

from importlib.metadata import entry_points

from emu.errors import UserError
from emu.families.model import Model

__all__ = ["installed_model", "installed_names"]

_GROUP = "emu.models"
_SEAM = ("name", "parameters", "kinds", "standard_frame", "valid", "curves", "scatter")


def installed_names() -> tuple[str, ...]:
    """Return the names of installed models in alphabetical order."""
    return tuple(sorted(entry_points(group=_GROUP).names))


def installed_model(name: str) -> Model:
    """Import an installed model: the object itself, or what a factory without arguments makes.

    Args:
        name: one of `installed_names()`.

    Raises:
        UserError: it cannot be imported, or is no model.
    """
    point = entry_points(group=_GROUP)[name]
    where = f"installed model {name!r} ({point.value})"
    try:
        found = point.load()
        if isinstance(found, type) or not isinstance(found, Model):
            found = found()
    except Exception as problem:
        raise UserError(f"{where} cannot be loaded: {type(problem).__name__}: {problem}") from problem
    missing = [word for word in _SEAM if not hasattr(found, word)]
    if missing:
        raise UserError(f"{where} is no model: it lacks {', '.join(missing)}")
    if found.name != name:
        raise UserError(f"{where} calls itself {found.name!r}: give both one name")
    model: Model = found
    return model
