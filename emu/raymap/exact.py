"""The ray map that solves every ray."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from emu.raymap.base import Array, Flags, RayBundle
from emu.spacetime.rays import solve_rays
from emu.spacetime.tubes import in_tube

__all__ = ["ExactRays"]


@dataclass(frozen=True)
class ExactRays:
    """Solve each ray by Newton's method on the integrated equations: emu.spacetime.rays."""

    def trace(
        self, spin: Array, inclination: Array, r: Array, n: Array, order: int, start: Array | None = None
    ) -> RayBundle:
        """Return the rays of one image order, as `RayMap` says."""
        rays = solve_rays(spin, inclination, r, n, order, start)
        return RayBundle(
            alpha=rays.alpha,
            beta=rays.beta,
            delay=rays.delay,
            p_r=rays.p_r,
            p_theta=rays.p_theta,
            p_phi=rays.p_phi,
            magnification=rays.magnification,
            failed=rays.failed,
            swept=rays.swept,
            start=np.stack((rays.alpha, rays.beta, rays.tau), axis=-1),
            exact=np.ones(len(r), dtype=bool),
        )

    def in_tube(
        self, start: Array, swept: Array, spin: Array, inclination: Array, r: Array, n: Array, order: int
    ) -> Flags:
        """Tell which traced sources lie within a caustic tube: emu.spacetime.tubes."""
        return in_tube(start, swept, spin, inclination, r, n, order)
