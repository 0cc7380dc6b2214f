"""The Kerr metric in Boyer–Lindquist coordinates, G = c = M = 1 (Bardeen, Press & Teukolsky 1972)."""

from __future__ import annotations

import math

import numpy as np
from numba import njit, vectorize
from numpy.typing import NDArray

__all__ = ["circular_frequency", "frame_at", "horizon", "speed_squared", "tortoise"]

Array = NDArray[np.float64]


def horizon(spin: Array | float) -> Array:
    """Return the radius of the outer horizon, r₊ = 1 + √(1 − a²), in GM/c².

    Args:
        spin: a, |a| < 1, any shape.
    """
    return np.asarray(1.0 + np.sqrt(1.0 - np.square(spin)))


def circular_frequency(spin: Array | float, radius: Array | float) -> Array:
    """Return dφ/dt of the circular equatorial geodesic towards +φ, (R^{3/2} + a)⁻¹, in c³/GM.

    Source: Bardeen, Press & Teukolsky 1972, eq. 2.16.

    Args:
        spin: a; negative where the hole spins against the orbit.
        radius: R in GM/c², broadcast with `spin`.
    """
    return np.asarray(1.0 / (np.power(radius, 1.5) + spin))


@njit(cache=True, error_model="numpy")
def tortoise(spin: float, radius: float) -> float:
    """Return r* = ∫ (r² + a²)/Δ dr with the constant chosen so that r* − r = 2 ln(r/2 − 1) at a = 0."""
    root = math.sqrt(1.0 - spin * spin)
    outer, inner = 1.0 + root, 1.0 - root
    return radius + (outer * math.log(0.5 * (radius - outer)) - inner * math.log(0.5 * (radius - inner))) / root


@njit(cache=True, error_model="numpy")
def frame_at(spin: float, radius: float, cos_theta: float) -> tuple[float, float, float, float, float, float]:
    """Describe the zero-angular-momentum observer: metric factors of its orthonormal tetrad.

    With Σ = r² + a² cos²θ, Δ = r² − 2r + a², A = (r² + a²)² − a² Δ sin²θ, the covectors are
    lapse dt, √g_rr dr, √g_θθ dθ and ϖ sin θ (dφ − ω dt)  (Bardeen, Press & Teukolsky 1972, eq. 3.2).

    Returns:
        lapse √(ΣΔ/A), dragging ω = 2ar/A, √g_rr = √(Σ/Δ), √g_θθ = √Σ, ϖ = √(A/Σ), Δ.
        √g_φφ = ϖ sin θ; the factor sin θ is left out so that the axis stays regular.
    """
    square = radius * radius
    sigma = square + spin * spin * cos_theta * cos_theta
    delta = square - 2.0 * radius + spin * spin
    big = (square + spin * spin) ** 2 - spin * spin * delta * (1.0 - cos_theta * cos_theta)
    return (
        math.sqrt(sigma * delta / big),
        2.0 * spin * radius / big,
        math.sqrt(sigma / delta),
        math.sqrt(sigma),
        math.sqrt(big / sigma),
        delta,
    )


@vectorize(cache=True)
def speed_squared(spin, radius, cos_theta, r_rate, theta_rate, phi_rate):
    """Return v² of a coordinate velocity as the zero-angular-momentum observer measures it.

    Args:
        spin, radius (GM/c²), cos_theta: place. r_rate, theta_rate, phi_rate: derivatives by coordinate time, c³/GM.
    """
    lapse, omega, root_rr, root_tt, varpi, _delta = frame_at(spin, radius, cos_theta)
    sin_theta = math.sqrt(max(0.0, 1.0 - cos_theta * cos_theta))
    radial, polar = root_rr * r_rate, root_tt * theta_rate
    around = varpi * sin_theta * (phi_rate - omega)
    return (radial * radial + polar * polar + around * around) / (lapse * lapse)
