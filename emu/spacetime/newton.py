"""Newton's method for the rays through given sources: three equations, (α, β, τ) → (u, direction)."""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from emu.spacetime.equations import LANES
from emu.spacetime.integrate import integrate_lanes, scratch
from emu.spacetime.kerr import frame_at, tortoise

__all__ = ["COLUMNS", "solve_newton"]

# What is known of a solved ray: screen position, Mino time, delay, p_r, p_θ, p_φ/sin θ, magnification with its
# parity as sign, swept angle.
COLUMNS = ("alpha", "beta", "tau", "delay", "p_r", "p_theta", "p_phi", "magnification", "swept")
# Of the last step, and of what it mends at the source; the error left is of second order, of μ of first order.
_TOLERANCE = 2e-5
_STEP_ANGLE = 0.55


@njit(cache=True, error_model="numpy")
def _solve_three(m, v, out):
    """Solve the 3 × 3 system m x = v by Cramer's rule and return the determinant."""
    c0 = m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1]
    c1 = m[1, 2] * m[2, 0] - m[1, 0] * m[2, 2]
    c2 = m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0]
    det = m[0, 0] * c0 + m[0, 1] * c1 + m[0, 2] * c2
    d = 1.0 / det if det != 0.0 else np.inf
    e0 = m[0, 2] * m[2, 1] - m[0, 1] * m[2, 2]
    e1 = m[0, 0] * m[2, 2] - m[0, 2] * m[2, 0]
    e2 = m[0, 1] * m[2, 0] - m[0, 0] * m[2, 1]
    f0 = m[0, 1] * m[1, 2] - m[0, 2] * m[1, 1]
    f1 = m[0, 2] * m[1, 0] - m[0, 0] * m[1, 2]
    f2 = m[0, 0] * m[1, 1] - m[0, 1] * m[1, 0]
    out[0] = d * (c0 * v[0] + e0 * v[1] + f0 * v[2])
    out[1] = d * (c1 * v[0] + e1 * v[1] + f1 * v[2])
    out[2] = d * (c2 * v[0] + e2 * v[1] + f2 * v[2])
    return det


@njit(cache=True, error_model="numpy")
def _basis(n, basis):
    """Write the unit vectors of θ and φ at the direction n; on the axis φ = 0 is taken."""
    rho = math.hypot(n[0], n[1])
    c, s = (n[0] / rho, n[1] / rho) if rho > 1e-12 else (1.0, 0.0)
    basis[0, 0], basis[0, 1], basis[0, 2] = n[2] * c, n[2] * s, -rho
    basis[1, 0], basis[1, 1], basis[1, 2] = -s, c, 0.0


@njit(cache=True, error_model="numpy")
def _turned(y, row, lift, n, cd, sd, basis, out, column):
    """Project a change of the undragged direction, plus a drag `lift`, on the basis at the source."""
    x = y[row, 0] - lift * n[1]
    w = y[row + 1, 0] + lift * n[0]
    z = y[row + 2, 0]
    for e in range(2):
        out[1 + e, column] = basis[e, 0] * (cd * x - sd * w) + basis[e, 1] * (sd * x + cd * w) + basis[e, 2] * z


@njit(cache=True, error_model="numpy")
def _linearise(y, a, lam, basis, source, u_source, matrix, residual, ray):
    """Fill the matrix ∂(u, direction)/∂(α, β, τ) and the residual of one lane; `ray` receives what else is needed.

    ray (8,): the direction at its end, the tangent on the basis (2), p_r, the cosine between end and source, δ'.
    """
    u = y[0, 0]
    n = (y[2, 0], y[3, 0], y[4, 0])
    cd, sd = math.cos(y[8, 0]), math.sin(y[8, 0])
    matrix[0, 0], matrix[0, 1], matrix[0, 2] = y[10, 0], y[19, 0], y[1, 0]
    _turned(y, 12, y[18, 0], n, cd, sd, basis, matrix, 0)
    _turned(y, 21, y[27, 0], n, cd, sd, basis, matrix, 1)
    _turned(y, 5, 0.0, n, cd, sd, basis, matrix, 2)
    ray[3], ray[4] = matrix[1, 2], matrix[2, 2]
    drag = -a * (2.0 * u - a * lam * u * u) / (1.0 - 2.0 * u + a * a * u * u)
    _turned(y, 5, drag, n, cd, sd, basis, matrix, 2)
    ray[0], ray[1], ray[2] = cd * n[0] - sd * n[1], sd * n[0] + cd * n[1], n[2]
    ray[5] = y[1, 0] / (1.0 - 2.0 * u + a * a * u * u)
    ray[7] = drag
    dot = ray[0] * source[0] + ray[1] * source[1] + ray[2] * source[2]
    ray[6] = dot
    chord_1 = -(basis[0, 0] * ray[0] + basis[0, 1] * ray[1] + basis[0, 2] * ray[2])
    chord_2 = -(basis[1, 0] * ray[0] + basis[1, 1] * ray[1] + basis[1, 2] * ray[2])
    length = math.hypot(chord_1, chord_2)
    scale = math.atan2(length, dot) / length if length > 1e-9 else 1.0
    residual[0], residual[1], residual[2] = u_source - u, chord_1 * scale, chord_2 * scale


