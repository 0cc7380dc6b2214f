"""Central intervals of draws, on the line and on the circle, and their distance from the prior.

A circular parameter has no smallest value, so quantiles of the raw angles depend on where the
circle happens to be cut: draws about north, half of them 359 and half 1 degrees, would have the
median 180. The circle is therefore cut in the middle of its emptiest stretch (the complement of the
shortest arc that holds most draws; Fisher 1993, Statistical Analysis of Circular Data, section 2.3)
and the angles are counted on from there.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from emu.families.density import Array
from emu.families.parameters import Parameter

__all__ = ["Interval", "interval", "unwrapped", "weighted_quantiles"]

_LEVELS = (0.025, 0.16, 0.5, 0.84, 0.975)
_ARC = 0.95  # share of the draws in the arc whose complement is cut
_PERIOD = 360.0
_CLOSE = 0.05  # prior probability by which a quantile must move to count as informed


@dataclass(frozen=True)
class Interval:
    """Hold median and central 68 and 95 % intervals of one parameter beside the prior's.

    All values are in the parameter's unit. On the circle the median lies in the parameter's bounds, but
    `low95` may be below and `high95` above them, so that low <= median <= high always holds; take them
    modulo 360 to place them.

    Attributes:
        median, low68, high68, low95, high95: quantiles of the draws at 50, 16, 84, 2.5 and 97.5 %.
        prior_low68, prior_high68: quantiles of the prior at 16 and 84 %, from the same cut of the circle.
        contraction: 1 - (width of the 68 % interval) / (width of the prior's); 1 is a point, 0 the
            prior, negative wider than the prior.
        shift: largest distance, in prior probability, between a quantile of the draws
            (2.5, 16, 50, 84, 97.5 %) and the same quantile of the prior.
        informed: whether `shift` is more than chance and more than 5 percentage points.
    """

    median: float
    low68: float
    high68: float
    low95: float
    high95: float
    prior_low68: float
    prior_high68: float
    contraction: float
    shift: float
    informed: bool


def unwrapped(angles: Array, reference: Array, start: float = 0.0) -> Array:
    """Count angles on from the cut of the circle that suits a reference sample.

    Args:
        angles: any shape, degrees.
        reference: (N,) angles in degrees whose emptiest stretch is cut.
        start: the median of the reference will lie in [start, start + 360).

    Returns:
        The same angles, each moved by whole turns into one stretch of 360 degrees.

    Examples:
        >>> north = np.array([358.0, 359.0, 1.0, 2.0, 3.0])
        >>> unwrapped(north, north)
        array([-2., -1.,  1.,  2.,  3.])
    """
    cut = _emptiest(reference)
    median = cut + float(np.median((reference - cut) % _PERIOD))
    turns = np.floor((median - start) / _PERIOD) * _PERIOD
    return np.asarray(cut + (np.asarray(angles) - cut) % _PERIOD - turns)


def _emptiest(angles: Array) -> float:
    """Find the middle of the complement of the shortest arc that holds 95 % of the angles."""
    ordered = np.sort(np.asarray(angles) % _PERIOD)
    inside = max(1, int(np.ceil(_ARC * ordered.size)))
    last = np.arange(inside - 1, inside - 1 + ordered.size)
    ends = ordered[last % ordered.size] + _PERIOD * (last // ordered.size)
    best = int(np.argmin(ends - ordered))
    return float((ends[best] + ordered[best] + _PERIOD) / 2.0 % _PERIOD)


def interval(draws: Array, prior: Array, parameter: Parameter, independent: float | None = None) -> Interval:
    """Summarise the draws of one parameter and compare them with draws of its prior.

    The prior is taken as draws because validity cuts change its marginals away from the box's.

    Args:
        draws: (N,) equally weighted draws of the posterior, in the parameter's unit.
        prior: (M,) draws of the prior, M of some thousands.
        parameter: the parameter they belong to (for its period).
        independent: how many independent draws the N are worth; default N.

    Returns:
        The intervals with contraction and flag.
    """
    if parameter.circular:
        start = parameter.bounds[0]
        draws, prior = unwrapped(draws, draws, start), unwrapped(prior, draws, start)
    ordered = np.sort(prior)
    quantiles = np.quantile(draws, _LEVELS)
    low95, low68, median, high68, high95 = (float(x) for x in quantiles)
    prior_low, prior_high = (float(x) for x in np.quantile(ordered, (_LEVELS[1], _LEVELS[3])))
    shift = float(np.max(np.abs(np.searchsorted(ordered, quantiles) / prior.size - np.array(_LEVELS))))
    noise = _chance(float(draws.size) if independent is None else independent)
    return Interval(
        median,
        low68,
        high68,
        low95,
        high95,
        prior_low,
        prior_high,
        contraction=1.0 - (high68 - low68) / (prior_high - prior_low),
        shift=shift,
        informed=shift > max(_CLOSE, noise),
    )


def weighted_quantiles(draws: Array, weight: Array, parameter: Parameter) -> tuple[float, float, float]:
    """Return median and the ends of the central 68 % interval of weighted draws.

    The quantile at p is the first draw at which the sum of the weights of all draws up to it reaches p.

    Args:
        draws: (N,) in the parameter's unit.
        weight: (N,) at least zero, some of them positive.
        parameter: the parameter they belong to.

    Returns:
        (median, low68, high68), on the circle counted on as in `Interval`.
    """
    used = weight > 0.0
    draws, weight = draws[used], weight[used]
    if parameter.circular:
        draws = unwrapped(draws, _repeated(draws, weight), parameter.bounds[0])
    order = np.argsort(draws)
    reached = np.cumsum(weight[order])
    places = np.searchsorted(reached / reached[-1], (_LEVELS[2], _LEVELS[1], _LEVELS[3]))
    median, low, high = (float(x) for x in draws[order][np.minimum(places, draws.size - 1)])
    return median, low, high


def _repeated(draws: Array, weight: Array) -> Array:
    """Repeat draws in proportion to their weights (systematic resampling without a random offset)."""
    edges = np.cumsum(weight) / weight.sum()
    places = (np.arange(draws.size) + 0.5) / draws.size
    return np.asarray(draws[np.minimum(np.searchsorted(edges, places), draws.size - 1)])


def _chance(count: float) -> float:
    """Give the shift that draws of the prior itself exceed once in a thousand (Kolmogorov's limit).

    The largest distance of an empirical distribution of N draws from the true one exceeds
    1.95 / sqrt(N) with probability 0.001 (Kolmogorov 1933); five quantiles stay below that.
    """
    return 1.95 / float(np.sqrt(max(count, 1.0)))
