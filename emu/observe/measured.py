"""Judge the numbers of a flare and bring them to common units; every refusal names the row."""

import numpy as np
from astropy import units
from numpy.typing import NDArray

from emu.errors import UserError
from emu.observe.sheet import Sheet

__all__ = ["flux_unit_of", "in_common_units"]

_FLUXES = ("flux", "Q", "U")
_FRACTIONS = ("q", "u", "polarised_fraction")
# Magnitudes are no sum of Stokes parameters; the others are slips of the column.
_NO_FLUX = (units.mag, units.s, units.m, units.rad, units.kg)
_WANTED = {
    "q": units.dimensionless_unscaled,
    "u": units.dimensionless_unscaled,
    "polarised_fraction": units.dimensionless_unscaled,
    "evpa": units.rad,
    "east": units.uas,
    "north": units.uas,
}
_CURES = {"flux": "mJy", "Q": "mJy", "U": "mJy", "evpa": "deg", "east": "uas", "north": "uas"}
# Fractions beyond 1 by more than noise are percentages without a unit.
_SIGMAS = 5.0


def flux_unit_of(sheet: Sheet) -> str:
    """Return the unit that flux, Q and U rows are brought to: that of the first of these there is.

    Args:
        sheet: rows of one flare.

    Returns:
        Unit text for astropy.units; "" where there is no such row.

    Raises:
        UserError: the unit is missing, unknown or logarithmic.
    """
    for name in _FLUXES:
        if np.any(sheet.what == name):
            _unit(sheet, name, "value")
            return _unit_text(sheet, name, "value")
    return ""


def in_common_units(sheet: Sheet) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Check values and errors and convert them.

    Args:
        sheet: rows of one flare.

    Returns:
        value (R,), error (R,): flux, Q, U in `flux_unit_of(sheet)`, fractions as such, positions in
        microarcseconds, EVPA in radians.

    Raises:
        UserError: a number is missing, NaN or infinite, an error is not positive, a unit is missing or
            does not fit, or a fraction is out of range.
    """
    _check_numbers(sheet)
    value, error = sheet.value.copy(), sheet.error.copy()
    for name in dict.fromkeys(sheet.what.tolist()):
        mine = sheet.what == name
        value[mine] *= _factor(sheet, name, "value")
        error[mine] *= _factor(sheet, name, "error")
    _check_fractions(sheet, value, error)
    return value, error


def _check_numbers(sheet: Sheet) -> None:
    for name, column in (("value", sheet.value), ("error", sheet.error)):
        for place in np.flatnonzero(~np.isfinite(column)):
            said = f"{name} of {sheet.what[place]} is {_said(column[place])}"
            raise sheet.refuse(place, f"{said}; give a number or remove the row")
    for place in np.flatnonzero(sheet.error <= 0.0):
        raise sheet.refuse(
            place, f"error of {sheet.what[place]} is {sheet.error[place]:g}; give a positive 1-sigma error"
        )


def _said(number: float) -> str:
    return "empty or NaN" if np.isnan(number) else "infinite"


def _unit_text(sheet: Sheet, name: str, column: str) -> str:
    """Return the unit of a kind: its own, else that of the column, else that of the column value."""
    for text in (sheet.meta["units"].get(name), sheet.units[column], sheet.units["value"]):
        if text is not None:
            return str(text)
    if name in _FRACTIONS:
        return ""
    raise UserError(
        f"{sheet.where}: {name} has no unit; give it in the metadata, as units: {{{name}: {_CURES[name]}}}"
    )


def _unit(sheet: Sheet, name: str, column: str) -> units.UnitBase:
    text = _unit_text(sheet, name, column)
    try:
        unit = units.Unit(text)
    except (ValueError, TypeError):
        raise UserError(f"{sheet.where}: unit {text!r} of {name} is unknown to astropy; correct it") from None
    if name in _FLUXES and (not isinstance(unit, units.UnitBase) or any(map(unit.is_equivalent, _NO_FLUX))):
        raise UserError(f"{sheet.where}: unit {text!r} of {name} is no linear flux; convert it, say to mJy")
    return unit


def _factor(sheet: Sheet, name: str, column: str) -> float:
    unit = _unit(sheet, name, column)
    wanted = units.Unit(flux_unit_of(sheet)) if name in _FLUXES else _WANTED[name]
    try:
        return float(unit.to(wanted))
    except units.UnitConversionError:
        cure = f"one that converts to {wanted.to_string() or 'a plain fraction'}"
        raise UserError(f"{sheet.where}: unit {str(unit)!r} of {name} does not fit; give {cure}") from None


def _check_fractions(sheet: Sheet, value: NDArray[np.float64], error: NDArray[np.float64]) -> None:
    fraction = np.isin(sheet.what, _FRACTIONS)
    for place in np.flatnonzero(fraction & (np.abs(value) > 1.0 + _SIGMAS * error)):
        name = sheet.what[place]
        cure = f"for percentages give units: {{{name}: percent}}"
        raise sheet.refuse(place, f"{name} is {value[place]:g}, more than all the light; {cure}")
