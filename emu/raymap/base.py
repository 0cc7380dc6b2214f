"""The seam between the emitter and spacetime: from a source position to what reaches us."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["RayBundle", "RayMap"]

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class RayBundle:
    """Hold what is known of N rays of one image order; every array is (N,), G = c = M = 1.

    Args:
        alpha, beta: screen position, right and up along the projected axis, GM/c2.
        delay: light-travel time from the source up to a constant of (spin, inclination), GM/c3.
        p_r, p_theta, p_phi: covariant momentum at the source for unit energy at infinity; p_phi is over sin(theta).
        magnification: area on the screen over the cross-section of the bundle at the source.
        failed: True where no ray was found; the other entries are then zero.
        swept: angle swept about the hole, frame dragging apart, rad.
        start: (N, 3) what a neighbouring source may start from.
        exact: True where the ray was solved, False where it was taken from what was learned.
    """

    alpha: Array
    beta: Array
    delay: Array
    p_r: Array
    p_theta: Array
    p_phi: Array
    magnification: Array
    failed: Flags
    swept: Array
    start: Array
    exact: Flags


class RayMap(Protocol):
    """Join sources to the observer at infinity."""

    def trace(
        self, spin: Array, inclination: Array, r: Array, n: Array, order: int, start: Array | None = None
    ) -> RayBundle:
        """Return the rays of one image order.

        Args:
            spin: (N,) dimensionless. inclination: (N,) rad. r: (N,) GM/c2.
            n: (N, 3) unit vectors of the sources; the observer is in the direction (sin i, 0, cos i).
            order: 0 direct, 1 the next image.
            start: (N, 3) the `start` of rays to near sources; rows of NaN ask for a start of the map's own.
        """
        ...

    def in_tube(
        self, start: Array, swept: Array, spin: Array, inclination: Array, r: Array, n: Array, order: int
    ) -> Flags:
        """Tell which traced sources lie within a caustic tube, so that further images exist and are neglected.

        Args:
            start: (N, 3) and swept: (N,) of the sources' bundle. The rest: as given to `trace`.
        """
        ...
