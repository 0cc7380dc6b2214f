"""Any model by name: a family of ours, or what another package brings as an entry point of `emu.models`."""

from __future__ import annotations

from importlib.metadata import entry_points

from emu.errors import UserError
from emu.families.catalogue import family, family_names
from emu.families.model import Model

__all__ = ["installed_names", "model"]

_GROUP = "emu.models"
_SEAM = ("name", "parameters", "kinds", "standard_frame", "valid", "curves", "scatter")


def installed_names() -> tuple[str, ...]:
    """Return the names of installed models in alphabetical order."""
    return tuple(sorted(entry_points(group=_GROUP).names))


def model(name: str) -> Model:
    """Return a model by name.

    Args:
        name: a shipped family, the path of a family's `.toml`, or the entry point of an installed model.

    Raises:
        UserError: there is none, it makes no sense, or two bear the name.
    """
    if name not in installed_names():
        return family(name)
    if name in family_names():
        raise UserError(f"an installed model has the name of the family {name!r}: rename its entry point")
    return _load(name)


def _load(name: str) -> Model:
    """Import an installed model: the object itself, or what a class or function without arguments makes."""
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
    loaded: Model = found
    return loaded
