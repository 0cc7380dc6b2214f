"""A reconnection-like turn of the field inside the emitter, with a dip of its strength."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from emu.source.change import Array

__all__ = ["Turning"]


@dataclass(frozen=True)
class Turning:
    """Turn b by psi(t) = turn (1 + tanh((t - turn_time)/turn_duration))/2 towards m at the angle `roll`.

    m = cos(roll) e1 + sin(roll) e2 with e1 = cos w R - sin w z and e2 = b x e1; the strength dips by
    1 - dip sech^2((t - turn_time)/turn_duration).
    """

    parameter_names = ("turn", "roll", "turn_time", "turn_duration", "dip")

    def apply(self, values: Mapping[str, Array], time: Array, b: Array) -> tuple[Array, Array]:
        """Return the turned direction and the strength."""
        shape = b.shape[:-1]
        tilt = np.broadcast_to(values["tilt"], shape)
        first = np.stack((np.cos(tilt), np.zeros(shape), -np.sin(tilt)), axis=-1)
        second = np.cross(b, first)  # (R, phi, z) is right-handed
        roll = np.broadcast_to(values["roll"], shape)[..., None]
        across = np.cos(roll) * first + np.sin(roll) * second
        step = np.tanh((time - values["turn_time"]) / values["turn_duration"])
        psi = np.broadcast_to(0.5 * values["turn"] * (1.0 + step), shape)[..., None]
        strength = np.broadcast_to(1.0 - values["dip"] * (1.0 - step**2), shape)
        return np.cos(psi) * b + np.sin(psi) * across, strength
