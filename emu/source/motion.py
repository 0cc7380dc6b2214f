"""Where an emitter is and how it moves, and the seam that every path fills."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from emu.spacetime.kerr import circular_frequency, horizon, speed_squared

__all__ = ["Motion", "Offset", "Path", "is_possible", "opening_motion"]

Array = NDArray[np.float64]
Values = Mapping[str, Array]
_CHECKED_TIMES = 65
_MARGIN = 1e-3  # GM/c2 outside the horizon


@dataclass(frozen=True)
class Motion:
    """Give position and coordinate velocity; arrays of one shape, lengths GM/c2, times GM/c3, angles rad.

    Args:
        cylinder: R = r sin(theta). height: z = r cos(theta). phi: azimuth.
        cylinder_rate, height_rate, phi_rate: their derivatives by coordinate time.
    """

    cylinder: Array
    height: Array
    phi: Array
    cylinder_rate: Array
    height_rate: Array
    phi_rate: Array

    @property
    def r(self) -> Array:
        """Return the Boyer-Lindquist radius."""
        return np.hypot(self.cylinder, self.height)

    @property
    def direction(self) -> Array:
        """Return unit vectors (..., 3) of (theta, phi)."""
        r = self.r
        across = self.cylinder / r
        return np.stack((across * np.cos(self.phi), across * np.sin(self.phi), self.height / r), axis=-1)

    @property
    def r_rate(self) -> Array:
        """Return dr/dt."""
        return (self.cylinder * self.cylinder_rate + self.height * self.height_rate) / self.r

    @property
    def theta_rate(self) -> Array:
        """Return dtheta/dt."""
        return (self.height * self.cylinder_rate - self.cylinder * self.height_rate) / self.r**2


@dataclass(frozen=True)
class Offset:
    """Displace points of a spot from its centre along R, R0 phi and z, in units of the spot's size.

    Each is a number, or an array that broadcasts with the emission times: one entry an emitter.
    """

    cylinder: float | Array = 0.0
    around: float | Array = 0.0
    height: float | Array = 0.0

    def of(self, index: NDArray[np.int64]) -> Offset:
        """Return the offsets of the emitters `index`, (M,), where they differ between emitters."""
        parts = (self.cylinder, self.around, self.height)
        return Offset(*(part.ravel()[index] if isinstance(part, np.ndarray) else part for part in parts))


class Path(Protocol):
    """Move an emitter. Values are radians, GM/c2 and GM/c3, of shapes that broadcast with the times."""

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Return the names of the values it reads beside the spin."""
        ...

    def motion(self, values: Values, time: Array, offset: Offset) -> Motion:
        """Return the motion at emission times counted from t0."""
        ...

    def valid(self, values: Values, interval: tuple[float, float], r_min: float) -> NDArray[np.bool_]:
        """Tell which emitters stay timelike and at r >= r_min through an interval of emission time."""
        ...


def opening_motion(
    values: Values, time: Array, offset: Offset, rate: Array | float, opening: Array | float,
    rise: Array | float, height: Array | float,
) -> Motion:  # fmt: skip
    """Move on R = R0 + v_R t, z = z0 + v_z t with the angular momentum kept as the path opens.

    dphi/dt = rate (R0^{3/2} + a)^{-1} (R0/R)^2, so that phi = phi0 + rate (R0^{3/2} + a)^{-1} R0 t/R; a rate of 1
    without opening is the circular geodesic (Bardeen, Press & Teukolsky 1972).
    """
    start = values["radius"]
    centre = start + opening * time
    turning = rate * circular_frequency(values["spin"], start)
    size = values.get("spot_size", 0.0)
    shape = np.broadcast_shapes(np.shape(centre), np.shape(time))
    full = np.zeros(shape)
    return Motion(
        cylinder=centre + offset.cylinder * size + full,
        height=height + rise * time + offset.height * size + full,
        phi=values["phase"] + turning * start * time / centre + offset.around * size / start + full,
        cylinder_rate=opening + full,
        height_rate=rise + full,
        phi_rate=turning * (start / centre) ** 2 + full,
    )


def is_possible(
    path: Path, values: Values, interval: tuple[float, float], r_min: float
) -> NDArray[np.bool_]:
    """Tell which paths stay at R > 0 and r >= r_min, outside the horizon and slower than light.

    Args:
        values: each (N, 1).
        interval: emission times between which 65 equal times are checked.
        r_min: GM/c2.

    Returns:
        (N,) bool.
    """
    motion = path.motion(values, np.linspace(*interval, _CHECKED_TIMES)[None, :], Offset())
    r = motion.r
    spin = np.broadcast_to(values["spin"], r.shape)
    inside = (motion.cylinder > 0.0) & (r >= r_min) & (r > horizon(spin) + _MARGIN)
    r = np.where(inside, r, 10.0)
    speed = speed_squared(spin, r, motion.height / r, motion.r_rate, motion.theta_rate, motion.phi_rate)
    return np.asarray(np.all(inside & (speed < 1.0), axis=-1))
