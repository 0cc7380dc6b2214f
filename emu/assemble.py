"""Source times ray map: the curves of a flare. Pure; knows no family."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from emu.arrival import Arrived, arrive, reference_delay
from emu.raymap.base import RayMap
from emu.source.cloud import cloud_points, default_side
from emu.source.light import polarisation_degree, shine
from emu.source.motion import Offset, Values
from emu.source.source import Source

__all__ = ["assemble", "in_radians"]

Array = NDArray[np.float64]
# Values given in degrees at every public surface.
_ANGLES = frozenset({"inclination", "axis_angle", "phase", "tilt", "pitch", "turn", "roll"})
_RAYS_AT_ONCE = 16_384
_SUMS = ("flux", "q", "u", "east", "north")


def in_radians(values: Values) -> dict[str, Array]:
    """Return the values with the angles, given in degrees, in radians."""
    return {name: np.deg2rad(value) if name in _ANGLES else value for name, value in values.items()}


def _flat(values: Values, name: str, shape: tuple[int, ...]) -> Array:
    return np.ascontiguousarray(np.broadcast_to(values[name], shape)).ravel()


def _light(source: Source, values: Values, arrived: Arrived) -> tuple[Array, NDArray[np.bool_]]:
    """Return (7, N, T): flux, Q, U, flux-weighted east and north, redshift, magnification; and what failed."""
    shape = arrived.time.shape
    motion = arrived.motion
    b, strength = source.field(values, arrived.time, motion.cylinder)
    rates = np.stack((motion.r_rate, motion.theta_rate, motion.phi_rate), axis=-1).reshape(-1, 3)
    alpha, beta, _delay, p_r, p_theta, p_phi, magnification, _swept, _exact = arrived.rays
    rays = np.stack((alpha, beta, p_r, p_theta, p_phi, magnification), axis=-1).reshape(-1, 6)
    failed = arrived.failed
    out, timelike = shine(
        _flat(values, "spin", shape), _flat(values, "inclination", shape),
        np.where(failed, 10.0, motion.r).ravel(), motion.direction.reshape(-1, 3), rates, rays,
        b.reshape(-1, 3), np.ravel(strength), _flat(values, "index", shape),
    )  # fmt: skip
    light = np.moveaxis(out.reshape(*shape, 5), -1, 0)
    failed = failed | ~timelike.reshape(shape)
    flux = np.where(failed, 0.0, light[0] * source.brightness(values, arrived.time))
    polarised = flux * polarisation_degree(values["index"]) * values["polarised_share"]
    turn = 2.0 * values["axis_angle"]
    big_q = polarised * (light[1] * np.cos(turn) - light[2] * np.sin(turn))
    big_u = polarised * (light[1] * np.sin(turn) + light[2] * np.cos(turn))
    c, s = np.cos(values["axis_angle"]), np.sin(values["axis_angle"])
    east, north = -alpha * c + beta * s, alpha * s + beta * c
    total = np.stack((flux, big_q, big_u, flux * east, flux * north, light[3], magnification))
    return total, failed


def _points(values: Values, spot_points: int | None) -> tuple[Array, Array]:
    """Return the offsets (P, 3) of a spot's points from its centre, which comes first, and their weights (P,)."""
    if "spot_size" not in values:
        return np.zeros((1, 3)), np.ones(1)
    by_size = default_side(float(np.max(values["spot_size"])))
    side = by_size if spot_points is None else max(1, round(spot_points ** (1.0 / 3.0)))
    return cloud_points(side + 1 - side % 2)


def _groups(points: int, rays: int) -> list[slice]:
    """Cut a spot's points into the centre and groups that are solved together, so that memory stays flat."""
    step = max(1, _RAYS_AT_ONCE // rays)
    return [slice(0, 1), *(slice(first, min(first + step, points)) for first in range(1, points, step))]


def _tiled(array: Array, count: int) -> Array:
    """Repeat an array `count` times along its first axis."""
    return np.tile(array, (count, *(1,) * (array.ndim - 1)))


def _solve_points(
    source: Source, values: Values, offsets: Array, times: Array, delay_0: Array, raymap: RayMap, order: int,
    near: tuple[Array, Array] | None,
) -> tuple[Arrived, Array, NDArray[np.bool_]]:
    """Find the light of P points of N emitters: point by point all emitters, P N rows; see `arrive` and `_light`."""
    count, n = len(offsets), len(times)
    many = {name: _tiled(value, count) for name, value in values.items()}
    offset = Offset(*np.repeat(offsets, n, axis=0).T[..., None])
    guess = None if near is None else (_tiled(near[0], count), _tiled(near[1], count))
    arrived = arrive(
        source.path, many, offset, _tiled(times, count), _tiled(delay_0, count), raymap, order, guess
    )
    return arrived, *_light(source, many, arrived)


def assemble(
    source: Source,
    values: Values,
    times: Array,
    raymap: RayMap,
    orders: int = 1,
    spot_points: int | None = None,
) -> dict[str, Array]:
    """Compute the curves of N emitters at T arrival times each.

    Args:
        source: the emitter's parts.
        values: name -> (N, 1), degrees, GM/c2 and GM/c3; `spot_size` makes a finite spot.
        times: (N, T) arrival times from t_ref, GM/c3.
        raymap: how rays are found.
        orders: number of images added, 1 or 2.
        spot_points: wanted number of points of a spot (the next odd cube is taken); None: by its size.

    Returns:
        (N, T) arrays flux, q, u, east, north (flux-weighted, GM/c2), and of the direct light of the centre
        emission_time, redshift, magnification; (N,) int "failures", rays that could not be solved and add
        nothing, "tube", rays from within a caustic tube, and "exact", rays that were solved, not learned. No NaN.
    """
    radians = in_radians(values)
    delay_0, lost = reference_delay(source.path, radians, raymap)
    offsets, weights = _points(radians, spot_points)
    failures, tube = lost.astype(np.int64), np.zeros(len(times), dtype=np.int64)
    exact = np.zeros(len(times), dtype=np.int64)
    sums = np.zeros((5, *times.shape))
    of_centre: dict[str, Array] = {}
    for order in range(orders):
        near: tuple[Array, Array] | None = None
        for group in _groups(len(offsets), times.size):
            arrived, total, failed = _solve_points(
                source, radians, offsets[group], times, delay_0, raymap, order, near
            )
            near = near or arrived.guess
            shape = (-1, len(offsets[group]), *times.shape)
            sums += np.einsum("p,kpnt->knt", weights[group], total[:5].reshape(shape))
            failures += failed.reshape(shape).sum(axis=(0, 1, 3))
            tube += arrived.tube.reshape(shape).sum(axis=(0, 1, 3))
            exact += np.count_nonzero((arrived.rays[-1] * ~arrived.failed).reshape(shape), axis=(0, 1, 3))
            if not of_centre:
                of_centre = {"emission_time": arrived.time, "redshift": total[5], "magnification": total[6]}
    flux = sums[0]
    fractions = np.divide(sums[1:], flux, out=np.zeros_like(sums[1:]), where=flux > 0.0)
    curves = dict(zip(_SUMS, (flux, *fractions), strict=True))
    return {**curves, **of_centre, "failures": failures, "tube": tube, "exact": exact}
