"""Null rays of Kerr by Hamilton's equations in Cartesian Kerr-Schild coordinates, with scipy's DOP853.

Outgoing Kerr-Schild form g_ab = eta_ab + f l_a l_b, l_a = (-1, n) (Kerr 1963; Visser 2007, arXiv:0706.0622,
with the sign of time reversed), regular at the axis and at the past horizon, where rays traced back from an
observer may come near. Nothing here is separable, has turning points or knows Carter's constant: it
shares no formula with a solution in Boyer-Lindquist coordinates. Carried along a ray: position, momentum,
two deviation vectors (derivatives with respect to the screen coordinates alpha and beta) and two vectors
in parallel transport (the screen's right and up). G = c = M = 1, angles in radians.
"""

import math
from dataclasses import dataclass

import numpy as np
from numba import njit
from scipy.integrate import solve_ivp

from tests.reference.jets import multiply, power, variable

__all__ = ["Ray", "metric", "shoot", "slopes", "start"]

#: State: x (0:4), p_i (4:7), (dx, dp_i) for alpha (7:14) and beta (14:21), screen right (21:25), up (25:29).
FULL = 29


@njit(cache=True)
def field(x: float, y: float, z: float, spin: float) -> tuple[np.ndarray, np.ndarray]:
    """Return the jets of f (10,) and of the unit vector n (3, 10) at a Kerr-Schild point."""
    jx, jy, jz = variable(x, 0), variable(y, 1), variable(z, 2)
    z2 = multiply(jz, jz)
    s = multiply(jx, jx) + multiply(jy, jy) + z2
    s[0] -= spin * spin
    r2 = 0.5 * (s + power(multiply(s, s) + 4.0 * spin * spin * z2, 0.5))
    r = power(r2, 0.5)
    f = 2.0 * multiply(multiply(r2, r), power(multiply(r2, r2) + spin * spin * z2, -1.0))
    wide = r2.copy()
    wide[0] += spin * spin
    inverse = power(wide, -1.0)
    n = np.empty((3, 10))
    n[0] = multiply(multiply(r, jx) - spin * jy, inverse)
    n[1] = multiply(multiply(r, jy) + spin * jx, inverse)
    n[2] = multiply(jz, power(r, -1.0))
    return f, n


@njit(cache=True)
def hessian(jet: np.ndarray, d: np.ndarray) -> np.ndarray:
    """Return the Hessian of a jet applied to the vector d (3,)."""
    return np.array(
        [
            jet[4] * d[0] + jet[5] * d[1] + jet[6] * d[2],
            jet[5] * d[0] + jet[7] * d[1] + jet[8] * d[2],
            jet[6] * d[0] + jet[8] * d[1] + jet[9] * d[2],
        ]
    )


@njit(cache=True)
def metric(x: np.ndarray, spin: float) -> np.ndarray:
    """Return the covariant metric (4, 4) at x (4,)."""
    f, n = field(x[1], x[2], x[3], spin)
    low = np.array([-1.0, n[0, 0], n[1, 0], n[2, 0]])
    g = f[0] * np.outer(low, low)
    for a in range(4):
        g[a, a] += -1.0 if a == 0 else 1.0
    return g


@njit(cache=True)
def transport(f: np.ndarray, n: np.ndarray, k: np.ndarray, v: np.ndarray) -> np.ndarray:
    """Return dv^a/ds = -Gamma^a_bc k^b v^c from the gradients of f and n."""
    low = np.array([-1.0, n[0, 0], n[1, 0], n[2, 0]])
    slope = np.zeros((4, 4, 4))
    for c in range(1, 4):
        for a in range(4):
            da = n[a - 1, c] if a > 0 else 0.0
            for b in range(4):
                db = n[b - 1, c] if b > 0 else 0.0
                slope[c, a, b] = f[c] * low[a] * low[b] + f[0] * (da * low[b] + low[a] * db)
    lowered = np.zeros(4)
    for a in range(4):
        for b in range(4):
            for c in range(4):
                lowered[a] += 0.5 * (slope[b, a, c] + slope[c, a, b] - slope[a, b, c]) * k[b] * v[c]
    raised = lowered.copy()
    raised[0] = -raised[0]
    up = np.array([1.0, n[0, 0], n[1, 0], n[2, 0]])
    return -(raised - f[0] * np.dot(up, lowered) * up)


