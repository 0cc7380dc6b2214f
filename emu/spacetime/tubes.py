"""Count the sources inside a caustic tube.

With spin the caustic that ends an image order is not a line but a tube of four-cusped cross-section (Rauch &
Blandford 1994); a source inside sends four images near the critical curve instead of two. The two further ones
are neglected by the package; the sources are counted.
"""

from __future__ import annotations

import math

import numpy as np

from emu.spacetime.newton import solve_newton
from emu.spacetime.rays import Array, Flags

__all__ = ["in_tube"]

_LOOKS = 12
_WIDTHS = (0.3, 0.9)  # generous bounds of a tube's half width over a² sin² i, rad of swept angle, orders 0 and 1
_SAME = 1e-2  # GM/c²
_NEWTON_STEPS = 20


def _distinct(images: list[Array]) -> Array:
    """Count distinct screen positions over a list of (N, 2), NaN for none."""
    count = np.zeros(len(images[0]), dtype=int)
    for k, image in enumerate(images):
        seen = np.zeros(len(image), dtype=bool)
        for earlier in images[:k]:
            seen |= np.linalg.norm(image - earlier, axis=1) < _SAME
        count += np.isfinite(image[:, 0]) & ~seen
    return count


def in_tube(
    start: Array, swept: Array, spin: Array, inclination: Array, r: Array, n: Array, order: int
) -> Flags:
    """Tell which of the solved rays come from sources within the tube that ends their image order.

    Only rays whose swept angle is close to the caustic are looked at: from twelve starts around the critical curve
    all images are sought that sweep about the same angle; more than two mean a tube.

    Args:
        start: (N, 3) α, β, τ and swept (N,), rad, as `solve_rays` returned them; failed rays have swept 0.
        spin, inclination (rad), r, n, order: as given to it.

    Returns:
        (N,) bool.
    """
    end = math.pi * (order + 1)
    width = _WIDTHS[order] * (spin * np.sin(inclination)) ** 2
    inside = np.zeros(len(r), dtype=bool)
    (near,) = np.nonzero(np.abs(swept - end) < width)
    if len(near) == 0:
        return inside
    a, cos_i, sin_i = spin[near], np.cos(inclination[near]), np.sin(inclination[near])
    centre = a * sin_i
    across, up, tau = start[near, 0] - centre, start[near, 1], start[near, 2]
    images = []
    for look in range(_LOOKS):
        c, s = math.cos(2.0 * math.pi * look / _LOOKS), math.sin(2.0 * math.pi * look / _LOOKS)
        found = np.zeros((len(near), 9))
        found[:, :3] = np.stack((centre + c * across - s * up, s * across + c * up, tau), axis=-1)
        good = solve_newton(a, cos_i, sin_i, r[near], np.ascontiguousarray(n[near]), found, _NEWTON_STEPS)
        good &= np.abs(found[:, 8] - end) < 1.0
        images.append(np.where(good[:, None], found[:, :2], np.nan))
    inside[near] = _distinct(images) > 2
    return inside
