"""The joint prior: a product of densities, cut to the draws a model can compute."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

from emu.errors import UserError
from emu.families.density import Array
from emu.families.parameters import Parameter

__all__ = ["Prior"]

Valid = Callable[[Array], NDArray[np.bool_]]

# Beyond |z| = 8 the normal distribution function is one to within float64: quantiles lose their meaning.
_Z_LIMIT = 8.0
_FRACTION_DRAWS = 200_000
_FRACTION_SEED = 20_250_101
_BLOCK = 20_000
_FEWEST = 1e-4


@dataclass(frozen=True)
class Prior:
    """Hold independent densities, restricted to parameters that are valid.

    The density is the box density divided by the accepted fraction inside, zero outside.

    Args:
        parameters: P parameters, in the order of the columns of theta.
        valid: map theta (N, P) to a boolean (N,), or None where the whole box is valid.
    """

    parameters: tuple[Parameter, ...]
    valid: Valid | None = None

    @property
    def names(self) -> tuple[str, ...]:
        """Return the parameter names in order."""
        return tuple(parameter.name for parameter in self.parameters)

    def sample(self, n: int, rng: np.random.Generator) -> Array:
        """Draw n valid parameter vectors by rejection.

        Returns:
            theta (n, P) float64.

        Raises:
            UserError: fewer than one draw in ten thousand is valid.
        """
        kept: list[Array] = []
        have = tried = 0
        while have < n:
            block = self._box(min(_BLOCK, max(64, 2 * (n - have))), rng)
            good = block if self.valid is None else block[self.valid(block)]
            kept.append(good)
            have, tried = have + len(good), tried + len(block)
            if tried >= _FRACTION_DRAWS and have < _FEWEST * tried:
                raise UserError(f"only {have} of {tried} prior draws are valid: narrow the priors")
        return np.concatenate(kept)[:n] if kept else np.empty((0, len(self.parameters)))

    def log_prob(self, theta: Array) -> Array:
        """Return the log density of theta (N, P): (N,), minus infinity where it is not valid."""
        theta = np.asarray(theta, float)
        log_p = self._log_box(theta)
        if self.valid is None:
            return log_p
        inside = np.isfinite(log_p)
        inside[inside] = self.valid(theta[inside])
        return np.where(inside, log_p - np.log(self.accepted_fraction), -np.inf)

    @property
    def accepted_fraction(self) -> float:
        """Return the share of the box that is valid (Monte Carlo with a fixed seed)."""
        return self._accepted / _FRACTION_DRAWS

    @property
    def accepted_fraction_error(self) -> float:
        """Return the binomial standard error of the accepted fraction."""
        share = self.accepted_fraction
        return float(np.sqrt(share * (1.0 - share) / _FRACTION_DRAWS))

    def to_gauss(self, theta: Array) -> Array:
        """Map theta (N, P) to z (N, P) whose prior in the box is standard normal; finite always."""
        theta = np.asarray(theta, float)
        u = np.stack([p.prior.cdf(theta[..., k]) for k, p in enumerate(self.parameters)], axis=-1)
        return np.asarray(np.clip(ndtri(u), -_Z_LIMIT, _Z_LIMIT), float)

    def from_gauss(self, z: Array) -> Array:
        """Map z (N, P) back to theta (N, P), never out of bounds nor infinite."""
        u = ndtr(np.clip(np.asarray(z, float), -_Z_LIMIT, _Z_LIMIT))
        return np.stack([p.prior.ppf(u[..., k]) for k, p in enumerate(self.parameters)], axis=-1)

    def log_jacobian(self, z: Array) -> Array:
        """Return sum log |dtheta/dz| (N,): log p(theta) = log N(z) - log_jacobian(z) in the box."""
        z = np.asarray(z, float)
        log_normal = -0.5 * np.sum(z * z + np.log(2.0 * np.pi), axis=-1)
        return np.asarray(log_normal - self._log_box(self.from_gauss(z)), float)

    @cached_property
    def _accepted(self) -> int:
        """Count valid draws among a fixed number of draws from the box."""
        if self.valid is None:
            return _FRACTION_DRAWS
        rng = np.random.default_rng(_FRACTION_SEED)
        blocks = (self._box(_BLOCK, rng) for _ in range(_FRACTION_DRAWS // _BLOCK))
        accepted = sum(int(np.count_nonzero(self.valid(block))) for block in blocks)
        if accepted == 0:
            raise UserError(f"none of {_FRACTION_DRAWS} prior draws is valid: narrow the priors")
        return accepted

    def _box(self, n: int, rng: np.random.Generator) -> Array:
        """Draw from the product of densities, valid or not."""
        u = rng.random((n, len(self.parameters)))
        return np.stack([p.prior.ppf(u[:, k]) for k, p in enumerate(self.parameters)], axis=-1)

    def _log_box(self, theta: Array) -> Array:
        """Return the log density of the product, ignoring validity."""
        terms = [p.prior.log_density(theta[..., k]) for k, p in enumerate(self.parameters)]
        return np.asarray(np.sum(np.stack(terms), axis=0), float)
