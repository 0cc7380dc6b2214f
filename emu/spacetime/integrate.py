"""Integration of the ray equations over a given Mino time by fixed steps of eighth order.

The Runge–Kutta coefficients are those of the eighth-order method of Dormand & Prince as scipy ships them (Hairer,
Nørsett & Wanner 1993, II.5). Steps are equal in Mino time, which far from the hole is equal steps of swept angle.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from scipy.integrate import DOP853

from emu.spacetime.equations import LANES, STATES, constants, derivative, initial
from emu.spacetime.kerr import tortoise

__all__ = ["integrate_lanes", "scratch"]

_STAGES = 12
_STATE, _TRIAL, _STEP = _STAGES, _STAGES + 1, _STAGES + 2  # rows of the scratch after those of the stages
_FAST = {"contract", "arcp", "reassoc", "nsz"}


def _sparse_tableau() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """List, for each stage and the final sum, its non-zero coefficients in groups of four padded with zeros."""
    rows = [*DOP853.A[:_STAGES, :_STAGES], DOP853.B]
    columns = np.zeros((len(rows), 12), dtype=np.int64)
    weights = np.zeros((len(rows), 12))
    for i, row in enumerate(rows):
        (used,) = np.nonzero(row)
        columns[i, : len(used)] = used
        weights[i, : len(used)] = row[used]
    groups = (np.count_nonzero(weights, axis=1) + 3) // 4
    return columns, weights, groups


_COLUMNS, _WEIGHTS, _GROUPS = _sparse_tableau()


@njit(cache=True, error_model="numpy")
def scratch():
    """Return the working memory of one call of `integrate_lanes`; its last state row is read by the caller."""
    return np.zeros((_STAGES + 3, STATES * LANES))


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def _combine(work, stage, goal):
    """Write state + step Σ weight · stage to the row `goal`: four stages a pass, so that registers are filled."""
    for m in range(STATES * LANES):
        work[goal, m] = work[_STATE, m]
    for group in range(_GROUPS[stage]):
        g = 4 * group
        c0, c1, c2, c3 = (_COLUMNS[stage, g], _COLUMNS[stage, g + 1], _COLUMNS[stage, g + 2], _COLUMNS[stage, g + 3])
        w0, w1, w2, w3 = (_WEIGHTS[stage, g], _WEIGHTS[stage, g + 1], _WEIGHTS[stage, g + 2], _WEIGHTS[stage, g + 3])
        for m in range(STATES * LANES):
            change = w0 * work[c0, m] + w1 * work[c1, m] + w2 * work[c2, m] + w3 * work[c3, m]
            work[goal, m] += work[_STEP, m] * change


@njit(cache=True, error_model="numpy")
def integrate_lanes(spin, cos_i, sin_i, alpha, beta, tau, steps, work, sign):
    """Follow LANES rays from the observer over the Mino times `tau`.

    Args:
        spin, cos_i, sin_i, alpha, beta, tau: (LANES,) float64; α, β in GM/c².
        steps: number of equal steps.
        work: from `scratch()`.
        sign: (LANES,) receives +1 where T is elapsed time + r*, −1 where it is elapsed time − r*.

    Returns:
        (STATES, LANES) end state (a view of `work`), in the order that `equations` states.
    """
    par = np.empty((16, LANES))
    rows = work.reshape((_STAGES + 3, STATES, LANES))
    y, trial = rows[_STATE], rows[_TRIAL]
    constants(spin, cos_i, sin_i, alpha, beta, par)
    initial(cos_i, sin_i, alpha, beta, y)
    for k in range(LANES):
        sign[k] = 1.0
        for v in range(STATES):
            rows[_STEP, v, k] = tau[k] / steps
    for _ in range(steps):
        for k in range(LANES):
            if sign[k] > 0.0 and y[1, k] < 0.0:
                sign[k] = -1.0
                y[9, k] -= 2.0 * tortoise(spin[k], 1.0 / y[0, k])
        derivative(y, par, sign, rows[0])
        for stage in range(1, _STAGES):
            _combine(work, stage, _TRIAL)
            derivative(trial, par, sign, rows[stage])
        _combine(work, _STAGES, _TRIAL)
        for v in range(STATES):
            for k in range(LANES):
                y[v, k] = trial[v, k]
    return y
