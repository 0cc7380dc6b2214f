"""The exact solve: rays from sources to the observer at infinity, image orders 0 and 1.

A solved ray must belong to the image that was asked for: its parity (the sign of the magnification's determinant)
alternates with the order, and its swept angle lies between order·π and (order + 1)·π up to the drag's second order.
Rays for which the start led elsewhere go round by continuation in spin and place.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from emu.spacetime.newton import solve_newton
from emu.spacetime.start import caustic_centres, start_rays, zero_spin_table

__all__ = ["Rays", "solve_rays"]

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]
_NEWTON_STEPS = 14
_CONTINUATION_STEPS = 24
_SAFE_ANGLE = 1.2  # rad from the caustic
_SLOW = 0.4  # share of the spin at which the plain start does not fail there
_SWEPT_SLACK = 0.5


@dataclass(frozen=True)
class Rays:
    """Rays joined to their sources; every array is (N,), G = c = M = 1, photon energy 1 at infinity.

    Attributes:
        alpha, beta: screen position, GM/c² (Bardeen 1973).
        tau: Mino time along the ray.
        delay: light-travel time from the source, up to a constant of the spacetime, GM/c³.
        p_r, p_theta, p_phi: covariant momentum at the source, p_φ divided by sin θ.
        magnification: μ = |d(α, β)/dA⊥|, dA⊥ the cross-section of the bundle at the source.
        swept: angle swept about the hole, the drag apart, rad.
        failed: True where no ray was found; the other entries are then zero.
    """

    alpha: Array
    beta: Array
    tau: Array
    delay: Array
    p_r: Array
    p_theta: Array
    p_phi: Array
    magnification: Array
    swept: Array
    failed: Flags


@functools.cache
def _table() -> Array:
    return np.asarray(zero_spin_table())


@njit(cache=True, error_model="numpy")
def _is_image(rays, order, slack):
    parity = 1.0 if order == 0 else -1.0
    low, high = order * math.pi - slack, (order + 1) * math.pi + slack
    return (rays[:, 7] * parity > 0.0) & (rays[:, 8] > low) & (rays[:, 8] < high)


def _moved(n: Array, centre: Array, angle: Array) -> Array:
    """Return the directions on the great circles from `centre` through `n` at the given angles from `centre`."""
    across = n - np.sum(n * centre, axis=1, keepdims=True) * centre
    length = np.linalg.norm(across, axis=1, keepdims=True)
    across = across / np.maximum(length, 1e-300)
    return np.asarray(np.cos(angle)[:, None] * centre + np.sin(angle)[:, None] * across)


def _follow(rays: Array, before: Array, places: tuple[Array, ...], order: int) -> tuple[Array, Flags]:
    """Solve at the next place of a continuation, from the last two solutions continued.

    Args:
        rays: (N, 9) the last solution, replaced; its start columns are kept where none is found.
        before: (N, 3) the start columns of the solution before it.
        places: spin, cos i, sin i, r, n.

    Returns:
        The start columns of the last solution and which rays were found.
    """
    last = rays[:, :3].copy()
    rays[:, :3] += last - before
    spin, cos_i, sin_i, r, n = places
    good = solve_newton(spin, cos_i, sin_i, r, n, rays, _NEWTON_STEPS) & _is_image(rays, order, _SWEPT_SLACK)
    rays[~good, :3] = last[~good]
    return last, good


def _continue(spin: Array, cos_i: Array, sin_i: Array, r: Array, n: Array, order: int) -> tuple[Array, Flags]:
    """Find rays the long way round: slow spin far from the caustic, then the true spin, then the true place.

    The source keeps its distance from the horizon and its angle to the caustic's centre while the spin grows; then it
    is brought back to its place in steps of equal ratio of that angle.
    """
    centre = caustic_centres(_table(), spin, cos_i, sin_i, 1.0 / r, order)
    target = np.arccos(np.clip(np.sum(n * centre, axis=1), -1.0, 1.0))
    far = np.maximum(target, _SAFE_ANGLE)
    outside = r - 1.0 - np.sqrt(1.0 - spin**2)
    rays, before = np.zeros((len(r), 9)), np.zeros((len(r), 3))
    for step in range(_CONTINUATION_STEPS + 1):
        a = spin * (1.0 - (1.0 - _SLOW) * (1.0 - step / _CONTINUATION_STEPS) ** 2)
        radius = outside + 1.0 + np.sqrt(1.0 - a**2)
        sources = _moved(n, caustic_centres(_table(), a, cos_i, sin_i, 1.0 / radius, order), far)
        if step == 0:
            begin = np.full((len(r), 3), np.nan)
            start_rays(_table(), a, cos_i, sin_i, 1.0 / radius, sources, order, begin, rays[:, :3])
            before = rays[:, :3].copy()
        before, good = _follow(rays, before, (a, cos_i, sin_i, radius, sources), order)
    before = rays[:, :3].copy()
    for step in range(1, _CONTINUATION_STEPS + 1):
        share = step / _CONTINUATION_STEPS
        sources = n if step == _CONTINUATION_STEPS else _moved(n, centre, far ** (1 - share) * target**share)
        before, good = _follow(rays, before, (spin, cos_i, sin_i, r, sources), order)
    return rays, good


def solve_rays(
    spin: Array, inclination: Array, r: Array, n: Array, order: int, start: Array | None = None
) -> Rays:
    """Find the rays of one image order from sources to the observer at infinity.

    Args:
        spin: (N,) a, |a| ≤ 0.998.
        inclination: (N,) rad.
        r: (N,) source radii in GM/c², at least 0.5 outside the horizon.
        n: (N, 3) unit vectors of the sources; the observer is at (sin i, 0, cos i).
        order: 0 direct, 1 the next.
        start: (N, 3) near values of (α, β, τ), e.g. those of a neighbouring source; where NaN, or without it, a
            start is made.

    Returns:
        The rays; failures are marked, never NaN.
    """
    cos_i, sin_i = np.cos(inclination), np.sin(inclination)
    rays = np.zeros((len(r), 9))
    begin = np.full((len(r), 3), np.nan) if start is None else start
    start_rays(_table(), spin, cos_i, sin_i, 1.0 / r, n, order, begin, rays[:, :3])
    good = solve_newton(spin, cos_i, sin_i, r, n, rays, _NEWTON_STEPS) & _is_image(rays, order, _SWEPT_SLACK)
    (again,) = np.nonzero(~good)
    if len(again):
        parts = (spin[again], cos_i[again], sin_i[again], r[again], np.ascontiguousarray(n[again]))
        rays[again], good[again] = _continue(*parts, order)
    rays[~good] = 0.0
    alpha, beta, tau, delay, p_r, p_theta, p_phi, signed, swept = rays.T.copy()
    return Rays(alpha, beta, tau, delay, p_r, p_theta, p_phi, np.abs(signed), swept, ~good)
