"""What the data taught: contraction of each parameter, and the gain over the prior at the truth."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from emu.families.parameters import Parameter

__all__ = ["Gain", "contraction", "gain", "spread"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Gain:
    """Hold ln q(truth | data) - ln prior(truth) over held-out flares, in nats.

    Args:
        mean: over flares; the larger the better, and largest for the exact posterior.
        error: standard error of the mean.
        median: over flares.
        impossible: flares to whose truth the estimator gave no density at all (not in mean or median).
    """

    mean: float
    error: float
    median: float
    impossible: int


def spread(theta: Array, parameters: tuple[Parameter, ...],
           keep: NDArray[np.bool_] | None = None) -> Array:
    """Return the variance of every parameter over the next-to-last axis: (..., D, P) to (..., P).

    For a circular parameter it is the circular variance 1 - |mean exp(i theta)| (Mardia & Jupp 2000).

    Args:
        theta: (..., D, P).
        parameters: P of them.
        keep: (..., D) True where a draw counts; all by default.
    """
    counts = np.ones(theta.shape[:-1], bool) if keep is None else keep
    share = (counts / np.maximum(counts.sum(axis=-1, keepdims=True), 1))[..., None]
    mean = np.sum(share * theta, axis=-2, keepdims=True)
    value = np.sum(share * (theta - mean) ** 2, axis=-2)
    for column, parameter in enumerate(parameters):
        if parameter.circular:
            turned = np.exp(1j * np.radians(theta[..., column]))
            value[..., column] = 1.0 - np.abs(np.sum(share[..., 0] * turned, axis=-1))
    return np.asarray(value, float)


def contraction(draws: Array, prior_draws: Array, parameters: tuple[Parameter, ...],
                keep: NDArray[np.bool_] | None = None) -> Array:
    """Return 1 - variance of the posterior over variance of the prior (Betancourt 2018).

    Args:
        draws: (N, D, P) posterior draws of N flares.
        prior_draws: (M, P).
        parameters: P of them.
        keep: (N, D) True where a draw counts; all by default.

    Returns:
        (N, P): 0 where nothing was learned, 1 where everything was, negative where the posterior is wider.
    """
    return 1.0 - spread(draws, parameters, keep) / spread(prior_draws, parameters)


def gain(log_q: Array, log_prior: Array) -> Gain:
    """Average the gain over the prior at held-out truths.

    Args:
        log_q: (N,) log density of the estimator at the truth.
        log_prior: (N,) log density of the prior at the truth.
    """
    possible = np.isfinite(log_q)
    value = (log_q - log_prior)[possible]
    if len(value) == 0:
        return Gain(-np.inf, np.nan, -np.inf, len(log_q))
    return Gain(float(value.mean()), float(value.std() / np.sqrt(len(value))), float(np.median(value)),
                int(np.sum(~possible)))
