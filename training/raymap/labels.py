"""Exact rays in the bending geometry: the source that belongs to a node and a spin, and what is learned of its ray."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.raymap.base import RayBundle
from emu.raymap.bending import ROWS, into_bending
from emu.raymap.exact import ExactRays
from emu.spacetime.kerr import frame_at

__all__ = ["Places", "exact_twice", "fit_drag", "learned_of", "place_sources"]

Array = NDArray[np.float64]
_SLOW = 1e-3
_LEAST = 1e-6  # instead of tan(psi/4) = 0, where the bending plane is not defined


@dataclass(frozen=True)
class Places:
    """Hold N sources and observers: spin, inclination (rad), r (GM/c2) and unit vectors n (N, 3)."""

    spin: Array
    inclination: Array
    r: Array
    n: Array


def fit_drag(root_u: Array) -> Array:
    """Fit the first-order shift of the caustic by spin, epsilon(u) = u sum drag[k] u^(k/2), to exact rays.

    The two rays that pass a slowly spinning hole on either side to the point opposite the observer differ in delay by
    2 a b epsilon, with b the impact parameter.

    Args:
        root_u: (K,) values of the root of 1/r that matter.

    Returns:
        (8,) drag.
    """
    s = np.linspace(root_u.min(), root_u.max(), 200)
    count = len(s)
    places = (np.full(count, _SLOW), np.full(count, 0.5 * np.pi), s**-2, np.tile([-1.0, 0.0, 0.0], (count, 1)))
    one, other = (ExactRays().trace(*places, order) for order in (0, 1))
    b = 0.5 * (np.abs(one.alpha) + np.abs(other.alpha))
    shift = np.abs(one.delay - other.delay) / (2.0 * _SLOW * b)
    powers = np.vander(s, 8, increasing=True) * (s**2)[:, None]
    return np.linalg.lstsq(powers, shift, rcond=None)[0]


def place_sources(spins: Array, x: Array, r: Array, drag: Array) -> Places:
    """Find observer and source whose bending geometry is given.

    Args:
        spins: (N, 3) spin components in the bending frame. x: (N,) tan(psi/4). r: (N,) GM/c2. drag: (8,).
    """
    x = np.maximum(x, _LEAST)
    half_c, half_s = (1.0 - x * x) / (1.0 + x * x), 2.0 * x / (1.0 + x * x)
    spin = np.linalg.norm(spins, axis=1)
    axis = spins / spin[:, None]
    observer, source = axis[:, 0] * half_c - axis[:, 1] * half_s, axis[:, 0] * half_c + axis[:, 1] * half_s
    across = np.sqrt((1.0 - observer**2) * (1.0 - source**2))
    turned = np.arctan2(2.0 * half_s * half_c * axis[:, 2], half_c**2 - half_s**2 - observer * source)
    u = 1.0 / r
    shift = u * np.polynomial.polynomial.polyval(np.sqrt(u), drag)
    phi = turned.copy()
    for _ in range(100):  # undo the turn, which depends on where the source is: a contraction
        phi = turned - 2.0 * np.arctan(0.25 * spin * shift * (1.0 - across * np.cos(phi) - observer * source))
    rho = np.sqrt(1.0 - source**2)
    n = np.stack((rho * np.cos(phi), rho * np.sin(phi), source), axis=-1)
    return Places(spin, np.arccos(observer), r, n)


def exact_twice(places: Places, order: int) -> RayBundle:
    """Solve rays, and once more from the solution: then the last Newton step is at rounding error."""
    first = ExactRays().trace(places.spin, places.inclination, places.r, places.n, order)
    start = np.where(first.failed[:, None], np.nan, first.start)
    return ExactRays().trace(places.spin, places.inclination, places.r, places.n, order, start)


def learned_of(bundle: RayBundle, places: Places, order: int, drag: Array) -> tuple[Array, Array]:
    """Return what is learned of exact rays, (N, 7), and their bending geometry, (14, N): see emu.raymap.bending."""
    cos_i, sin_i = np.cos(places.inclination), np.sin(places.inclination)
    rows = np.empty((ROWS, len(cos_i)))
    into_bending(places.spin, cos_i, sin_i, places.r**-0.5, places.n, 1.0 - 2.0 * order, drag, rows)
    half_c, half_s, m, normal, n2 = rows[0], rows[1], rows[2:5], rows[5:8], rows[8:11]
    screen = np.stack((-bundle.beta * cos_i, bundle.alpha, bundle.beta * sin_i))
    _lapse, _omega, root_rr, root_tt, varpi, _delta = np.array(
        [frame_at(*one) for one in zip(places.spin, places.r, places.n[:, 2], strict=True)]
    ).T
    k = np.stack((bundle.p_r / root_rr, bundle.p_theta / root_tt, bundle.p_phi / varpi))
    k = k / np.maximum(np.linalg.norm(k, axis=0), 1e-300)
    rho = np.hypot(n2[0], n2[1])
    polar = np.stack((n2[2] * n2[0] / rho, n2[2] * n2[1] / rho, -rho))
    around = np.stack((-n2[1] / rho, n2[0] / rho, np.zeros_like(rho)))
    sideways = k[1] * polar + k[2] * around
    learned = (
        bundle.delay + places.r * (half_c**2 - half_s**2),
        np.sum(screen * m, axis=0) - 2.0 * places.r * half_c * half_s,
        k[0],
        np.sum(sideways * np.cross(normal, n2, axis=0), axis=0),
        bundle.magnification * np.abs(half_c),
        np.sum(screen * normal, axis=0) * half_c,
        np.sum(sideways * normal, axis=0) * half_c,
    )
    return np.stack(learned, axis=-1), rows
