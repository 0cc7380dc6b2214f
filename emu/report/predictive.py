"""What the draws of a posterior predict: the curves themselves, and what a new measurement would show."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy.special import ndtr

from emu.families.density import Array
from emu.observe.rows import KINDS, Rows
from emu.problem import Problem

__all__ = ["Prediction", "predict", "spread"]

_HALVINGS = 50  # of the bracket of a quantile: below rounding
_REACH = 9.0  # standard deviations that hold every quantile asked for


@dataclass(frozen=True)
class Prediction:
    """Hold curves of N draws at T times, kind by kind.

    Attributes:
        times: (T,) GM/c3 from the reference time.
        curves: kind -> (N, T) noiseless curves; for a turbulent family its mean.
        deviation: kind -> (N, T) standard deviation of a measurement about the curve: typical error,
            jitter and random wander added in quadrature.
        dropped: draws left out because the prior forbids them or a ray could not be solved.
        likeliest: kind -> (T,) curve of the draw that fits best; empty where it is not known which.
    """

    times: Array
    curves: Mapping[str, Array]
    deviation: Mapping[str, Array]
    dropped: int
    likeliest: Mapping[str, Array] = field(default_factory=dict)


def predict(
    problem: Problem,
    theta: Array,
    times: Array,
    errors: Mapping[str, float],
    likeliest: Array | None = None,
) -> Prediction:
    """Compute the curves of draws on a grid of times.

    Args:
        problem: the problem the draws belong to.
        theta: (N, P) draws, degrees and geometric units.
        times: (T,) GM/c3 from the reference time.
        errors: kind -> typical 1-sigma error, in the kind's inner unit; its keys say which kinds.
        likeliest: (P,) a valid draw to be shown by itself, or None.

    Returns:
        Curves and deviations of the draws that can be computed, with the number of the others.
    """
    good = theta[np.isfinite(problem.prior.log_prob(theta))]
    rows = _grid(times, errors)
    expected = problem.expected(good, rows)
    solved = expected.failures == 0
    good, mean, lever = good[solved], expected.mean[solved], expected.lever[solved]
    variance = problem.variance(good, rows)
    scatter = problem.scatter(good)
    if scatter is not None:
        variance = variance + (lever * scatter[0][:, None]) ** 2
    best = {} if likeliest is None else _by_kind(problem.expected(likeliest[None], rows).mean, errors)
    return Prediction(
        np.asarray(times, float),
        _by_kind(mean, errors),
        _by_kind(np.sqrt(variance), errors),
        len(theta) - len(good),
        {kind: curve[0] for kind, curve in best.items()},
    )


def spread(curves: Array, levels: Sequence[float], deviation: Array | None = None) -> Array:
    """Take quantiles over the draws at every time.

    Args:
        curves: (N, T).
        levels: L probabilities.
        deviation: (N, T) normal standard deviation about each curve, or None for the curves alone.

    Returns:
        (L, T).
    """
    if deviation is None:
        return np.asarray(np.quantile(curves, levels, axis=0))
    return np.stack([_mixture_quantile(curves, deviation, level) for level in levels])


def _by_kind(values: Array, kinds: Mapping[str, float]) -> dict[str, Array]:
    """Part values (N, kinds * T) at the rows of `_grid` into one array (N, T) a kind."""
    parts = values.reshape(len(values), len(kinds), -1)
    return {kind: parts[:, k] for k, kind in enumerate(kinds)}


def _grid(times: Array, errors: Mapping[str, float]) -> Rows:
    """Make one row for every kind and time, kind by kind."""
    count = len(times)
    kind = np.repeat([KINDS.index(k) for k in errors], count).astype(np.int8)
    error = np.repeat(list(errors.values()), count).astype(float)
    return Rows(np.tile(np.asarray(times, float), len(errors)), kind, np.zeros(len(kind)), error)


def _mixture_quantile(mean: Array, deviation: Array, level: float) -> Array:
    """Return the quantile (T,) of equal mixtures of N normals each, by bisection of their distribution."""
    low = (mean - _REACH * deviation).min(axis=0)
    high = (mean + _REACH * deviation).max(axis=0)
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        below = ndtr((middle - mean) / deviation).mean(axis=0) < level
        low, high = np.where(below, middle, low), np.where(below, high, middle)
    return np.asarray(0.5 * (low + high))
