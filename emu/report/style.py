"""One look for all figures: colours that colour-blind eyes and black-and-white print tell apart."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from emu.families.parameters import Parameter
from emu.observe.rows import KINDS
from emu.units import Target

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["COLOURS", "TIMES", "Scale", "axis_label", "save"]

# Okabe & Ito (2008), Color Universal Design; the model is light and filled, the data black with markers.
COLOURS: Mapping[str, str] = {
    "data": "#000000",
    "model": "#0072B2",
    "prior": "#D55E00",
    "wide": "#B9D9EC",
    "narrow": "#5BA3CF",
}
TIMES = "cividis"  # lightness grows steadily along it, so it survives print without colour

_UNITS = {"deg": "°", "GM/c2": "GM/c²", "GM/c3": "GM/c³", "": ""}


@dataclass(frozen=True)
class Scale:
    """Turn inner units into those of an axis.

    Args:
        target: gives minutes and microarcseconds.
        flux_unit: unit of flux, Q and U, as text.
    """

    target: Target
    flux_unit: str

    @property
    def minutes(self) -> float:
        """Minutes in one GM/c3."""
        return self.target.time_unit / 60.0

    def factor(self, kind: str) -> float:
        """Return what a value of this kind is multiplied by."""
        return self.target.length_unit if kind in ("east", "north") else 1.0

    def label(self, kind: str) -> str:
        """Return the label of an axis of this kind, with its unit."""
        names = dict(zip(KINDS, ("flux", "q = Q/I", "u = U/I", "Q", "U", "east", "north"), strict=True))
        units = {"q": "", "u": "", "east": "µas", "north": "µas"}
        unit = units.get(kind, self.flux_unit)
        return f"{names[kind]} ({unit})" if unit else names[kind]


def axis_label(parameter: Parameter) -> str:
    """Return the symbol of a parameter with its unit."""
    unit = _UNITS.get(parameter.unit, parameter.unit)
    return f"${parameter.symbol}$ ({unit})" if unit else f"${parameter.symbol}$"


def save(figure: Figure, path: Path) -> None:
    """Write a figure as PNG, the same bytes for the same figure.

    Args:
        figure: made without pyplot, so nothing needs closing.
        path: the file; its folder is made.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(path, dpi=130, metadata={"Software": None})
