"""A target, its mass and distance, turns geometric units into seconds and microarcseconds.

Inside the package G = c = M = 1: lengths are in GM/c^2 and times in GM/c^3. This is the only place
where a physical constant enters.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from emu.configs import check_keys, number
from emu.errors import UserError

__all__ = ["Target"]

_MICROARCSECONDS_PER_RADIAN = math.degrees(1.0) * 3600.0 * 1e6


@cache
def _constants() -> tuple[float, float, float]:
    """Return GM of the sun (m^3/s^2), the speed of light (m/s) and the kiloparsec (m)."""
    # Astropy takes a third of a second to import, and `emu --help` needs no constants.
    from astropy import constants

    return float(constants.GM_sun.value), float(constants.c.value), 1e3 * float(constants.pc.value)


@dataclass(frozen=True)
class Target:
    """Hold what turns geometric units into measured ones.

    Args:
        name: any label.
        mass: solar masses.
        distance: kpc.

    Raises:
        UserError: mass or distance is not a positive finite number.

    Examples:
        >>> target = Target("an example", mass=4.0e6, distance=8.0)
        >>> round(2 * math.pi * 6**1.5 * target.time_unit / 60, 2)  # minutes an orbit, no spin, r = 6
        30.32
    """

    name: str
    mass: float
    distance: float

    def __post_init__(self) -> None:
        for label, value in (("mass", self.mass), ("distance", self.distance)):
            if not 0.0 < value < math.inf:
                raise UserError(f"target {self.name!r}: {label} is {value}; give a positive number")

    @classmethod
    def from_table(cls, table: Mapping[str, Any], where: str) -> "Target":
        """Build a target from a parsed TOML table with the keys name, mass and distance.

        Args:
            table: {name: text, mass: solar masses, distance: kpc}.
            where: file and table, for error messages.

        Raises:
            UserError: a key is unknown, missing, of the wrong type or not positive.
        """
        check_keys(table, ("name", "mass", "distance"), (), where)
        if not isinstance(table["name"], str):
            raise UserError(f"{where}: name is {table['name']!r}; give a text")
        try:
            return cls(table["name"], number(table, "mass", where), number(table, "distance", where))
        except UserError as problem:
            text = str(problem)
            raise UserError(text if text.startswith(where) else f"{where}: {text}") from problem

    def to_table(self) -> dict[str, str | float]:
        """Return the table that `from_table` reads back unchanged."""
        return {"name": self.name, "mass": self.mass, "distance": self.distance}

    @property
    def time_unit(self) -> float:
        """Seconds in one GM/c^3."""
        gm_sun, light, _ = _constants()
        return self.mass * gm_sun / light**3

    @property
    def length_unit(self) -> float:
        """Microarcseconds on the sky in one GM/c^2 at the target's distance."""
        gm_sun, light, kiloparsec = _constants()
        radians = self.mass * gm_sun / light**2 / (self.distance * kiloparsec)
        return radians * _MICROARCSECONDS_PER_RADIAN
