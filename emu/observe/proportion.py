"""Notice a span of time that no flare of a black hole has: almost always a wrong unit of time."""

import numpy as np
from numpy.typing import NDArray

from emu.errors import UserError
from emu.units import Target

__all__ = ["SPANS", "check_span"]

SPANS = (3.0, 3000.0)
"""Shortest and longest span of a flare's rows, GM/c^3: light crosses the hole in a few, and at radius 15
an orbit at three tenths of the Keplerian rate takes some 1,200."""

# Where no target is named: the smallest and largest holes at the centres of galaxies, solar masses.
_LIGHTEST, _HEAVIEST = (Target("any", mass, 1.0) for mass in (1e5, 1e11))


def check_span(seconds: NDArray[np.float64], target: Target | None, where: str) -> None:
    """Refuse rows whose span is out of all proportion.

    Args:
        seconds: (R,) times of the rows after t_ref.
        target: whose flare it is; None if unknown, which allows every hole of 1e5 to 1e11 solar masses.
        where: file and flare, for the message.

    Raises:
        UserError: the span lies outside SPANS, or t_ref lies further from the rows than their span.
    """
    first, last = float(np.min(seconds)), float(np.max(seconds))
    span = last - first
    shortest = SPANS[0] * (target or _LIGHTEST).time_unit
    longest = SPANS[1] * (target or _HEAVIEST).time_unit
    if not shortest <= span <= longest:
        whose = f"target {target.name!r}" if target else "any target"
        raise UserError(
            f"{where}: rows span {_plain(span)}, out of proportion for {whose} ({_plain(shortest)} to "
            f"{_plain(longest)}); check the unit or format of time, and the target's mass"
        )
    if first > span or last < -span:
        off = max(first, -last)
        raise UserError(
            f"{where}: t_ref is {_plain(off)} from rows that span {_plain(span)}; correct it or leave it out"
        )


def _plain(seconds: float) -> str:
    for size, unit in ((86400.0, "d"), (3600.0, "h"), (60.0, "min")):
        if abs(seconds) >= 2.0 * size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds:.3g} s"
