"""How close an estimator's draws are to exact ones on the same flare."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import wasserstein_distance

from emu.families.parameters import Parameter
from emu.families.prior import Prior
from emu.inference.coordinates import straight_about
from training.checks.two_sample import TwoSample, compare_samples

__all__ = ["Closeness", "closeness", "unwrapped", "widths"]

Array = NDArray[np.float64]
_LEAST, _MOST = 0.8, 1.25  # of a width ratio that is called right
_NEAR = 0.2  # largest Wasserstein distance, in exact widths, that is called near
_ALIKE = 0.05  # how far C2ST may lie above its floor


@dataclass(frozen=True)
class Closeness:
    """Compare one flare's draws with exact ones.

    Args:
        names: of the P parameters.
        test: classifier two-sample test with its floor.
        wasserstein: (P,) first Wasserstein distance over the exact standard deviation.
        width_ratio: (P,) standard deviation over the exact one.
    """

    names: tuple[str, ...]
    test: TwoSample
    wasserstein: Array
    width_ratio: Array

    @property
    def close(self) -> bool:
        """Tell whether the draws pass for exact: indistinguishable, near and as wide, every parameter."""
        return bool(self.test.accuracy <= self.test.floor + _ALIKE and np.all(self.wasserstein < _NEAR)
                    and np.all((self.width_ratio > _LEAST) & (self.width_ratio < _MOST)))


def closeness(draws: Array, exact: Array, prior: Prior, *, seed: int = 0) -> Closeness:
    """Compare draws (N, P) with exact draws (M, P), both equally weighted.

    The classifier sees straight coordinates about the exact draws, the other measures the parameters.
    Circular parameters are unwrapped about the circular mean of the exact draws.

    Args:
        draws: of the estimator.
        exact: of the reference.
        prior: of the problem.
        seed: of the classifier.
    """
    coordinates = straight_about(prior, exact)
    test = compare_samples(coordinates.to_straight(draws), coordinates.to_straight(exact), seed=seed)
    ours, theirs = (unwrapped(theta, exact, prior.parameters) for theta in (draws, exact))
    width = widths(theirs)
    distance = [wasserstein_distance(ours[:, k], theirs[:, k]) for k in range(len(width))]
    return Closeness(prior.names, test, np.array(distance) / width, widths(ours) / width)


def unwrapped(theta: Array, about: Array, parameters: tuple[Parameter, ...]) -> Array:
    """Turn circular parameters so that the seam lies opposite the circular mean of `about`."""
    turned = theta.copy()
    for column, parameter in enumerate(parameters):
        if parameter.circular:
            mean = np.degrees(np.angle(np.exp(1j * np.radians(about[:, column])).mean()))
            turned[:, column] = (theta[:, column] - mean + 180.0) % 360.0 - 180.0
    return turned


def widths(theta: Array) -> Array:
    """Return the standard deviation of every parameter (P,)."""
    return np.maximum(theta.std(axis=0), 1e-300)