@njit(cache=True, error_model="numpy")
def _magnification(a, cos_theta, r, out, matrix, move, one, two):
    """Return ±|d(α, β)/dA⊥|: two displacements orthogonal to the photon for the zero-angular-momentum observer."""
    _lapse, _omega, root_rr, root_tt, varpi, _delta = frame_at(a, r, cos_theta)
    k0, k1, k2 = out[4] / root_rr, out[5] / root_tt, out[6] / varpi
    length = math.sqrt(k0 * k0 + k1 * k1 + k2 * k2)
    k0, k1, k2 = k0 / length, k1 / length, k2 / length
    if abs(k0) < 0.6:
        f0, f1, f2 = 1.0 - k0 * k0, -k0 * k1, -k0 * k2
    elif abs(k1) < 0.6:
        f0, f1, f2 = -k1 * k0, 1.0 - k1 * k1, -k1 * k2
    else:
        f0, f1, f2 = -k2 * k0, -k2 * k1, 1.0 - k2 * k2
    length = math.sqrt(f0 * f0 + f1 * f1 + f2 * f2)
    f0, f1, f2 = f0 / length, f1 / length, f2 / length
    square = r * r
    move[0], move[1], move[2] = -f0 / (root_rr * square), f1 / root_tt, f2 / varpi
    _solve_three(matrix, move, one)
    s0, s1, s2 = k1 * f2 - k2 * f1, k2 * f0 - k0 * f2, k0 * f1 - k1 * f0
    move[0], move[1], move[2] = -s0 / (root_rr * square), s1 / root_tt, s2 / varpi
    _solve_three(matrix, move, two)
    return one[0] * two[1] - one[1] * two[0]


@njit(cache=True, error_model="numpy")
def _swept(y, cos_i, sin_i, alpha, beta, tau):
    """Return the angle swept about the hole, the drag apart, in the plane of the line of sight and the start."""
    b = math.hypot(alpha, beta)
    if b < 1e-12:
        return 0.0
    along = y[2, 0] * sin_i + y[4, 0] * cos_i
    across = (-y[2, 0] * beta * cos_i + y[3, 0] * alpha + y[4, 0] * beta * sin_i) / b
    angle = math.atan2(across, along)
    return angle + 2.0 * math.pi * round((b * tau - angle) / (2.0 * math.pi))


@njit(cache=True, error_model="numpy")
def _momentum(y, a, eta, lam, r, basis, change, ray, out):
    """Write p_r, p_θ, p_φ/sin θ of the photon at the source: the ray's end, moved by the last change of (α, β, τ)."""
    da, db, dt = change[0], change[1], change[2]
    u, z = y[0, 0], y[4, 0]
    k = eta + lam * lam + 2.0 * a * a * z * z
    bend = (a * a - lam * lam - eta) * u + 3.0 * (eta + (lam - a) ** 2) * u * u - 2.0 * a * a * eta * u**3
    out[4] = (y[1, 0] + y[11, 0] * da + y[20, 0] * db + bend * dt) * r * r / (r * r - 2.0 * r + a * a)
    turn = y[8, 0] + y[18, 0] * da + y[27, 0] * db + ray[7] * dt
    ct, st = math.cos(turn), math.sin(turn)
    tx = y[5, 0] + y[15, 0] * da + y[24, 0] * db - k * y[2, 0] * dt
    ty = y[6, 0] + y[16, 0] * da + y[25, 0] * db - k * y[3, 0] * dt
    tz = y[7, 0] + y[17, 0] * da + y[26, 0] * db - (k - a * a) * z * dt
    tx, ty = ct * tx - st * ty, st * tx + ct * ty
    out[5] = -(basis[0, 0] * tx + basis[0, 1] * ty + basis[0, 2] * tz)
    out[6] = -(basis[1, 0] * tx + basis[1, 1] * ty)


@njit(cache=True, error_model="numpy")
def _delay(y, a, sign, r, residual, ray, out):
    """Return the delay at the source: that at the ray's end less p·dx, with the mean of the two momenta."""
    end = 1.0 / y[0, 0]
    elapsed = y[9, 0] - sign * tortoise(a, end)
    radial = 0.5 * (out[4] + ray[5]) * (r - end)
    across = 0.5 * ((out[5] - ray[3]) * residual[1] + (out[6] - ray[4]) * residual[2])
    return elapsed - radial - across


