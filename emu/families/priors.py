"""Bounded densities: each is uniform in some function of the parameter.

Angles are in degrees, so densities of angles are per degree.

>>> import numpy as np
>>> CosUniform(0.0, 180.0).cdf(np.array([90.0]))
array([0.5])
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from emu.errors import UserError
from emu.families.density import Array

__all__ = ["CosUniform", "LogUniform", "SinUniform", "TwoSided", "Uniform"]


def _check(name: str, low: float, high: float, least: float, most: float) -> None:
    """Refuse bounds that are not ordered and within least..most."""
    if not (np.isfinite(low) and np.isfinite(high) and least <= low < high <= most):
        raise UserError(
            f"prior {name} = [{low}, {high}]: give two finite numbers, the lower first, between {least:g} and {most:g}"
        )


def _between(x: Array, low: float, high: float, value: Callable[[Array], Array]) -> Array:
    """Evaluate value(x) inside [low, high] and minus infinity outside (also for NaN)."""
    x = np.asarray(x, float)
    inside = (x >= low) & (x <= high)
    return np.where(inside, value(np.where(inside, x, high)), -np.inf)


@dataclass(frozen=True)
class Uniform:
    """Be uniform in x between low and high."""

    low: float
    high: float

    def __post_init__(self) -> None:
        _check("uniform", self.low, self.high, -np.inf, np.inf)

    @property
    def bounds(self) -> tuple[float, float]:
        """Return (low, high)."""
        return self.low, self.high

    def cdf(self, x: Array) -> Array:
        """Return the probability below x."""
        return np.clip((np.asarray(x, float) - self.low) / (self.high - self.low), 0.0, 1.0)

    def ppf(self, u: Array) -> Array:
        """Return the quantile of u."""
        return np.clip(self.low + (self.high - self.low) * np.asarray(u, float), self.low, self.high)

    def log_density(self, x: Array) -> Array:
        """Return the log density per unit of x."""
        return _between(x, self.low, self.high, lambda v: np.full_like(v, -np.log(self.high - self.low)))


@dataclass(frozen=True)
class LogUniform:
    """Be uniform in log x between low > 0 and high."""

    low: float
    high: float

    def __post_init__(self) -> None:
        _check("log_uniform", self.low, self.high, np.finfo(float).tiny, np.inf)

    @property
    def bounds(self) -> tuple[float, float]:
        """Return (low, high)."""
        return self.low, self.high

    def cdf(self, x: Array) -> Array:
        """Return the probability below x."""
        x = np.clip(np.asarray(x, float), self.low, self.high)
        return np.asarray(np.log(x / self.low) / np.log(self.high / self.low), float)

    def ppf(self, u: Array) -> Array:
        """Return the quantile of u."""
        return np.clip(self.low * (self.high / self.low) ** np.asarray(u, float), self.low, self.high)

    def log_density(self, x: Array) -> Array:
        """Return the log density per unit of x."""
        scale = np.log(np.log(self.high / self.low))
        return _between(x, self.low, self.high, lambda v: -np.log(v) - scale)


@dataclass(frozen=True)
class CosUniform:
    """Be uniform in cos x for x in degrees between low and high: the polar angle of an isotropic axis."""

    low: float
    high: float

    def __post_init__(self) -> None:
        _check("cos_uniform", self.low, self.high, 0.0, 180.0)

    @property
    def bounds(self) -> tuple[float, float]:
        """Return (low, high)."""
        return self.low, self.high

    def cdf(self, x: Array) -> Array:
        """Return the probability below x."""
        top, bottom = np.cos(np.radians(self.low)), np.cos(np.radians(self.high))
        cosine = np.cos(np.radians(np.clip(x, self.low, self.high)))
        return np.asarray((top - cosine) / (top - bottom), float)

    def ppf(self, u: Array) -> Array:
        """Return the quantile of u."""
        top, bottom = np.cos(np.radians(self.low)), np.cos(np.radians(self.high))
        cosine = np.clip(top - (top - bottom) * np.asarray(u, float), -1.0, 1.0)
        return np.asarray(np.clip(np.degrees(np.arccos(cosine)), self.low, self.high), float)

    def log_density(self, x: Array) -> Array:
        """Return the log density per degree."""
        width = np.cos(np.radians(self.low)) - np.cos(np.radians(self.high))
        with np.errstate(divide="ignore"):  # the density is zero at a pole
            return _between(x, self.low, self.high, lambda v: np.log(np.sin(np.radians(v)) * np.pi / 180.0 / width))


@dataclass(frozen=True)
class SinUniform:
    """Be uniform in sin x for x in degrees between low and high: the latitude of an isotropic axis."""

    low: float
    high: float

    def __post_init__(self) -> None:
        _check("sin_uniform", self.low, self.high, -90.0, 90.0)

    @property
    def bounds(self) -> tuple[float, float]:
        """Return (low, high)."""
        return self.low, self.high

    def _polar(self) -> CosUniform:
        """Return the same density in the angle 90 degrees - x."""
        return CosUniform(90.0 - self.high, 90.0 - self.low)

    def cdf(self, x: Array) -> Array:
        """Return the probability below x."""
        return 1.0 - self._polar().cdf(90.0 - np.asarray(x, float))

    def ppf(self, u: Array) -> Array:
        """Return the quantile of u."""
        return np.clip(90.0 - self._polar().ppf(1.0 - np.asarray(u, float)), self.low, self.high)

    def log_density(self, x: Array) -> Array:
        """Return the log density per degree."""
        return self._polar().log_density(90.0 - np.asarray(x, float))


@dataclass(frozen=True)
class TwoSided:
    """Be uniform in |x| between inner and outer with either sign: a motion that is surely there."""

    inner: float
    outer: float

    def __post_init__(self) -> None:
        _check("two_sided", self.inner, self.outer, 0.0, np.inf)

    @property
    def bounds(self) -> tuple[float, float]:
        """Return (-outer, outer); between -inner and inner there is no probability."""
        return -self.outer, self.outer

    def cdf(self, x: Array) -> Array:
        """Return the probability below x (one half within the gap)."""
        x = np.asarray(x, float)
        half = 0.5 * (np.clip(np.abs(x), self.inner, self.outer) - self.inner) / (self.outer - self.inner)
        return 0.5 + np.sign(x) * half

    def ppf(self, u: Array) -> Array:
        """Return the quantile of u (one half belongs to the positive side)."""
        u = np.asarray(u, float)
        size = self.inner + (self.outer - self.inner) * np.abs(2.0 * u - 1.0)
        return np.where(u < 0.5, -1.0, 1.0) * np.clip(size, self.inner, self.outer)

    def log_density(self, x: Array) -> Array:
        """Return the log density per unit of x."""
        level = -np.log(2.0 * (self.outer - self.inner))
        return _between(np.abs(x), self.inner, self.outer, lambda v: np.full_like(v, level))
