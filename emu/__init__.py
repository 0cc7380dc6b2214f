"""Posteriors for polarised flares close to a black hole, calibrated and checked against exact sampling."""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from emu.bundle import open_bundle
    from emu.evaluate import curves
    from emu.families.catalogue import family, family_names
    from emu.observe.flare import read_flare

__all__ = ["curves", "family", "family_names", "read_flare", "open_bundle"]

__version__ = "0.1.0"

# Where each public name lives. They are imported when first used, so that `import emu` and
# `emu --help` stay quick.
_HOMES = {
    "curves": "emu.evaluate",
    "family": "emu.families.catalogue",
    "family_names": "emu.families.catalogue",
    "read_flare": "emu.observe.flare",
    "open_bundle": "emu.bundle",
}


def __getattr__(name: str) -> Any:
    """Import a public name when it is first asked for."""
    if name not in _HOMES:
        raise AttributeError(f"module 'emu' has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names, imported or not."""
    return sorted({*globals(), *__all__})
