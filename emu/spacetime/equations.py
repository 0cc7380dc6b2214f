"""Null geodesics of Kerr as a regular system in Mino time, with their derivatives, for rays in lanes.

A ray is followed backwards from the observer at infinity. With u = 1/r and a unit vector n = (x, y, z),
z = cos θ, separated equations (Carter 1968) take a form without turning-point cases or a singular axis:

    u'' = c₁u + c₂u² − c₃u³,  c₁ = a² − λ² − η,  c₂ = 3(η + (λ − a)²),  c₃ = 2a²η
    x'' = −K x,  y'' = −K y,  z'' = −(K − a²) z,  K = η + λ² + 2a²z²
    δ'  = −a(2u − aλu²)/(1 − 2u + a²u²)                        (the source direction is n turned by δ about the axis)
    T'  = (1 + a²u²)(η + (λ − a)²)/(1 + (a² − aλ)u² ± u') + a(λ − a(1 − z²))

T is the elapsed time plus (upper sign) or minus (lower sign) the tortoise coordinate: each form is regular on one
leg of the ray. Every array has the lanes last, so that compiled loops over them use vector registers.
"""

from __future__ import annotations

from numba import njit

__all__ = ["LANES", "STATES", "constants", "derivative", "initial"]

LANES = 8
STATES = 28  # u u' x y z x' y' z' δ T, then the first nine differentiated by α and by β
_FAST = {"contract", "arcp", "reassoc", "nsz"}


@njit(cache=True, fastmath=_FAST)
def constants(spin, cos_i, sin_i, alpha, beta, par):
    """Fill the rows of `par` (15, LANES) with the constants of motion and their derivatives by α and β."""
    for k in range(LANES):
        a, c = spin[k], cos_i[k]
        lam = -alpha[k] * sin_i[k]
        eta = (alpha[k] ** 2 - a * a) * c * c + beta[k] ** 2
        lam_a, eta_a, eta_b = -sin_i[k], 2.0 * alpha[k] * c * c, 2.0 * beta[k]
        par[0, k] = a
        par[1, k] = lam
        par[2, k] = a * a - lam * lam - eta
        par[3, k] = eta + (lam - a) ** 2
        par[4, k] = 2.0 * a * a * eta
        par[5, k] = eta + lam * lam
        par[6, k] = lam_a
        par[7, k] = -2.0 * lam * lam_a - eta_a
        par[8, k] = 3.0 * (eta_a + 2.0 * (lam - a) * lam_a)
        par[9, k] = 2.0 * a * a * eta_a
        par[10, k] = eta_a + 2.0 * lam * lam_a
        par[11, k] = -eta_b
        par[12, k] = 3.0 * eta_b
        par[13, k] = 2.0 * a * a * eta_b
        par[14, k] = eta_b


@njit(cache=True, fastmath=_FAST)
def initial(cos_i, sin_i, alpha, beta, y):
    """Fill `y` (STATES, LANES) with the start at the observer: n along the line of sight, n' on the screen."""
    y[:, :] = 0.0
    for k in range(LANES):
        y[1, k] = 1.0
        y[2, k], y[4, k] = sin_i[k], cos_i[k]
        y[5, k], y[6, k], y[7, k] = -beta[k] * cos_i[k], alpha[k], beta[k] * sin_i[k]
        y[16, k] = 1.0  # ∂y'/∂α
        y[24, k], y[26, k] = -cos_i[k], sin_i[k]  # ∂x'/∂β, ∂z'/∂β


@njit(cache=True, fastmath=_FAST)
def derivative(y, par, sign, out):
    """Write d`y`/dτ of all lanes to `out` (STATES, LANES); `sign` (LANES,) is the form of T that is followed."""
    for k in range(LANES):
        a, lam, c1, q, c3, k0 = par[0, k], par[1, k], par[2, k], par[3, k], par[4, k], par[5, k]
        u, v, x, yy, z = y[0, k], y[1, k], y[2, k], y[3, k], y[4, k]
        aa = a * a
        c2 = 3.0 * q
        uu = u * u
        inverse = 1.0 / (1.0 - 2.0 * u + aa * uu)
        drag = (2.0 * u - a * lam * uu) * inverse
        big_k = k0 + 2.0 * aa * z * z
        slope = c1 + (2.0 * c2 - 3.0 * c3 * u) * u
        out[0, k] = v
        out[1, k] = (c1 + (c2 - c3 * u) * u) * u
        out[2, k] = y[5, k]
        out[3, k] = y[6, k]
        out[4, k] = y[7, k]
        out[5, k] = -big_k * x
        out[6, k] = -big_k * yy
        out[7, k] = -(big_k - aa) * z
        out[8, k] = -a * drag
        out[9, k] = (1.0 + aa * uu) * q / (1.0 + (aa - a * lam) * uu + sign[k] * v) + a * (lam - a * (1.0 - z * z))
        turn = a * inverse * (2.0 * a * lam * u - 2.0 + drag * (2.0 * aa * u - 2.0))
        # by α
        du, dx, dy, dz = y[10, k], y[12, k], y[13, k], y[14, k]
        dk = par[10, k] + 4.0 * aa * z * dz
        out[10, k] = y[11, k]
        out[11, k] = slope * du + (par[7, k] + (par[8, k] - par[9, k] * u) * u) * u
        out[12, k] = y[15, k]
        out[13, k] = y[16, k]
        out[14, k] = y[17, k]
        out[15, k] = -big_k * dx - dk * x
        out[16, k] = -big_k * dy - dk * yy
        out[17, k] = -(big_k - aa) * dz - dk * z
        out[18, k] = turn * du + aa * par[6, k] * uu * inverse
        # by β (λ does not depend on it)
        du, dx, dy, dz = y[19, k], y[21, k], y[22, k], y[23, k]
        dk = par[14, k] + 4.0 * aa * z * dz
        out[19, k] = y[20, k]
        out[20, k] = slope * du + (par[11, k] + (par[12, k] - par[13, k] * u) * u) * u
        out[21, k] = y[24, k]
        out[22, k] = y[25, k]
        out[23, k] = y[26, k]
        out[24, k] = -big_k * dx - dk * x
        out[25, k] = -big_k * dy - dk * yy
        out[26, k] = -(big_k - aa) * dz - dk * z
        out[27, k] = turn * du
