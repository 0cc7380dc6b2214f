"""An unbounded density for models whose parameters have no natural limits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr, ndtri

from emu.errors import UserError
from emu.families.density import Array

__all__ = ["Normal"]


@dataclass(frozen=True)
class Normal:
    """Be normal with a mean and a standard deviation."""

    mean: float
    deviation: float

    def __post_init__(self) -> None:
        if not (np.isfinite(self.mean) and np.isfinite(self.deviation) and self.deviation > 0.0):
            raise UserError(
                f"prior normal = [{self.mean}, {self.deviation}]: give a finite mean and a positive standard deviation"
            )

    @property
    def bounds(self) -> tuple[float, float]:
        """Return minus and plus infinity."""
        return -np.inf, np.inf

    def cdf(self, x: Array) -> Array:
        """Return the probability below x."""
        return np.asarray(ndtr((np.asarray(x, float) - self.mean) / self.deviation), float)

    def ppf(self, u: Array) -> Array:
        """Return the quantile of u."""
        return np.asarray(self.mean + self.deviation * ndtri(np.asarray(u, float)), float)

    def log_density(self, x: Array) -> Array:
        """Return the log density per unit of x."""
        z = (np.asarray(x, float) - self.mean) / self.deviation
        return np.asarray(-0.5 * z * z - 0.5 * np.log(2.0 * np.pi) - np.log(self.deviation), float)
