"""The seam behind which a one-dimensional prior density hides."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["Array", "Density"]

Array = NDArray[np.float64]


class Density(Protocol):
    """Give a normalised density on the line by its distribution function and the inverse of it."""

    @property
    def bounds(self) -> tuple[float, float]:
        """Return the smallest interval that holds all probability (infinite where there is none)."""
        ...

    def cdf(self, x: Array) -> Array:
        """Return the probability below x; zero and one beyond the bounds."""
        ...

    def ppf(self, u: Array) -> Array:
        """Return x with cdf(x) = u, for u in [0, 1]."""
        ...

    def log_density(self, x: Array) -> Array:
        """Return the natural logarithm of the density per unit of x; minus infinity outside."""
        ...
