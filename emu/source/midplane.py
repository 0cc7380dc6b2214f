"""A circular orbit in the midplane, at a free multiple of the geodesic's rate."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.source.motion import Array, Motion, Offset, Values, is_possible, opening_motion

__all__ = ["Midplane"]


@dataclass(frozen=True)
class Midplane:
    """Circle at R = radius, z = 0."""

    parameter_names = ("radius", "phase", "rate")

    def motion(self, values: Values, time: Array, offset: Offset) -> Motion:
        """Return the motion at emission times counted from t0."""
        return opening_motion(values, time, offset, values["rate"], 0.0, 0.0, 0.0)

    def valid(self, values: Values, interval: tuple[float, float], r_min: float) -> NDArray[np.bool_]:
        """Tell which orbits are timelike and at r >= r_min."""
        return is_possible(self, values, interval, r_min)
