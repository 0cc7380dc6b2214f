"""The exact likelihood of measured rows and the posterior density it makes with the prior."""

from __future__ import annotations

import numpy as np

from emu.families.density import Array
from emu.inference.wander import wander_log_density
from emu.observe.rows import Rows
from emu.problem import Q_LIKE, U_LIKE, Problem

__all__ = ["log_likelihood", "log_posterior"]


def log_likelihood(problem: Problem, theta: Array, rows: Rows) -> Array:
    """Return the log probability density of the rows given parameters.

    Rows are independent and Gaussian, but for the wander of q and of u where the model has one: that
    correlates all q (and Q) rows, and all u (and U) rows, and is integrated out exactly.

    Args:
        theta: (N, P) valid parameters.
        rows: R rows in geometric units.

    Returns:
        (N,) float64; minus infinity where the model failed.
    """
    expected = problem.expected(theta, rows)
    residual, variance = rows.value - expected.mean, problem.variance(theta, rows)
    scatter = problem.scatter(theta)
    total = np.zeros(len(theta))
    independent = np.ones(len(rows), bool)
    if scatter is not None:
        for like in (Q_LIKE, U_LIKE):
            here = np.isin(rows.kind, like)
            independent &= ~here
            total += wander_log_density(
                residual[:, here], variance[:, here], expected.lever[:, here], rows.time[here], *scatter
            )
    total += _independent(residual[:, independent], variance[:, independent])
    return np.where((expected.failures > 0) | np.isnan(total), -np.inf, total)


def log_posterior(problem: Problem, theta: Array, rows: Rows) -> Array:
    """Return log prior plus log likelihood (N,) of theta (N, P): the posterior but for the evidence.

    The likelihood is computed only where the prior is not zero.
    """
    log_p = problem.prior.log_prob(theta)
    inside = np.isfinite(log_p)
    if inside.any():
        log_p[inside] += log_likelihood(problem, np.asarray(theta, float)[inside], rows)
    return log_p


def _independent(residual: Array, variance: Array) -> Array:
    """Sum log normal densities over rows: (N, R) to (N,)."""
    terms = residual**2 / variance + np.log(2.0 * np.pi * variance)
    return np.asarray(-0.5 * terms.sum(axis=1), float)
