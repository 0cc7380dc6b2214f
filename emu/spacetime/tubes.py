"""Count the sources inside a caustic tube.

With spin the caustic that ends an image order is not a line but a tube of four-cusped cross-section (Rauch &
Blandford 1994); a source inside sends four images near the critical curve instead of two. The two further ones
are neglected by the package; the sources are counted.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from emu.spacetime.newton import solve_newton
from emu.spacetime.rays import Array, Flags
from emu.spacetime.start import critical_impact

__all__ = ["in_tube"]

_LOOKS = 24
# Generous bounds of a tube's half width, rad of swept angle: behind the hole over a² sin² i/r (0.17 at most was seen),
# before it, where the light has gone round the hole, over a² sin² i.
_WIDTHS = (0.5, 0.9)
_SAME = 1e-2  # GM/c²
_NEWTON_STEPS = 20
_LEAST_BEYOND = 0.01  # GM/c², of a start beyond the critical curve


def _distinct(images: list[Array]) -> Array:
    """Count distinct screen positions over a list of (N, 2), NaN for none."""
    count = np.zeros(len(images[0]), dtype=int)
    for k, image in enumerate(images):
        seen = np.zeros(len(image), dtype=bool)
        for earlier in images[:k]:
            seen |= np.linalg.norm(image - earlier, axis=1) < _SAME
        count += np.isfinite(image[:, 0]) & ~seen
    return count


@njit(cache=True, error_model="numpy")
def _look_starts(spin, cos_i, sin_i, known, turned, out):
    """Write starts to `out` (N, ≥ 3): the known image's distance beyond the critical curve, in a turned direction."""
    for k in range(len(spin)):
        b = math.hypot(known[k, 0], known[k, 1])
        angle = math.atan2(known[k, 1], known[k, 0])
        beyond = b - critical_impact(spin[k], cos_i[k], sin_i[k], math.cos(angle), math.sin(angle))
        right, up = math.cos(angle + turned), math.sin(angle + turned)
        there = critical_impact(spin[k], cos_i[k], sin_i[k], right, up) + max(beyond, _LEAST_BEYOND)
        out[k, 0], out[k, 1], out[k, 2] = there * right, there * up, known[k, 2] * b / there


def in_tube(
    start: Array, swept: Array, spin: Array, inclination: Array, r: Array, n: Array, order: int
) -> Flags:
    """Tell which of the solved rays come from sources within the tube that ends their image order.

    Only rays whose swept angle is close to the caustic are looked at: from 24 starts around the critical curve
    all images are sought that sweep about the same angle; more than two mean a tube.

    Args:
        start: (N, 3) α, β, τ and swept (N,), rad, as `solve_rays` returned them; failed rays have swept 0.
        spin, inclination (rad), r, n, order: as given to it.

    Returns:
        (N,) bool.
    """
    end = math.pi * (order + 1)
    width = _WIDTHS[order] * (spin * np.sin(inclination)) ** 2 / (r if order == 0 else 1.0)
    inside = np.zeros(len(r), dtype=bool)
    (near,) = np.nonzero(np.abs(swept - end) < width)
    if len(near) == 0:
        return inside
    a, cos_i, sin_i = spin[near], np.cos(inclination[near]), np.sin(inclination[near])
    sources = np.ascontiguousarray(n[near])
    images = [start[near, :2]]
    for look in range(_LOOKS):
        found = np.zeros((len(near), 9))
        _look_starts(a, cos_i, sin_i, np.ascontiguousarray(start[near]), 2.0 * math.pi * look / _LOOKS, found)
        good = solve_newton(a, cos_i, sin_i, r[near], sources, found, _NEWTON_STEPS)
        good &= np.abs(found[:, 8] - end) < 1.0
        images.append(np.where(good[:, None], found[:, :2], np.nan))
    inside[near] = _distinct(images) > 2
    return inside
