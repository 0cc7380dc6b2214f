"""One parameter: the single source of its name, label, unit, bounds and prior."""

from __future__ import annotations

from dataclasses import dataclass

from emu.families.density import Density

__all__ = ["Parameter"]


@dataclass(frozen=True)
class Parameter:
    """Describe one number that a model or an instrument leaves open.

    Args:
        name: identifier in tables, files and code.
        symbol: label for axes, in TeX without dollar signs.
        unit: "deg", "GM/c2", "GM/c3", another unit as text, or "" for a pure number.
        prior: its density before any data, independent of the other parameters.
        circular: True where the values 0 and 360 degrees mean the same.
    """

    name: str
    symbol: str
    unit: str
    prior: Density
    circular: bool = False

    @property
    def bounds(self) -> tuple[float, float]:
        """Return the lowest and highest value the prior allows."""
        return self.prior.bounds
