"""Which light arrives when: the emission times, and the rays, of given arrival times.

t_obs = (t - t0) + D(t) - D(t0) is solved by Newton's method, whose derivative needs no further ray:
dD/dt = -(p_r dr/dt + p_theta dtheta/dt + p_phi dphi/dt).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from emu.raymap.base import RayMap
from emu.source.motion import Motion, Offset, Path, Values
from emu.spacetime.kerr import horizon

__all__ = ["Arrived", "arrive", "reference_delay"]

Array = NDArray[np.float64]
_TOLERANCE = 1e-5  # GM/c3
_MOST_STEPS = 12
_LEAST_GAP = 0.3  # GM/c2 outside the horizon, closer sources are failures
_PATH_VALUES = ("spin", "inclination")
COLUMNS = ("alpha", "beta", "delay", "p_r", "p_theta", "p_phi", "magnification", "swept", "exact")


@dataclass(frozen=True)
class Arrived:
    """Hold the light of N emitters at T arrival times, one image order.

    Args:
        time: (N, T) emission times counted from t0, GM/c3. motion: there, each (N, T).
        rays: (9, N, T) in the order of COLUMNS. start: (N, T, 3) for near sources.
        failed, tube: (N, T) bool.
    """

    time: Array
    motion: Motion
    rays: Array
    start: Array
    failed: NDArray[np.bool_]
    tube: NDArray[np.bool_]

    @property
    def guess(self) -> tuple[Array, Array]:
        """Return times (N, T) and starts (N, T, 3) for near emitters, NaN starts where nothing was found."""
        return self.time, np.where(self.failed[..., None], np.nan, self.start)


@dataclass(frozen=True)
class _Traced:
    columns: Array
    start: Array
    failed: NDArray[np.bool_]
    delay_rate: Array


def _pick(values: Values, path: Path, index: NDArray[np.int64]) -> dict[str, Array]:
    """Return the values that a path needs for the emitters `index`, each of its shape."""
    names = (*_PATH_VALUES, *path.parameter_names, *(name for name in ("spot_size",) if name in values))
    return {name: values[name][index, 0] for name in names}


def _trace(
    path: Path, values: Values, offset: Offset, time: Array, raymap: RayMap, order: int, start: Array | None
) -> _Traced:
    """Trace rays from the path at the emission times (M,); places inside or at the horizon are failures."""
    motion = path.motion(values, time, offset)
    r, n = motion.r, motion.direction
    bad = ~((motion.cylinder > 0.0) & (r > horizon(values["spin"]) + _LEAST_GAP))
    r = np.where(bad, 10.0, r)
    n[bad] = (1.0, 0.0, 0.0)
    bundle = raymap.trace(values["spin"], values["inclination"], r, n, order, start)
    sin_theta = np.hypot(n[:, 0], n[:, 1])
    rate = -(
        bundle.p_r * motion.r_rate
        + bundle.p_theta * motion.theta_rate
        + bundle.p_phi * sin_theta * motion.phi_rate
    )
    columns = np.stack([getattr(bundle, name) for name in COLUMNS])
    return _Traced(columns, bundle.start, bundle.failed | bad, rate)


def reference_delay(
    path: Path, values: Values, raymap: RayMap
) -> tuple[Array, NDArray[np.bool_]]:
    """Return the delay D(t0) of the direct light of the emitters' centres, (N,) GM/c3, and which failed."""
    index = np.arange(len(values["spin"]))
    traced = _trace(path, _pick(values, path, index), Offset(), np.zeros(len(index)), raymap, 0, None)
    return traced.columns[2], traced.failed


def _rough_delay(values: Values, motion: Motion) -> Array:
    """Return the delay of straight light with the logarithmic term of the hole, softened behind it."""
    i = values["inclination"]
    toward = np.einsum("...k,...k->...", motion.direction, np.stack((np.sin(i), 0.0 * i, np.cos(i)), axis=-1))
    return np.asarray(-motion.r * toward - 2.0 * np.log((1.0 + toward) * motion.r + 4.0))


def _rough_times(path: Path, values: Values, offset: Offset, times: Array) -> Array:
    """Return emission times (M,) for arrival times (M,) with the rough delay; good to about GM/c3."""
    zero = _rough_delay(values, path.motion(values, np.zeros_like(times), Offset()))
    time = times.copy()
    for _ in range(4):
        delay = _rough_delay(values, path.motion(values, time, offset)) - zero
        later = _rough_delay(values, path.motion(values, time + 0.1, offset)) - zero
        time -= (time + delay - times) / np.maximum(1.0 + 10.0 * (later - delay), 0.1)
    return time


