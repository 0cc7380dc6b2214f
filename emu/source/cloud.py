"""A finite spot as fixed quadrature points of a Gaussian cloud."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["cloud_points", "default_side"]

Array = NDArray[np.float64]


def default_side(size: float) -> int:
    """Return the number of points along each axis that a spot of the given size (GM/c2) gets by default."""
    return 3 if size < 0.3 else 5 if size < 1.0 else 7


def cloud_points(side: int) -> tuple[Array, Array]:
    """Return offsets and weights of the tensor Gauss-Hermite rule of a unit Gaussian in (R, R0 phi, z).

    Args:
        side: odd number of points an axis, so that the centre is one of them; side**3 points.

    Returns:
        (side**3, 3) offsets in units of the size, the centre first; (side**3,) weights of sum 1.
    """
    nodes, weights = np.polynomial.hermite_e.hermegauss(side)
    offsets = np.stack(np.meshgrid(nodes, nodes, nodes, indexing="ij"), axis=-1).reshape(-1, 3)
    product = np.prod(np.stack(np.meshgrid(weights, weights, weights, indexing="ij"), axis=-1), axis=-1).ravel()
    order = np.argsort(np.sum(offsets**2, axis=1), kind="stable")
    return offsets[order], (product / product.sum())[order]