@njit(cache=True)
def slopes(state: np.ndarray, spin: float) -> np.ndarray:
    """Return d(state)/ds from H = g^ab p_a p_b / 2 with p_t = -1; deviations by the linearised flow."""
    f, n = field(state[1], state[2], state[3], spin)
    value = np.ascontiguousarray(n[:, 0])
    grad = np.ascontiguousarray(n[:, 1:4])
    fgrad = f[1:4]
    p = state[4:7]
    w = -1.0 + np.dot(value, p)
    wgrad = np.dot(p, grad)
    out = np.empty_like(state)
    k = np.empty(4)
    k[0] = 1.0 - f[0] * w
    k[1:] = p - f[0] * w * value
    out[:4] = k
    out[4:7] = 0.5 * fgrad * w * w + f[0] * w * wgrad
    for first in range(7, min(state.size, 21), 7):
        d, dp = state[first + 1 : first + 4], state[first + 4 : first + 7]
        df, dw = np.dot(fgrad, d), np.dot(value, dp) + np.dot(wgrad, d)
        out[first] = -(df * w + f[0] * dw)
        out[first + 1 : first + 4] = dp - (df * w + f[0] * dw) * value - f[0] * w * np.dot(grad, d)
        bend = p[0] * hessian(n[0], d) + p[1] * hessian(n[1], d) + p[2] * hessian(n[2], d)
        out[first + 4 : first + 7] = (
            0.5 * w * w * hessian(f, d)
            + fgrad * w * dw
            + (df * w + f[0] * dw) * wgrad
            + f[0] * w * (bend + np.dot(dp, grad))
        )
    for first in range(21, state.size, 4):
        out[first : first + 4] = transport(f, n, k, state[first : first + 4])
    return out


def far_radius(r: float) -> float:
    """Return the radius of the observer for a source at r: there the corrections left out are below 1e-7."""
    return 1e4 * max(1.0, r / 30.0)