@njit(cache=True, error_model="numpy")
def _between(node_times, arrivals, slopes, starts, times, guess, start):
    """Invert arrival times by cubic Hermite pieces, and interpolate the rays' starts with four nodes.

    Args:
        node_times, arrivals, slopes: (N, K) emission and arrival times and d arrival/d emission.
        starts: (N, K, 3). times: (N, T). guess: (N, T) and start: (N, T, 3) are written.
    """
    last = node_times.shape[1] - 1
    for i in range(len(times)):
        for j in range(times.shape[1]):
            k = min(max(np.searchsorted(arrivals[i], times[i, j]) - 1, 0), last - 1)
            width = arrivals[i, k + 1] - arrivals[i, k]
            x = min(max((times[i, j] - arrivals[i, k]) / width, -0.5), 1.5) if width > 0.0 else 0.5
            step = node_times[i, k + 1] - node_times[i, k]
            s0, s1 = width / (slopes[i, k] * step), width / (slopes[i, k + 1] * step)
            y = x * x * (3.0 - 2.0 * x) + x * (1.0 - x) * ((1.0 - x) * s0 - x * s1)
            guess[i, j] = node_times[i, k] + y * step
            first = min(max(k - 1, 0), last - 3)
            p = k - first + y
            w = (
                -(p - 1.0) * (p - 2.0) * (p - 3.0) / 6.0,
                p * (p - 2.0) * (p - 3.0) / 2.0,
                -p * (p - 1.0) * (p - 3.0) / 2.0,
                p * (p - 1.0) * (p - 2.0) / 6.0,
            )
            for e in range(3):
                start[i, j, e] = 0.0
                for m in range(4):
                    start[i, j, e] += w[m] * starts[i, first + m, e]


def _first_guess(
    path: Path, values: Values, offset: Offset, times: Array, delay_0: Array, raymap: RayMap, order: int
) -> tuple[Array, Array]:
    """Solve rays at a few emission times of each emitter and interpolate: (N, T) times, (N, T, 3) starts."""
    n, count = times.shape
    nodes = int(np.clip(count // 3, 5, 32))
    ends = np.stack((times.min(axis=1), times.max(axis=1)), axis=1)
    both = np.repeat(np.arange(n), 2)
    rough = _rough_times(path, _pick(values, path, both), offset.of(both), ends.ravel()).reshape(n, 2)
    grid = (rough[:, :1] - 2.0) + (rough[:, 1:] - rough[:, :1] + 4.0) * np.linspace(0.0, 1.0, nodes)
    index = np.repeat(np.arange(n), nodes)
    traced = _trace(path, _pick(values, path, index), offset.of(index), grid.ravel(), raymap, order, None)
    arrivals = grid + traced.columns[2].reshape(n, nodes) - delay_0[:, None]
    slopes = np.maximum(1.0 + traced.delay_rate.reshape(n, nodes), 0.05)
    starts = np.where(traced.failed[:, None], np.nan, traced.start).reshape(n, nodes, 3)
    guess, start = np.empty((n, count)), np.empty((n, count, 3))
    _between(grid, np.maximum.accumulate(arrivals, axis=1), slopes, starts, times, guess, start)
    return guess, start


def _converge(
    path: Path, values: Values, offset: Offset, guess: tuple[Array, Array], goal: Array, raymap: RayMap, order: int
) -> tuple[Array, Array, Array, NDArray[np.bool_]]:
    """Solve time + delay = goal for M rays from a guess of times (M,) and starts (M, 3), each ray until it is done.

    Args:
        values, offset: of each ray, (M,).

    Returns:
        times (M,), columns (9, M), starts (M, 3), failed (M,).
    """
    time, start = guess[0].copy(), guess[1].copy()
    columns, failed = np.zeros((len(COLUMNS), time.size)), np.ones(time.size, bool)
    active = np.arange(time.size)
    for _ in range(_MOST_STEPS):
        picked = {name: value[active] for name, value in values.items()}
        traced = _trace(path, picked, offset.of(active), time[active], raymap, order, start[active])
        gap = time[active] + traced.columns[2] - goal[active]
        done = (np.abs(gap) < _TOLERANCE) & ~traced.failed
        columns[:, active], start[active] = traced.columns, traced.start
        failed[active] = ~done
        going = ~done & ~traced.failed
        time[active[going]] -= (gap / np.maximum(1.0 + traced.delay_rate, 0.05))[going]
        active = active[going]
        if len(active) == 0:
            break
    return time, columns, start, failed


def arrive(
    path: Path,
    values: Values,
    offset: Offset,
    times: Array,
    delay_0: Array,
    raymap: RayMap,
    order: int,
    near: tuple[Array, Array] | None = None,
) -> Arrived:
    """Solve for the light that arrives at given times.

    Args:
        path: of the emitters. values: rad, GM/c2, GM/c3, each (N, 1). offset: of the points from the centres.
        times: (N, T) arrival times counted from t_ref, GM/c3.
        delay_0: (N,) from `reference_delay`.
        raymap: how rays are found. order: image order.
        near: the `guess` of near emitters, to start from.

    Returns:
        Emission times to 1e-5 GM/c3 and the rays there; a time that does not converge is a failure.
    """
    n, count = shape = times.shape
    guess, begin = near or _first_guess(path, values, offset, times, delay_0, raymap, order)
    emitter = np.repeat(np.arange(n), count)
    goal, each, points = times.ravel() + delay_0[emitter], _pick(values, path, emitter), offset.of(emitter)
    start_from = (guess.ravel(), begin.reshape(-1, 3))
    time, columns, start, failed = _converge(path, each, points, start_from, goal, raymap, order)
    motion = path.motion(each, time, points)
    swept = columns[7] * ~failed
    tube = raymap.in_tube(start, swept, each["spin"], each["inclination"], motion.r, motion.direction, order)
    return Arrived(
        time.reshape(shape),
        path.motion(values, time.reshape(shape), offset),
        columns.reshape(len(COLUMNS), *shape),
        start.reshape(*shape, 3),
        failed.reshape(shape),
        tube.reshape(shape),
    )
