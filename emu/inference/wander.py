"""The density of rows whose q or u wanders, in a time proportional to their number."""

from __future__ import annotations

import math

import numba
import numpy as np

from emu.families.density import Array

__all__ = ["wander_log_density"]


def wander_log_density(
    residual: Array, variance: Array, lever: Array, time: Array, sigma: Array, lifetime: Array
) -> Array:
    """Integrate an Ornstein-Uhlenbeck process out of Gaussian rows, exactly.

    Row i is lever_i x(t_i) + noise of variance_i, with cov(x(t), x(t')) = sigma^2 exp(-|t - t'| / lifetime).
    The process is Markov, so a scalar Kalman filter (Kalman 1960; Rybicki & Press 1995 for this covariance)
    gives the density of the dense covariance with R steps. The cost of R = 30 rows is about a microsecond
    per parameter vector.

    Args:
        residual, variance, lever: (N, R) measured less expected; independent variance, > 0; effect of x.
        time: (R,) in any order, repeats allowed.
        sigma, lifetime: (N,) of the process, in the unit of q and u and of time.

    Returns:
        (N,) log density.
    """
    order = np.argsort(time, kind="stable")
    steps = np.diff(time[order], prepend=time[order[:1]])
    return _filter(
        np.ascontiguousarray(residual[:, order]),
        np.ascontiguousarray(variance[:, order]),
        np.ascontiguousarray(lever[:, order]),
        steps,
        np.ascontiguousarray(sigma),
        np.ascontiguousarray(lifetime),
    )


@numba.njit(cache=True)
def _filter(residual: Array, variance: Array, lever: Array, steps: Array, sigma: Array, lifetime: Array) -> Array:
    """Run the filter over rows in order of time, for each parameter vector."""
    total = np.empty(residual.shape[0])
    for n in range(residual.shape[0]):
        stationary = sigma[n] ** 2
        mean, spread, log_density = 0.0, stationary, 0.0
        for k in range(residual.shape[1]):
            decay = math.exp(-steps[k] / lifetime[n])
            mean *= decay
            spread = stationary + decay * decay * (spread - stationary)
            innovation = residual[n, k] - lever[n, k] * mean
            width = lever[n, k] ** 2 * spread + variance[n, k]
            log_density -= 0.5 * (innovation * innovation / width + math.log(2.0 * math.pi * width))
            gain = spread * lever[n, k] / width
            mean += gain * innovation
            spread *= variance[n, k] / width
        total[n] = log_density
    return total
