"""Where the learned ray map is fitted: zones of distance, nodes in each, and the spins tried at every node."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import qmc

__all__ = ["DIRECT", "INDIRECT", "TRUST", "Trust", "Zone"]

_SPIN = 0.998
Array = NDArray[np.float64]


@dataclass(frozen=True)
class Zone:
    """Cover distances from `near` to `far` (GM/c2) and bending coordinates tan(psi/4) from `low` to `high`.

    Args:
        rows: nodes in the root of u = 1/r. columns: nodes in tan(psi/4).
        degree: of the polynomials in the spin's components.
    """

    near: float
    far: float
    rows: int
    low: float
    high: float
    columns: int
    degree: int

    @property
    def root_u(self) -> Array:
        """Return the nodes in the root of u: (rows,)."""
        return np.linspace(self.far**-0.5, self.near**-0.5, self.rows)

    @property
    def x(self) -> Array:
        """Return the nodes in tan(psi/4): (columns,)."""
        return np.linspace(self.low, self.high, self.columns)

    def spins(self, seed: int) -> Array:
        """Return the spin vectors tried at every node, denser outside as Chebyshev's nodes are: (M, 3).

        They follow Sobol's sequence scrambled by the seed; M is a power of two, at least twice the monomials.
        """
        count = 128 if self.degree <= 4 else 256 if self.degree <= 7 else 512
        q = qmc.Sobol(3, rng=seed).random(count)
        size = _SPIN * np.sin(0.5 * np.pi * np.sqrt(q[:, 0]))
        z, turn = 2.0 * q[:, 1] - 1.0, 2.0 * np.pi * q[:, 2]
        across = np.sqrt(1.0 - z * z)
        return size[:, None] * np.stack((across * np.cos(turn), across * np.sin(turn), z), axis=-1)


@dataclass(frozen=True)
class Trust:
    """Bound what the learned map is used for.

    Args:
        near, far: distances, GM/c2. spin: largest magnitude. sweep: largest swept angle, degrees.
        clear, tube: least distance from the caustic, clear + tube u (spin across the line of sight)^2, rad.
    """

    near: float
    far: float
    spin: float
    sweep: float
    clear: float
    tube: float

    @property
    def numbers(self) -> Array:
        """Return the numbers as a chart holds them: (6,)."""
        x = np.tan(np.deg2rad(self.sweep) / 4.0)
        return np.array([self.far**-0.5, self.near**-0.5, self.spin, x, self.clear, self.tube])


#: Zones of image order 0, from far to near; nodes beyond 1 (behind the caustic) are those of order 1.
DIRECT = (
    Zone(20.0, 110.0, 12, 0.0, 1.12, 52, 3),
    Zone(5.5, 20.0, 14, 0.0, 1.16, 54, 5),
    Zone(3.4, 5.5, 9, 0.0, 1.25, 58, 6),
    Zone(2.6, 3.4, 8, 0.0, 1.25, 58, 7),
)
#: Zones of image order 1, which sweeps 180 degrees and more.
INDIRECT = (
    Zone(20.0, 110.0, 14, 0.85, 2.6, 62, 4),
    Zone(5.5, 20.0, 14, 0.85, 2.6, 62, 6),
    Zone(3.0, 5.5, 13, 0.85, 2.6, 62, 8),
)
#: One an image order. Chosen on points that no check uses, so that the promised accuracy holds with room.
TRUST = (Trust(2.6, 110.0, 0.998, 181.0, 0.035, 0.7), Trust(3.0, 110.0, 0.998, 270.0, 0.035, 0.7))
