"""Boyer-Lindquist <-> outgoing Kerr-Schild: places, times and the matrix between vector components."""

import math

import numpy as np

__all__ = ["horizon", "jacobian", "place", "time_shift"]


def horizon(spin: float) -> float:
    """Return the outer horizon's radius."""
    return 1.0 + math.sqrt(1.0 - spin**2)


def time_shift(r: float, spin: float) -> float:
    """Return t_BL - t_KS = integral of 2 r / Delta dr."""
    outer = horizon(spin)
    inner = 2.0 - outer
    return 2.0 * (outer * math.log(r - outer) - inner * math.log(r - inner)) / (outer - inner)


def angle_shift(r: float, spin: float) -> float:
    """Return phi_BL - phi_KS = integral of spin / Delta dr, zero at infinity."""
    outer = horizon(spin)
    inner = 2.0 - outer
    return spin * math.log((r - outer) / (r - inner)) / (outer - inner)


def place(t: float, r: float, theta: float, phi: float, spin: float) -> np.ndarray:
    """Return the Kerr-Schild event (4,): x + i y = (r - i a) sin(theta) exp(i phi_KS), z = r cos(theta)."""
    turned = complex(r, -spin) * math.sin(theta) * np.exp(1j * (phi - angle_shift(r, spin)))
    return np.array([t - time_shift(r, spin), turned.real, turned.imag, r * math.cos(theta)])


def jacobian(r: float, theta: float, phi: float, spin: float) -> np.ndarray:
    """Return dX^a / dy^b (4, 4), y = (t, r, theta, phi) Boyer-Lindquist, X Kerr-Schild."""
    delta = r**2 - 2.0 * r + spin**2
    turn = np.exp(1j * (phi - angle_shift(r, spin)))
    plane = complex(r, -spin) * math.sin(theta) * turn
    by_r = math.sin(theta) * turn - 1j * (spin / delta) * plane
    by_theta = complex(r, -spin) * math.cos(theta) * turn
    by_phi = 1j * plane
    return np.array(
        [
            [1.0, -2.0 * r / delta, 0.0, 0.0],
            [0.0, by_r.real, by_theta.real, by_phi.real],
            [0.0, by_r.imag, by_theta.imag, by_phi.imag],
            [0.0, math.cos(theta), -r * math.sin(theta), 0.0],
        ]
    )
