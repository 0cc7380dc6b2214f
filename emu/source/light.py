"""Optically thin synchrotron light of a point emitter, brought to the screen with its polarisation.

Emissivity and electric vector: Westfold 1959; Rybicki & Lightman 1979. Frames: Bardeen, Press & Teukolsky 1972.
Transport: the constant of Walker & Penrose 1970, its screen form as in Himwich et al. 2020.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

from emu.spacetime.kerr import frame_at

__all__ = ["brightness_profile", "polarisation_degree", "shine"]

Array = NDArray[np.float64]


def polarisation_degree(index: Array) -> Array:
    """Return Pi_0 = (P + 1)/(P + 7/3) for the spectral index s, P = 2s + 1 (Westfold 1959)."""
    return (2.0 * index + 2.0) / (2.0 * index + 10.0 / 3.0)


def brightness_profile(time: Array, peak: Array, rise: Array, decay: Array) -> Array:
    """Return a bump exp(-((t - peak)/w)^2 / 2), w = rise before the peak and decay after it; all in GM/c3."""
    width = np.where(time < peak, rise, decay)
    return np.exp(-0.5 * ((time - peak) / width) ** 2)


@njit(cache=True, error_model="numpy")
def _transported(a, r, cos_t, sin_t, f_t, f1, f2, f3, k_t, k1, k2, k3, frame, screen):
    """Return cos 2chi and sin 2chi on the screen of a vector (f) carried along the photon (k), both given to the
    zero-angular-momentum observer; chi runs from +beta towards -alpha."""
    lapse, omega, root_rr, root_tt, varpi = frame
    ft, fr, fth = f_t / lapse, f1 / root_rr, f2 / root_tt
    kt, kr, kth = k_t / lapse, k1 / root_rr, k2 / root_tt
    fph, kph = f3 / varpi + omega * sin_t * ft, k3 / varpi + omega * sin_t * kt  # sin(theta) times the component
    big_a = kt * fr - kr * ft + a * sin_t * (kr * fph - kph * fr)
    big_b = (r * r + a * a) * (kph * fth - kth * fph) - a * sin_t * (kt * fth - kth * ft)
    # (A - iB)(r - ia cos theta)
    kappa_1 = big_a * r - big_b * a * cos_t
    kappa_2 = -big_b * r - big_a * a * cos_t
    alpha, beta, sin_i = screen
    nu = -(alpha + a * sin_i)
    right, up = beta * kappa_2 - nu * kappa_1, beta * kappa_1 + nu * kappa_2
    norm = right * right + up * up
    if norm <= 0.0:
        return 1.0, 0.0
    return (up * up - right * right) / norm, -2.0 * right * up / norm


@njit(cache=True, error_model="numpy")
def _one(a, sin_i, r, n, rates, ray, b, strength, index, out):
    """Fill `out` (5,) for one ray: flux, cos 2chi, sin 2chi, redshift g, sin zeta."""
    cos_t, sin_t = n[2], math.hypot(n[0], n[1])
    lapse, omega, root_rr, root_tt, varpi, _delta = frame_at(a, r, cos_t)
    v1, v2 = root_rr * rates[0] / lapse, root_tt * rates[1] / lapse
    v3 = varpi * sin_t * (rates[2] - omega) / lapse
    v_v = v1 * v1 + v2 * v2 + v3 * v3
    if v_v >= 1.0:
        return False
    gamma = 1.0 / math.sqrt(1.0 - v_v)
    k1, k2, k3 = ray[2] / root_rr, ray[3] / root_tt, ray[4] / varpi
    energy = math.sqrt(k1 * k1 + k2 * k2 + k3 * k3)  # the null condition
    if energy == 0.0:  # no ray was found
        return False
    v_k = v1 * k1 + v2 * k2 + v3 * k3
    comoving = gamma * (energy - v_k)
    boost = gamma * gamma / (gamma + 1.0)  # (gamma - 1)/v^2
    along = boost * v_k - gamma * energy
    n1, n2, n3 = (k1 + along * v1) / comoving, (k2 + along * v2) / comoving, (k3 + along * v3) / comoving
    b1, b2, b3 = b[0] * sin_t + b[2] * cos_t, b[0] * cos_t - b[2] * sin_t, b[1]
    f1, f2, f3 = n2 * b3 - n3 * b2, n3 * b1 - n1 * b3, n1 * b2 - n2 * b1
    sin_zeta = math.sqrt(f1 * f1 + f2 * f2 + f3 * f3)
    redshift = 1.0 / comoving
    out[0], out[1], out[2], out[3], out[4] = 0.0, 1.0, 0.0, redshift, sin_zeta
    if sin_zeta <= 0.0:
        return True
    v_f = v1 * f1 + v2 * f2 + v3 * f3
    g1, g2, g3 = f1 + boost * v_f * v1, f2 + boost * v_f * v2, f3 + boost * v_f * v3
    frame, screen = (lapse, omega, root_rr, root_tt, varpi), (ray[0], ray[1], sin_i)
    out[1], out[2] = _transported(
        a, r, cos_t, sin_t, gamma * v_f, g1, g2, g3, energy, k1, k2, k3, frame, screen
    )  # fmt: skip
    out[0] = redshift ** (3.0 + index) * ray[5] * (strength * sin_zeta) ** (1.0 + index)
    return True


@njit(cache=True, error_model="numpy")
def shine(spin, inclination, r, n, rates, rays, b, strength, index):
    """Compute what point emitters of unit brightness send along their rays.

    Args:
        spin, inclination (rad), r, strength, index: (N,) float64. n: (N, 3) unit vectors of the sources.
        rates: (N, 3) dr/dt, dtheta/dt, dphi/dt. b: (N, 3) unit field on the comoving (R, phi, z).
        rays: (N, 6) alpha, beta, p_r, p_theta, p_phi/sin(theta), magnification.

    Returns:
        (N, 5) float64: flux g^(3+s) mu (|B| sin zeta)^(1+s), cos 2chi, sin 2chi on the screen, g, sin zeta;
        (N,) bool, False where there is no ray or the emitter is not slower than light: the row is then zero.
    """
    out = np.zeros((len(r), 5))
    timelike = np.zeros(len(r), dtype=np.bool_)
    for k in range(len(r)):
        sin_i = math.sin(inclination[k])
        timelike[k] = _one(spin[k], sin_i, r[k], n[k], rates[k], rays[k], b[k], strength[k], index[k], out[k])
    return out, timelike
