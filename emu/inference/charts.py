"""Charts: coordinates for one or two parameters in which posteriors are less curved than in theta.

Each chart is one to one between its columns of theta and its coordinates y, and knows the log density of
the prior in y. That density already holds the Jacobian, so no infinite factor ever cancels another.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy.special import ndtr, ndtri

from emu.families.density import Array, Density

__all__ = ["Chart", "CircleChart", "FrequencyChart", "GaussChart"]

# Beyond this the normal distribution function no longer resolves its distance from one in float64.
_LIMIT = 8.0


class Chart(Protocol):
    """Map some columns of theta to as many coordinates."""

    @property
    def columns(self) -> tuple[int, ...]:
        """Return the columns of theta that the chart replaces."""
        ...

    def coordinates(self, theta: Array) -> Array:
        """Map theta (N, P) to y (N, C)."""
        ...

    def values(self, y: Array, theta: Array) -> Array:
        """Map y (N, C) to its columns (N, C); theta (N, P) holds the columns of earlier charts."""
        ...

    def log_prior(self, y: Array, theta: Array) -> Array:
        """Return the log prior density per unit of y (N,); theta (N, P) is complete."""
        ...


@dataclass(frozen=True)
class GaussChart:
    """Map a parameter to z with a standard normal prior."""

    column: int
    prior: Density

    @property
    def columns(self) -> tuple[int, ...]:
        """Return the column."""
        return (self.column,)

    def coordinates(self, theta: Array) -> Array:
        """Return z = Phi^-1(cdf(theta))."""
        z = ndtri(self.prior.cdf(theta[:, self.column]))
        return np.asarray(np.clip(z, -_LIMIT, _LIMIT)[:, None], float)

    def values(self, y: Array, theta: Array) -> Array:
        """Return the quantile of Phi(z)."""
        return self.prior.ppf(ndtr(np.clip(y[:, 0], -_LIMIT, _LIMIT)))[:, None]

    def log_prior(self, y: Array, theta: Array) -> Array:
        """Return the log density of the standard normal, minus infinity beyond the limit."""
        z = y[:, 0]
        return np.where(np.abs(z) <= _LIMIT, -0.5 * z * z - 0.5 * np.log(2.0 * np.pi), -np.inf)


@dataclass(frozen=True)
class CircleChart:
    """Map an angle to its distance in radians from a centre, so that the seam is far from the draws.

    Args:
        column: the angle, in degrees, over a whole turn.
        prior: its density.
        centre: degrees.
    """

    column: int
    prior: Density
    centre: float

    @property
    def columns(self) -> tuple[int, ...]:
        """Return the column."""
        return (self.column,)

    def coordinates(self, theta: Array) -> Array:
        """Return the signed distance from the centre in radians, between -pi and pi."""
        away = (theta[:, self.column] - self.centre + 180.0) % 360.0 - 180.0
        return np.radians(away)[:, None]

    def values(self, y: Array, theta: Array) -> Array:
        """Return the angle within the bounds of its prior."""
        low = self.prior.bounds[0]
        return (low + (np.degrees(y[:, 0]) + self.centre - low) % 360.0)[:, None]

    def log_prior(self, y: Array, theta: Array) -> Array:
        """Return the log density per radian, minus infinity beyond half a turn."""
        density = self.prior.log_density(theta[:, self.column]) + np.log(180.0 / np.pi)
        return np.where(np.abs(y[:, 0]) <= np.pi, density, -np.inf)


@dataclass(frozen=True)
class FrequencyChart:
    """Map the rate kappa to the logarithm of the orbital frequency, ln kappa - ln(R^(3/2) + a).

    Data fix the frequency far better than rate, radius or spin (Bardeen, Press & Teukolsky 1972 for the
    formula at kappa = 1), so the ridge through these three becomes straight.

    Args:
        rate: column of kappa > 0.
        radius: column of R in GM/c2.
        spin: column of a.
        prior: density of kappa.
    """

    rate: int
    radius: int
    spin: int
    prior: Density

    @property
    def columns(self) -> tuple[int, ...]:
        """Return the column of the rate."""
        return (self.rate,)

    def coordinates(self, theta: Array) -> Array:
        """Return the log of the frequency in radians per GM/c3."""
        return (np.log(theta[:, self.rate]) - self._log_period(theta))[:, None]

    def values(self, y: Array, theta: Array) -> Array:
        """Return the rate, which may lie outside its bounds."""
        return np.exp(np.clip(y[:, 0], -50.0, 50.0) + self._log_period(theta))[:, None]

    def log_prior(self, y: Array, theta: Array) -> Array:
        """Return the log density per unit of y: that of kappa times dkappa/dy = kappa."""
        rate = theta[:, self.rate]
        return self.prior.log_density(rate) + np.log(rate)

    def _log_period(self, theta: Array) -> Array:
        return np.asarray(np.log(theta[:, self.radius] ** 1.5 + theta[:, self.spin]), float)
