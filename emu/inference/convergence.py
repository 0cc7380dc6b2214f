"""Whether several chains of walkers agree, and how long they are in units of their memory."""

from __future__ import annotations

import numpy as np
from scipy.special import ndtri
from scipy.stats import rankdata

from emu.families.density import Array
from emu.families.parameters import Parameter

__all__ = ["chain_features", "length_over_memory", "rank_rhat"]


def chain_features(theta: Array, parameters: tuple[Parameter, ...]) -> Array:
    """Replace every circular parameter by its sine and cosine: (..., P) to (..., F)."""
    columns: list[Array] = []
    for column, parameter in enumerate(parameters):
        value = theta[..., column]
        if parameter.circular:
            columns += [np.sin(np.radians(value)), np.cos(np.radians(value))]
        else:
            columns.append(value)
    return np.stack(columns, axis=-1)


def rank_rhat(chains: Array) -> float:
    """Compare chains of one quantity: rank-normalised split R-hat, bulk or tails, whichever is larger.

    Source: Vehtari et al. 2021, equations 3, 4, 14 and section 4.

    Args:
        chains: (C, S) values; an ensemble of walkers counts as one chain, ordered by step.
    """
    half = chains.shape[1] // 2
    split = np.concatenate([chains[:, :half], chains[:, -half:]])
    folded = np.abs(split - np.median(split))
    return max(_rhat(_normal_scores(split)), _rhat(_normal_scores(folded)))


def length_over_memory(chains: Array) -> float:
    """Return the number of steps over the integrated autocorrelation time of one quantity.

    The time is that of emcee (Goodman & Weare 2010), averaged over walkers; the least of all chains is
    returned.

    Args:
        chains: (C, S, W) values of C ensembles of W walkers.
    """
    from emcee.autocorr import integrated_time  # loads h5py where present: only when asked for

    steps = chains.shape[1]
    times = [float(integrated_time(chain[:, :, None], tol=0)[0]) for chain in chains]
    return float(min(steps / time for time in times))


def _normal_scores(values: Array) -> Array:
    """Replace values by normal scores of their ranks among all chains (offset 3/8, Blom 1958)."""
    ranks = rankdata(values).reshape(values.shape)
    return np.asarray(ndtri((ranks - 0.375) / (values.size + 0.25)), float)


def _rhat(chains: Array) -> float:
    """Return the square root of pooled variance over variance within chains (C, S)."""
    steps = chains.shape[1]
    within = chains.var(axis=1, ddof=1).mean()
    between = chains.mean(axis=1).var(ddof=1)
    return float(np.sqrt((steps - 1) / steps + between / within))
