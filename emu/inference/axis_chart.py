"""A chart for the axis of a field: a disc on which an isotropic axis is uniform."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from emu.families.density import Array

__all__ = ["AxisChart", "field_axis"]


@dataclass(frozen=True)
class AxisChart:
    """Map the axis of a field to Lambert's equal-area disc about a mean axis.

    Tilt w and pitch p stand for the axis b = (cos p sin w, sin p, cos p cos w), where b and -b are the
    same; (w, p) is singular near p = 90 degrees and wraps with a twist, the disc does neither near its
    centre. An isotropic prior is uniform on the disc, whose area is 2 pi.

    Args:
        tilt: column of w in degrees, 0 to 180.
        pitch: column of p in degrees, -90 to 90.
        frame: (3, 3) rows: mean axis, and two axes across it; orthonormal.
    """

    tilt: int
    pitch: int
    frame: tuple[tuple[float, float, float], ...]

    @property
    def columns(self) -> tuple[int, ...]:
        """Return the columns of tilt and pitch."""
        return self.tilt, self.pitch

    def coordinates(self, theta: Array) -> Array:
        """Return the place on the disc, (N, 2)."""
        along = field_axis(theta[:, self.tilt], theta[:, self.pitch]) @ np.array(self.frame).T
        along = along * np.where(along[:, :1] < 0.0, -1.0, 1.0)
        return np.asarray(along[:, 1:] * np.sqrt(2.0 / (1.0 + along[:, :1])), float)

    def values(self, y: Array, theta: Array) -> Array:
        """Return tilt and pitch, (N, 2)."""
        square = np.minimum(np.sum(y * y, axis=1, keepdims=True), 2.0)
        along = np.concatenate([1.0 - square / 2.0, y * np.sqrt(1.0 - square / 4.0)], axis=1)
        axis = along @ np.array(self.frame)
        axis = axis * np.where(axis[:, :1] < 0.0, -1.0, 1.0)
        tilt = np.degrees(np.arctan2(axis[:, 0], axis[:, 2]))
        pitch = np.degrees(np.arcsin(np.clip(axis[:, 1], -1.0, 1.0)))
        return np.stack([tilt, pitch], axis=1)

    def log_prior(self, y: Array, theta: Array) -> Array:
        """Return -ln(2 pi) on the disc, minus infinity outside."""
        return np.where(np.sum(y * y, axis=1) <= 2.0, -np.log(2.0 * np.pi), -np.inf)


def field_axis(tilt: Array, pitch: Array) -> Array:
    """Return the unit vector of tilt and pitch in degrees along (outward, azimuthal, vertical): (N, 3)."""
    w, p = np.radians(tilt), np.radians(pitch)
    return np.stack([np.cos(p) * np.sin(w), np.sin(p), np.cos(p) * np.cos(w)], axis=-1)
