"""The random wander that turbulence adds to q and to u: an Ornstein-Uhlenbeck process."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from emu.families.density import Array

__all__ = ["draw_wander"]


def draw_wander(sigma: Array, lifetime: Array, time: Array, mask: NDArray[np.bool_], rng: np.random.Generator) -> Array:
    """Draw one path of the process per flare, exactly, at given times.

    Covariance sigma^2 exp(-|t_i - t_j| / lifetime) (Uhlenbeck & Ornstein 1930): from one time to the next
    it decays by rho = exp(-dt / lifetime) and gains noise of variance sigma^2 (1 - rho^2).

    Args:
        sigma: (B,) standard deviation.
        lifetime: (B,) correlation time, in the unit of time.
        time: (B, R), in any order; equal times get equal values.
        mask: (B, R), True where the value is wanted.
        rng: source of randomness.

    Returns:
        (B, R) float64, zero where the mask is False.
    """
    batch, count = time.shape
    order = np.argsort(np.where(mask, time, np.inf), axis=1, kind="stable")
    # Unwanted entries come last, at the time of the latest wanted one, and never disturb the others.
    latest = np.max(np.where(mask, time, -np.inf), axis=1, initial=-np.inf, keepdims=True)
    ordered = np.take_along_axis(np.where(mask, time, latest), order, axis=1)
    steps = np.diff(np.where(np.isfinite(ordered), ordered, 0.0), axis=1)
    decay = np.exp(-steps / lifetime[:, None])
    gain = np.sqrt(-np.expm1(-2.0 * steps / lifetime[:, None]))
    noise = rng.standard_normal((batch, count))
    path = noise.copy()
    for k in range(1, count):
        path[:, k] = decay[:, k - 1] * path[:, k - 1] + gain[:, k - 1] * noise[:, k]
    drawn = np.empty((batch, count))
    np.put_along_axis(drawn, order, path, axis=1)
    return np.where(mask, sigma[:, None] * drawn, 0.0)
