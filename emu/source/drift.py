"""A straight drift in R and z: the emitter does not circulate."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.source.motion import Array, Motion, Offset, Values, is_possible, opening_motion

__all__ = ["Drift"]


@dataclass(frozen=True)
class Drift:
    """Stay at one azimuth while R changes by `opening` and z by `rise` per unit time."""

    parameter_names = ("radius", "phase", "opening", "rise", "height")

    def motion(self, values: Values, time: Array, offset: Offset) -> Motion:
        """Return the motion at emission times counted from t0."""
        return opening_motion(values, time, offset, 0.0, values["opening"], values["rise"], values["height"])

    def valid(self, values: Values, interval: tuple[float, float], r_min: float) -> NDArray[np.bool_]:
        """Tell which paths are timelike and at r >= r_min through the interval."""
        return is_possible(self, values, interval, r_min)
