"""How often something was measured, read off the times of exposures in several flares."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Cadence", "measure_cadence", "outward"]

# An interval beyond this many times the flare's median is not what the observer meant.
_REGULAR = 1.6
# A median of fewer intervals can be a gap itself.
_ENOUGH = 4


@dataclass(frozen=True)
class Cadence:
    """Hold the intervals between exposures, minutes.

    Args:
        low, high: range of the intervals as they were meant; none of a flare's typical ones is below low.
        unsteady: typical relative departure of an interval from its flare's cadence.
        gaps: (G,) lengths of the gaps in all flares: each interval beyond high, less one usual interval.
        most_gaps: the largest number of gaps in one flare.
    """

    low: float
    high: float
    unsteady: float
    gaps: NDArray[np.float64]
    most_gaps: int


def measure_cadence(exposures: Sequence[NDArray[np.float64]]) -> Cadence | None:
    """Describe the cadence of one stream.

    Args:
        exposures: one array a flare, ascending times in minutes.

    Returns:
        The cadence, or None where no flare has two exposures.
    """
    steps = [np.diff(times) for times in exposures if times.size > 1]
    if not steps:
        return None
    sure = [step for step in steps if step.size >= _ENOUGH] or steps
    regular = [step[step <= _REGULAR * np.median(step)] for step in sure]
    # The mean as well: where a few short intervals stand among long ones, more exposures fit than the
    # median says, and the other way round.
    least = min(min(float(np.median(step)), float(step.mean())) for step in steps)
    low, high = outward(least, max(float(step.max()) for step in regular))
    # An interval of exactly the longest cadence may exceed it by a rounding error.
    gaps = [step[step > high * (1.0 + 1e-6)] - min(float(np.median(step)), high) for step in steps]
    return Cadence(
        low=low,
        high=high,
        unsteady=_unsteady(regular),
        gaps=np.concatenate(gaps),
        most_gaps=max(gap.size for gap in gaps),
    )


def _unsteady(regular: Sequence[NDArray[np.float64]]) -> float:
    departures = [float(np.mean(np.abs(step / step.mean() - 1.0))) for step in regular if step.size > 1]
    # The mean departure of a uniform one is half its amplitude.
    return round(min(2.0 * float(np.median(departures)), 0.9), 2) if departures else 0.0


def outward(low: float, high: float, digits: int = 2) -> tuple[float, float]:
    """Round a range 0 < low <= high to a few digits so that it only grows.

    Examples:
        >>> outward(1.234, 5.671)
        (1.2, 5.7)
        >>> outward(0.1, 20.0)
        (0.1, 20.0)
    """
    return _rounded(low, digits, math.floor), _rounded(high, digits, math.ceil)


def _rounded(number: float, digits: int, towards: Callable[[float], int]) -> float:
    place = digits - 1 - math.floor(math.log10(number))
    scaled = number * 10.0**place
    # A number that has so few digits already must not move by a rounding error.
    whole = round(scaled) if math.isclose(scaled, round(scaled), rel_tol=1e-12) else towards(scaled)
    return round(whole / 10.0**place, max(place, 0))
