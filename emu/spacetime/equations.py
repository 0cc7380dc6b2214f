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


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def constants(spin, cos_i, sin_i, alpha, beta, par):
    """Fill the rows of `par` (16, LANES) with the constants of motion and their derivatives by α and β."""
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
        par[15, k] = 0.0  # λ does not depend on β


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def initial(cos_i, sin_i, alpha, beta, y):
    """Fill `y` (STATES, LANES) with the start at the observer: n along the line of sight, n' on the screen."""
    y[:, :] = 0.0
    for k in range(LANES):
        y[1, k] = 1.0
        y[2, k], y[4, k] = sin_i[k], cos_i[k]
        y[5, k], y[6, k], y[7, k] = -beta[k] * cos_i[k], alpha[k], beta[k] * sin_i[k]
        y[16, k] = 1.0  # ∂y'/∂α
        y[24, k], y[26, k] = -cos_i[k], sin_i[k]  # ∂x'/∂β, ∂z'/∂β


@njit(cache=True, fastmath=_FAST, error_model="numpy", inline="always")
def _ray(y, par, sign, out):
    """Write the derivatives of the ten states of the rays themselves."""
    for k in range(LANES):
        a, lam, q = par[0, k], par[1, k], par[3, k]
        u, v, z = y[0, k], y[1, k], y[4, k]
        aa, uu = a * a, u * u
        big_k = par[5, k] + 2.0 * aa * z * z
        out[0, k] = v
        out[1, k] = (par[2, k] + (3.0 * q - par[4, k] * u) * u) * u
        out[2, k] = y[5, k]
        out[3, k] = y[6, k]
        out[4, k] = y[7, k]
        out[5, k] = -big_k * y[2, k]
        out[6, k] = -big_k * y[3, k]
        out[7, k] = -(big_k - aa) * z
        out[8, k] = -a * (2.0 * u - a * lam * uu) / (1.0 - 2.0 * u + aa * uu)
        out[9, k] = (1.0 + aa * uu) * q / (1.0 + (aa - a * lam) * uu + sign[k] * v) + a * (lam - a * (1.0 - z * z))


@njit(cache=True, fastmath=_FAST, error_model="numpy", inline="always")
def _variation(y, par, first, lam_row, constant, out):
    """Write the derivatives of the nine states from `first` on, which are the ray's differentiated by α or β.

    Args:
        lam_row: the row of `par` with dλ/dα or dλ/dβ.
        constant: the row of `par` with the derivative of c₁; those of c₂, c₃ and η + λ² follow it.
    """
    for k in range(LANES):
        a, u, z = par[0, k], y[0, k], y[4, k]
        aa, uu = a * a, u * u
        du, dz = y[first, k], y[first + 4, k]
        big_k = par[5, k] + 2.0 * aa * z * z
        dk = par[constant + 3, k] + 4.0 * aa * z * dz
        slope = par[2, k] + (6.0 * par[3, k] - 3.0 * par[4, k] * u) * u
        inverse = 1.0 / (1.0 - 2.0 * u + aa * uu)
        drag = (2.0 * u - a * par[1, k] * uu) * inverse
        turn = a * inverse * (2.0 * a * par[1, k] * u - 2.0 + drag * (2.0 * aa * u - 2.0))
        forced = par[constant, k] + (par[constant + 1, k] - par[constant + 2, k] * u) * u
        out[first, k] = y[first + 1, k]
        out[first + 1, k] = slope * du + forced * u
        out[first + 2, k] = y[first + 5, k]
        out[first + 3, k] = y[first + 6, k]
        out[first + 4, k] = y[first + 7, k]
        out[first + 5, k] = -big_k * y[first + 2, k] - dk * y[2, k]
        out[first + 6, k] = -big_k * y[first + 3, k] - dk * y[3, k]
        out[first + 7, k] = -(big_k - aa) * dz - dk * z
        out[first + 8, k] = turn * du + aa * par[lam_row, k] * uu * inverse


@njit(cache=True, fastmath=_FAST, error_model="numpy")
def derivative(y, par, sign, out):
    """Write d`y`/dτ of all lanes to `out` (STATES, LANES); `sign` (LANES,) is the form of T that is followed."""
    _ray(y, par, sign, out)
    _variation(y, par, 10, 6, 7, out)
    _variation(y, par, 19, 15, 11, out)