def screen_axes(inclination: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the unit vectors towards the observer, to the screen's right and up, each (3,)."""
    sin, cos = math.sin(inclination), math.cos(inclination)
    return np.array([sin, 0.0, cos]), np.array([0.0, 1.0, 0.0]), np.array([-cos, 0.0, sin])


def _start_ray(spin: float, inclination: float, alpha: float, beta: float, far: float) -> np.ndarray:
    """Return (x, p_i) (7,) where the ray that reaches (alpha, beta) crosses |x| = far.

    A straight line in these coordinates at the time of a plane wave front (exact for a radial ray; the rest
    is of order spin b / far^2 and b^2 / far^3), with angular momentum b about the centre and the radial
    momentum from H = 0.
    """
    toward, right, up = screen_axes(inclination)
    offset = alpha * right + beta * up
    b2 = alpha**2 + beta**2
    along = math.sqrt(far**2 - b2)
    place = along * toward + offset
    f, n = field(place[0], place[1], place[2], spin)
    radial = place / far
    across = (b2 * toward - along * offset) / far**2
    c0, c1 = -1.0 + n[:, 0] @ across, n[:, 0] @ radial
    qa, qb, qc = 1.0 - f[0] * c1**2, -2.0 * f[0] * c0 * c1, across @ across - 1.0 - f[0] * c0**2
    size = (-qb + math.sqrt(qb**2 - 4.0 * qa * qc)) / (2.0 * qa)
    lag = -b2 / (along + far)  # sqrt(far^2 - b^2) - far without cancellation
    return np.concatenate([[lag], place, size * radial + across])


def start(
    spin: float, inclination: float, alpha: float, beta: float, far: float, size: int = FULL
) -> np.ndarray:
    """Return the first `size` entries of the state at the observer.

    7 entries are the ray, 21 with the deviations, 29 with the screen's axes.
    """
    state = np.zeros(FULL)
    state[:7] = _start_ray(spin, inclination, alpha, beta, far)
    h = 0.1  # the start is smooth on the scale `far`, so a wide step costs nothing and saves digits
    for first, (da, db) in ((7, (h, 0.0)), (14, (0.0, h))):
        plus = _start_ray(spin, inclination, alpha + da, beta + db, far)
        minus = _start_ray(spin, inclination, alpha - da, beta - db, far)
        state[first : first + 7] = (plus - minus) / (2.0 * h)
    g = metric(state[:4], spin)
    k = slopes(state[:7].copy(), spin)[:4]
    for first, axis in zip((21, 25), screen_axes(inclination)[1:], strict=True):
        vector = np.concatenate([[0.0], axis])
        vector[0] -= (vector @ g @ k) / (g[0] @ k)
        state[first : first + 4] = vector / math.sqrt(vector @ g @ vector)
    return state[:size].copy()


@dataclass(frozen=True)
class Ray:
    """A ray at the far end of its integration, seen from the observer.

    Attributes:
        x: Kerr-Schild position (4,); x[0] counts from the wave front through the hole's place.
        p: covariant momentum (4,), p[0] = -1.
        k: contravariant momentum (4,).
        d_alpha, d_beta: derivatives of x with respect to the screen coordinates (4,).
        right, up: the screen's axes in parallel transport (4,); zero length arrays if not asked for.
        index: number of conjugate points met (sign changes of the cross-section); the image order.
        spread: signed cross-section of the bundle per unit of screen area: 1 / magnification.
    """

    x: np.ndarray
    p: np.ndarray
    k: np.ndarray
    d_alpha: np.ndarray
    d_beta: np.ndarray
    right: np.ndarray
    up: np.ndarray
    index: int
    spread: float


def cross_section(state: np.ndarray, spin: float) -> float:
    """Return the signed area of the ray bundle per unit of screen area.

    eps(w, k, J_alpha, J_beta) / (w . k) is the same for every w, since k . J = 0 (sqrt(-g) = 1 here); w is
    the time direction orthogonal to the slices of constant coordinate time.
    """
    k = slopes(state[:7].copy(), spin)[:4]
    f, n = field(state[1], state[2], state[3], spin)
    normal = np.concatenate([[1.0 + f[0]], f[0] * n[:, 0]])
    block = np.array([normal, k, state[7:11], state[14:18]])
    return float(np.linalg.det(block) / k[0])  # -normal . k = k^t


def shoot(
    spin: float,
    inclination: float,
    alpha: float,
    beta: float,
    length: float,
    far: float,
    rtol: float = 1e-12,
    screen: bool = False,
) -> Ray | None:
    """Integrate a ray back from the observer over the affine `length`; None where the integrator gives up."""
    first = start(spin, inclination, alpha, beta, far, FULL if screen else 21)
    found = solve_ivp(
        lambda s, y: slopes(y, spin), (0.0, -length), first, method="DOP853", rtol=rtol, atol=rtol
    )
    last = found.y[:, -1]
    if not found.success or not np.all(np.isfinite(last)):
        return None
    areas = [cross_section(found.y[:, i], spin) for i in range(found.t.size)]
    return Ray(
        x=last[:4],
        p=np.concatenate([[-1.0], last[4:7]]),
        k=slopes(last[:7].copy(), spin)[:4],
        d_alpha=last[7:11],
        d_beta=last[14:18],
        right=last[21:25],
        up=last[25:29],
        index=int(np.sum(np.diff(np.sign(areas)) != 0)),
        spread=areas[-1],
    )
