"""The background field's direction, on the comoving cylindrical axes (R, phi, z)."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

__all__ = ["BACKGROUND_NAMES", "background"]

Array = NDArray[np.float64]
BACKGROUND_NAMES = ("tilt", "pitch")


def background(values: Mapping[str, Array], cylinder: Array) -> Array:
    """Return b = cos p (sin w R + cos w z) + sin p phi with tan p = tan(pitch) R/R0 (flux freezing).

    Args:
        values: tilt w and pitch at R0 in rad, radius R0 in GM/c2, broadcasting with `cylinder`.
        cylinder: R of the point in GM/c2.

    Returns:
        (..., 3) unit vectors on (R, phi, z).
    """
    poloidal = np.cos(values["pitch"])
    toroidal = np.sin(values["pitch"]) * cylinder / values["radius"]
    length = np.hypot(poloidal, toroidal)
    poloidal, toroidal = poloidal / length, toroidal / length
    parts = (poloidal * np.sin(values["tilt"]), toroidal, poloidal * np.cos(values["tilt"]))
    return np.stack(np.broadcast_arrays(*parts), axis=-1)
