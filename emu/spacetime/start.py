"""Starting values for the rays that join a source to the observer.

Without spin a ray is fixed by u = 1/r and the swept angle Ψ: d²u/dΨ² = −u + 3u², du/dΨ = 1/b at infinity. Its impact
parameter is tabulated once, divided by that of a thin lens, together with the angle by which a slowly spinning
hole drags it, ∫2u/(1 − 2u) dτ. With spin the source is first turned back by that angle, which moves the caustic
to its place; the impact parameter is then shifted along the equator as the deflection demands.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

__all__ = ["caustic_centres", "critical_impact", "start_rays", "zero_spin_table"]

_N_U, _N_PSI = 40, 64
_S_LOW, _S_HIGH = math.sqrt(1e-3), math.sqrt(0.42)
_MARGIN = 0.02  # of Ψ at both ends: at 0 and 2π the ray is radial
_CRITICAL = math.sqrt(27.0)


@njit(cache=True, error_model="numpy")
def _rough_impact(u: float, psi: float, order: int) -> float:
    """Return a rough impact parameter that carries the steep dependence on distance and angle.

    Order 0: a lens of deflection 4/b, b = (x + √(x² + 8r(1 − cos Ψ)))/2 with x = r sin Ψ. Order 1: the other image
    of that lens, with the critical impact parameter added in quadrature.
    """
    if order == 0:
        x = math.sin(psi) / u
        return 0.5 * (x + math.sqrt(x * x + 8.0 * (1.0 - math.cos(psi)) / u))
    x = (psi - math.pi) / u
    weak = 8.0 / u / (x + math.sqrt(x * x + 16.0 / u))
    return math.sqrt(weak * weak + 27.0)


@njit(cache=True, error_model="numpy")
def _shoot(b: float, psi: float) -> tuple[float, float]:
    """Return u after the swept angle Ψ (2 where the ray has fallen in) and the drag ∫2u/(1 − 2u) dτ."""
    u, v, drag = 0.0, 1.0 / b, 0.0
    steps = 48
    h = psi / steps
    for _ in range(steps):
        a1 = -u + 3.0 * u * u
        u2, v2 = u + 0.5 * h * v, v + 0.5 * h * a1
        a2 = -u2 + 3.0 * u2 * u2
        u3, v3 = u + 0.5 * h * v2, v + 0.5 * h * a2
        a3 = -u3 + 3.0 * u3 * u3
        u4, v4 = u + h * v3, v + h * a3
        a4 = -u4 + 3.0 * u4 * u4
        middle = 0.5 * (u2 + u3)
        drag += h / b * (2.0 * middle / (1.0 - 2.0 * min(middle, 0.49)))
        u += h * (v + 2.0 * v2 + 2.0 * v3 + v4) / 6.0
        v += h * (a1 + 2.0 * a2 + 2.0 * a3 + a4) / 6.0
        if u > 0.49 or not (u > -1.0):
            return 2.0, drag
    return u, drag


@njit(cache=True, error_model="numpy")
def _grid_angle(order: int, j: float) -> float:
    return math.pi * order + _MARGIN + (math.pi - 2.0 * _MARGIN) * j / (_N_PSI - 1)


@njit(cache=True, error_model="numpy")
def zero_spin_table():
    """Tabulate b over its rough value, and the drag, on a grid of (√u, Ψ) for both orders.

    Returns:
        (2 orders, 2, 40, 64) float64.
    """
    table = np.empty((2, 2, _N_U, _N_PSI))
    for order in range(2):
        for i in range(_N_U):
            s = _S_LOW + (_S_HIGH - _S_LOW) * i / (_N_U - 1)
            for j in range(_N_PSI):
                psi = _grid_angle(order, j)
                rough = _rough_impact(s * s, psi, order)
                low, high = 0.3, 3.0  # u falls with b, so halve the interval of b
                for _ in range(40):
                    middle = math.sqrt(low * high)
                    if _shoot(rough * middle, psi)[0] > s * s:
                        low = middle
                    else:
                        high = middle
                table[order, 0, i, j] = high
                table[order, 1, i, j] = _shoot(rough * high, psi)[1]
    return table


@njit(cache=True, error_model="numpy")
def _look_up(table, u, psi, order):
    """Interpolate b and the drag linearly; beyond the edges the nearest cell is continued flat."""
    s = (math.sqrt(u) - _S_LOW) / (_S_HIGH - _S_LOW) * (_N_U - 1)
    p = (psi - math.pi * order - _MARGIN) / (math.pi - 2.0 * _MARGIN) * (_N_PSI - 1)
    s = min(max(s, 0.0), _N_U - 1.000001)
    p = min(max(p, 0.0), _N_PSI - 1.000001)
    i, j = int(s), int(p)
    f, g = s - i, p - j
    weights = ((1 - f) * (1 - g), (1 - f) * g, f * (1 - g), f * g)
    ratio, drag = 0.0, 0.0
    for corner in range(4):
        ii, jj = i + corner // 2, j + corner % 2
        ratio += weights[corner] * table[order, 0, ii, jj]
        drag += weights[corner] * table[order, 1, ii, jj]
    return ratio * _rough_impact(u, psi, order), drag


@njit(cache=True, error_model="numpy")
def critical_impact(a, cos_i, sin_i, right, up):
    """Return the distance of the critical curve from the screen's origin in the direction (right, up).

    There the radial potential u'² = 1 + (a² − λ² − η)u² + 2(η + (λ − a)²)u³ − a²ηu⁴ has a double root in u
    (Bardeen 1973); both conditions are solved by Newton's method from the values without spin.
    """
    b, u = _CRITICAL + 2.0 * a * sin_i * right, 1.0 / 3.0
    lam_1 = -right * sin_i
    eta_2 = (right * cos_i) ** 2 + up * up
    for _ in range(8):
        lam, eta = b * lam_1, b * b * eta_2 - (a * cos_i) ** 2
        lam_b, eta_b = lam_1, 2.0 * b * eta_2
        c1, q, c4 = a * a - lam * lam - eta, eta + (lam - a) ** 2, a * a * eta
        c1_b, q_b, c4_b = -2.0 * lam * lam_b - eta_b, eta_b + 2.0 * (lam - a) * lam_b, a * a * eta_b
        f = 1.0 + u * u * (c1 + u * (2.0 * q - c4 * u))
        g = c1 + u * (3.0 * q - 2.0 * c4 * u)  # the slope over 2u
        f_b = u * u * (c1_b + u * (2.0 * q_b - c4_b * u))
        g_b = c1_b + u * (3.0 * q_b - 2.0 * c4_b * u)
        f_u, g_u = 2.0 * u * g, 3.0 * q - 4.0 * c4 * u
        det = f_b * g_u - f_u * g_b
        b -= min(1.0, max(-1.0, (f * g_u - f_u * g) / det))
        u -= min(0.1, max(-0.1, (f_b * g - f * g_b) / det))
    return b if 1.0 < b < 9.0 else _CRITICAL + 2.0 * a * sin_i * right


@njit(cache=True, error_model="numpy")
def start_rays(table, spin, cos_i, sin_i, u, n, order, given, out):
    """Write (α, β, τ) for rays of the given image order to `out` (N, 3).

    Args:
        table: from `zero_spin_table()`.
        spin, cos_i, sin_i, u: (N,) float64; n: (N, 3) unit vectors of the sources; order: 0 or 1.
        given: (N, 3) starts that are kept where they are not NaN.
    """
    for k in range(len(u)):
        if not math.isnan(given[k, 0]):
            out[k] = given[k]
            continue
        a, c, s = spin[k], cos_i[k], sin_i[k]
        # the same distance from a horizon at r = 2
        flat = 1.0 / (1.0 / u[k] + 1.0 - math.sqrt(1.0 - a * a))
        psi, b, drag, x, y = 0.0, 1.0, 0.0, 0.0, 0.0
        for _ in range(2 + 2 * order):
            ct, st = math.cos(a * drag), math.sin(a * drag)
            x, y = n[k, 0] * ct - n[k, 1] * st, n[k, 0] * st + n[k, 1] * ct
            psi = math.acos(min(1.0, max(-1.0, x * s + n[k, 2] * c)))
            if order == 1:
                psi = 2.0 * math.pi - psi
            psi = max(psi, 1e-9)
            b, drag = _look_up(table, flat, psi, order)
        right, up = y, n[k, 2] * s - x * c
        length = math.hypot(right, up)
        right, up = (right / length, up / length) if length > 1e-12 else (1.0, 0.0)
        if order == 1:
            right, up = -right, -up
        behind = 0.5 * (1.0 - math.cos(min(psi, math.pi)))
        near = min(1.0, (_CRITICAL / b) ** 4)
        b += (critical_impact(a, c, s, right, up) - _CRITICAL) * behind * 0.5 * (1.0 + near)
        out[k, 0], out[k, 1], out[k, 2] = b * right, b * up, psi / b


@njit(cache=True, error_model="numpy")
def caustic_centres(table, spin, cos_i, sin_i, u, order):
    """Return the directions (N, 3) about which the caustic that ends the given order lies: behind the hole for order
    0, before it for order 1, turned by the drag of first order in spin."""
    centres = np.empty((len(u), 3))
    side = -1.0 if order == 0 else 1.0
    for k in range(len(u)):
        flat = 1.0 / (1.0 / u[k] + 1.0 - math.sqrt(1.0 - spin[k] * spin[k]))
        drag = spin[k] * _look_up(table, flat, math.pi * (order + 1), order)[1]
        centres[k, 0] = side * sin_i[k] * math.cos(drag)
        centres[k, 1] = -side * sin_i[k] * math.sin(drag)
        centres[k, 2] = side * cos_i[k]
    return centres
