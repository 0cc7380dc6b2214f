"""Ray maps by name."""

from __future__ import annotations

from emu.errors import UserError
from emu.raymap.base import RayMap
from emu.raymap.exact import ExactRays
from emu.raymap.learned import LearnedRays

__all__ = ["find_raymap"]

_RAYMAPS: dict[str, RayMap] = {"exact": ExactRays(), "learned": LearnedRays()}


def find_raymap(name: str) -> RayMap:
    """Return the ray map of that name.

    Raises:
        UserError: there is none.
    """
    if name not in _RAYMAPS:
        raise UserError(f"there is no ray map {name!r}; known: {', '.join(_RAYMAPS)}")
    return _RAYMAPS[name]
