"""An independent calculation of rays and curves: Hamilton's equations, scipy's integrator, transport.

It shares no code and no equation of motion with the package: see hamiltonian.py (rays), images.py (orders and
roots), emitter.py (light), curves.py (flares). Slow on purpose: a ray takes about 0.1 s.
"""

import math

import numpy as np

from tests.reference.curves import curves, is_twin
from tests.reference.images import NoImage, find_image

__all__ = ["NoImage", "curves", "is_twin", "trace"]


def trace(
    spin: float, inclination_deg: float, r: float, theta_deg: float, phi_deg: float, order: int
) -> tuple[float, float, float, np.ndarray, float]:
    """Join a point to the observer by the ray of an image order.

    Args:
        spin, r, theta_deg, phi_deg: Boyer-Lindquist source; order: 0 direct, 1 the next.

    Returns:
        alpha, beta; the delay T - r*(far), with r* = r + integral 2 r / Delta dr; p_a (4,) at the source in
        Boyer-Lindquist (t, r, theta, phi) with E = 1; the magnification mu.

    Raises:
        NoImage: no such image was found.
    """
    image = find_image(spin, math.radians(inclination_deg), r, math.radians(theta_deg), math.radians(phi_deg), order)
    return (
        float(image.unknowns[0]),
        float(image.unknowns[1]),
        image.delay,
        image.momentum,
        image.magnification,
    )
