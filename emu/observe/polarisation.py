"""Position angle and polarised fraction as q and u, where that is honest.

The errors of an angle and of an amplitude are Gaussian only for strong polarisation: at p/σ = 5 the mean
measured amplitude lies 2 % high and the angle's error is 5.858° where first order gives 5.730° (Wardle &
Kronberg 1974, ApJ 194, 249); below that both part quickly from a Gaussian. Hence MIN_SIGNAL.
"""

import math

import numpy as np
from numpy.typing import NDArray

from emu.errors import UserError
from emu.observe.sheet import Sheet

__all__ = ["MIN_SIGNAL", "MAX_ANGLE_ERROR", "fractions_of"]

MIN_SIGNAL = 5.0
"""Smallest polarised fraction over its error that becomes q and u."""

MAX_ANGLE_ERROR = 5.86
"""Largest error of an EVPA that becomes q and u, degrees: that at p/σ = MIN_SIGNAL."""

# q and u rows carry no correlation. They have none where the error circle is round: σ_p = 2 p σ_χ.
_MOST_OBLONG = 2.0
_SAME_TIME = 1e-3


def fractions_of(
    sheet: Sheet, seconds: NDArray[np.float64], value: NDArray[np.float64], error: NDArray[np.float64]
) -> tuple[NDArray[np.str_], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Replace each pair of an EVPA and a polarised fraction at one time by q and u.

    q = p cos 2χ and u = p sin 2χ, each with the larger of the errors along (σ_p) and across (2 p σ_χ).

    Args:
        sheet: rows of one flare.
        seconds: (R,) their times.
        value, error: (R,) in common units; EVPA in radians.

    Returns:
        what (S,), seconds (S,), value (S,), error (S,), all other rows first and unchanged.

    Raises:
        UserError: a row without its partner, errors too large or too unlike for a Gaussian, or q and u
            rows beside EVPA.
    """
    angle, amount = np.flatnonzero(sheet.what == "evpa"), np.flatnonzero(sheet.what == "polarised_fraction")
    if not angle.size and not amount.size:
        return sheet.what, seconds, value, error
    if np.any(np.isin(sheet.what, ("q", "u", "Q", "U"))):
        raise UserError(f"{sheet.where}: has Stokes rows beside evpa, which count twice; keep one of the two")
    angle, amount = _pair(sheet, seconds, angle, amount)
    for at_angle, at_amount in zip(angle.tolist(), amount.tolist(), strict=True):
        _check_gaussian(sheet, at_angle, at_amount, value, error)
    p, chi = value[amount], value[angle]
    sigma = np.maximum(error[amount], 2.0 * p * error[angle])
    others = ~np.isin(sheet.what, ("evpa", "polarised_fraction"))
    return (
        np.concatenate([sheet.what[others], np.full(p.size, "q"), np.full(p.size, "u")]),
        np.concatenate([seconds[others], seconds[angle], seconds[angle]]),
        np.concatenate([value[others], p * np.cos(2.0 * chi), p * np.sin(2.0 * chi)]),
        np.concatenate([error[others], sigma, sigma]),
    )


def _pair(
    sheet: Sheet, seconds: NDArray[np.float64], angle: NDArray[np.int64], amount: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Bring both to one order of time, and refuse a row without a partner."""
    for mine, theirs, partner in ((angle, amount, "polarised_fraction"), (amount, angle, "evpa")):
        for place in mine:
            if np.count_nonzero(np.abs(seconds[theirs] - seconds[place]) < _SAME_TIME) != 1:
                raise sheet.refuse(
                    place,
                    f"{sheet.what[place]} needs one {partner} at the same time to become q and u; add it or "
                    "remove the row",
                )
    return angle[np.argsort(seconds[angle])], amount[np.argsort(seconds[amount])]


def _check_gaussian(
    sheet: Sheet, angle: int, amount: int, value: NDArray[np.float64], error: NDArray[np.float64]
) -> None:
    p, sigma_p, sigma_chi = float(value[amount]), float(error[amount]), float(error[angle])
    if p < MIN_SIGNAL * sigma_p:
        raise sheet.refuse(
            amount,
            f"polarised_fraction is only {p / sigma_p:.1f} times its error; below {MIN_SIGNAL:g} it is not "
            "Gaussian in q and u (Wardle & Kronberg 1974); give q and u themselves",
        )
    if math.degrees(sigma_chi) > MAX_ANGLE_ERROR:
        raise sheet.refuse(
            angle,
            f"error of evpa is {math.degrees(sigma_chi):.1f} deg; above {MAX_ANGLE_ERROR} it is not Gaussian "
            "in q and u (Wardle & Kronberg 1974); give q and u themselves",
        )
    oblong = 2.0 * p * sigma_chi / sigma_p
    if not 1.0 / _MOST_OBLONG <= oblong <= _MOST_OBLONG:
        raise sheet.refuse(
            angle,
            f"error of evpa is {oblong:.2g} times what the error of polarised_fraction makes it, so that q "
            f"and u would be correlated (taken: {1 / _MOST_OBLONG:g} to {_MOST_OBLONG:g}); give q and u "
            "themselves",
        )