@njit(cache=True, error_model="numpy")
def _lane(y, a, cos_i, sin_i, sign, r, source, row, memory):
    """Make one Newton step for one ray and, where it was the last, finish the ray.

    Args:
        y: (STATES, 1) end state of the ray. row: (9,) the ray's columns, changed in place.
        memory: (12, 3) scratch.

    Returns:
        0 to go on, 1 when done, 2 when the ray fell in.
    """
    matrix, residual, change, basis, ray = memory[0:3], memory[3], memory[4], memory[5:7], memory[7:10].reshape(9)
    move, one, two = memory[10], memory[11], memory[12]
    alpha, beta, tau = row[0], row[1], row[2]
    u = y[0, 0]
    if not (-0.3 < u < 0.999 / (1.0 + math.sqrt(1.0 - a * a))):  # below zero: past infinity, still regular
        return 2
    lam = -alpha * sin_i
    _basis(source, basis)
    _linearise(y, a, lam, basis, source, 1.0 / r, matrix, residual, ray)
    det = _solve_three(matrix, residual, change)
    size = math.hypot(change[0], change[1])
    b = math.hypot(alpha, beta)
    if not (size < 1e6) or det == 0.0:
        return 2
    limit = min(1.0, 0.4 * max(b, 0.5) / (size + 1e-300), 0.3 * tau / (abs(change[2]) + 1e-300))
    if limit < 1.0:
        for e in range(3):
            row[e] += limit * change[e]
        return 0
    for e in range(3):
        row[e] += change[e]
    missed = max(math.hypot(residual[1], residual[2]), abs(residual[0]) * r)
    if size > _TOLERANCE * (1.0 + b) or abs(change[2]) > _TOLERANCE * tau or missed > _TOLERANCE or ray[6] < 0.0:
        return 0
    eta = (row[0] ** 2 - a * a) * cos_i**2 + row[1] ** 2
    _momentum(y, a, eta, -row[0] * sin_i, r, basis, change, ray, row)
    row[3] = _delay(y, a, sign, r, residual, ray, row)
    row[7] = _magnification(a, source[2], r, row, matrix, move, one, two)
    row[8] = _swept(y, cos_i, sin_i, row[0], row[1], row[2])
    return 1


@njit(cache=True, error_model="numpy")
def _back_off(row, good, tried):
    """Move a ray that fell in towards its last good place, or outwards where it had none."""
    for e in range(3):
        if tried:
            row[e] = good[e] + 0.4 * (row[e] - good[e])
        else:
            row[e] *= 1.15 if e < 2 else 1.0 / 1.15


@njit(cache=True, error_model="numpy")
def solve_newton(spin, cos_i, sin_i, r, n, rays, most):
    """Solve for the rays from the starts in the first three columns of `rays`, LANES at a time.

    Args:
        spin, cos_i, sin_i, r: (N,) float64; n: (N, 3) unit vectors of the sources.
        rays: (N, 9) float64, columns `COLUMNS`; (α, β, τ) are read as starts, all columns are written.
        most: the largest number of Newton steps.

    Returns:
        (N,) bool, True where the ray converged; the columns of other rays are meaningless.
    """
    count = len(r)
    done = np.zeros(count, dtype=np.bool_)
    active = np.arange(count)
    left = count
    lanes = np.empty((6, LANES))
    sign = np.empty(LANES)
    work = scratch()
    memory = np.empty((13, 3))
    good = np.empty((count, 3))
    tried = np.zeros(count, dtype=np.bool_)
    for _ in range(most):
        kept = 0
        for first in range(0, left, LANES):
            longest = 0.0
            for k in range(LANES):
                j = active[min(first + k, left - 1)]
                lanes[0, k], lanes[1, k], lanes[2, k] = spin[j], cos_i[j], sin_i[j]
                lanes[3, k], lanes[4, k], lanes[5, k] = rays[j, 0], rays[j, 1], rays[j, 2]
                longest = max(longest, math.hypot(rays[j, 0], rays[j, 1]) * rays[j, 2])
            steps = 3 + int(min(longest, 20.0) / _STEP_ANGLE)
            y = integrate_lanes(lanes[0], lanes[1], lanes[2], lanes[3], lanes[4], lanes[5], steps, work, sign)
            for k in range(min(LANES, left - first)):
                j = active[first + k]
                start = (rays[j, 0], rays[j, 1], rays[j, 2])
                state = _lane(y[:, k : k + 1], spin[j], cos_i[j], sin_i[j], sign[k], r[j], n[j], rays[j], memory)
                if state == 1:
                    done[j] = True
                    continue
                if state == 0:
                    good[j] = start
                    tried[j] = True
                else:
                    _back_off(rays[j], good[j], tried[j])
                active[kept] = j
                kept += 1
        left = kept
        if left == 0:
            break
    return done
