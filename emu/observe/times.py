"""Turn a table's time column, in any format, into seconds after the flare's reference time."""

import datetime
import warnings
from collections.abc import Mapping
from typing import Any

import numpy as np
from astropy import units
from astropy.time import Time
from numpy.typing import NDArray

from emu.errors import UserError
from emu.observe.sheet import Sheet

__all__ = ["seconds_of"]

_SECONDS_A_DAY = 86400.0
_ELAPSED = "elapsed"
_LAST_DATE = 5373484.0  # Julian date of the end of the year 9999, the last that ISO dates can write


def seconds_of(sheet: Sheet) -> tuple[NDArray[np.float64], str]:
    """Count the seconds from t_ref to each row.

    t_ref is the metadata's, else the middle between the first and the last row.

    Args:
        sheet: rows of one flare. Its time column holds an astropy Time, or numbers or texts in
            `time_format` (any of astropy's, or `elapsed` for numbers with a unit, the default for these).

    Returns:
        (R,) float64 seconds, and t_ref as a text: ISO, or a number with its unit.

    Raises:
        UserError: a time is missing or cannot be read, or the format, scale or unit is unknown.
    """
    _refuse_empty(sheet)
    layout = _format(sheet)
    return _elapsed(sheet) if layout == _ELAPSED else _absolute(sheet, layout)


def _refuse_empty(sheet: Sheet) -> None:
    mask = np.broadcast_to(np.asarray(getattr(sheet.time, "mask", False), dtype=bool), sheet.row.shape)
    if not isinstance(sheet.time, Time) and np.asarray(sheet.time).dtype.kind == "f":
        mask = mask | ~np.isfinite(np.asarray(sheet.time))
    for place in np.flatnonzero(mask):
        raise sheet.refuse(place, "time is empty or NaN; fill it in or remove the row")


def _format(sheet: Sheet) -> str | None:
    """Return "elapsed", an astropy format, or None to let astropy see for itself."""
    stated = sheet.meta.get("time_format")
    if isinstance(sheet.time, Time):
        return None
    if stated is not None and stated != _ELAPSED and stated not in Time.FORMATS:
        known = ", ".join((_ELAPSED, *Time.FORMATS))
        raise UserError(f"{sheet.where}: time_format {stated!r} is unknown; one of {known}")
    if stated is not None:
        return str(stated)
    numbers = np.asarray(sheet.time).dtype.kind in "iuf" or _stated_unit(sheet)
    return _ELAPSED if numbers else None


def _elapsed(sheet: Sheet) -> tuple[NDArray[np.float64], str]:
    text = _time_unit(sheet)
    factor = _second_factor(sheet, text)
    number = np.array([_number(sheet, place, cell) for place, cell in enumerate(sheet.time.tolist())])
    stated = _of_flare(sheet, "t_ref")
    middle = 0.5 * (float(number.min()) + float(number.max()))
    reference = middle if stated is None else _plain_number(sheet, stated)
    zero = _of_flare(sheet, "time_zero")
    return (number - reference) * factor, _reference_text(sheet, zero, reference, text, factor)


def _number(sheet: Sheet, place: int, cell: Any) -> float:
    try:
        return float(cell)
    except (TypeError, ValueError):
        raise sheet.refuse(place, f"time is {cell!r}; give a number, or state time_format") from None


def _stated_unit(sheet: Sheet) -> str | None:
    text = sheet.units["time"] or sheet.meta["units"].get("time")
    return None if text is None else str(text)


def _time_unit(sheet: Sheet) -> str:
    text = _stated_unit(sheet)
    if not text:
        raise UserError(
            f"{sheet.where}: column time has no unit; give one in the header or as units = {{time: min}}, "
            "or state time_format, such as mjd"
        )
    return text


def _second_factor(sheet: Sheet, text: str) -> float:
    try:
        return float(units.Unit(text).to(units.s))
    except (ValueError, TypeError, units.UnitConversionError):
        raise UserError(f"{sheet.where}: unit {text!r} of time is no time; give s, min, h or d") from None


def _plain_number(sheet: Sheet, stated: Any) -> float:
    if isinstance(stated, bool) or not isinstance(stated, int | float) or not np.isfinite(stated):
        raise UserError(f"{sheet.where}: t_ref is {stated!r}; give a number in the unit of column time")
    return float(stated)


def _reference_text(sheet: Sheet, zero: Any, reference: float, unit: str, factor: float) -> str:
    number = f"{reference:.12g} {unit}"
    if zero is None:
        return number
    if reference == 0.0:
        return str(zero)
    start = _read_time(sheet, zero, None, "time_zero")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return str((start + reference * factor * units.s).isot)


def _absolute(sheet: Sheet, layout: str | None) -> tuple[NDArray[np.float64], str]:
    times = sheet.time if isinstance(sheet.time, Time) else _read_times(sheet, layout)
    for place in np.flatnonzero(~_in_calendar(times)):
        raise sheet.refuse(place, "time is no date from the years -4712 to 9999; check time_format")
    since_first = _difference(times, times[0])
    stated = _of_flare(sheet, "t_ref")
    if stated is None:
        reference = 0.5 * (float(since_first.min()) + float(since_first.max()))
    else:
        moment = _read_time(sheet, stated, times.format if isinstance(stated, int | float) else None, "t_ref")
        reference = float(_difference(moment, times[0]))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        text = str((times[0] + reference * units.s).isot)
    return since_first - reference, text


def _read_times(sheet: Sheet, layout: str | None) -> Time:
    cells = np.asarray(sheet.time)
    try:
        return _make_time(cells, layout, _scale(sheet))
    except Exception:  # astropy raises many classes for a bad date; find the row that it is in
        for place, cell in enumerate(cells.tolist()):
            _read_time(sheet, cell, layout, f"row {sheet.row[place]}: time")
        raise


def _scale(sheet: Sheet) -> str:
    # Only differences of times are used, and these hardly depend on the scale.
    scale = sheet.meta.get("time_scale", "utc")
    if scale not in Time.SCALES:
        raise UserError(f"{sheet.where}: time_scale {scale!r} is unknown; one of {', '.join(Time.SCALES)}")
    return str(scale)


def _read_time(sheet: Sheet, cell: Any, layout: str | None, label: str) -> Time:
    if isinstance(cell, datetime.date) and not isinstance(cell, datetime.datetime):
        cell = cell.isoformat()
    scale = _scale(sheet)
    wanted = layout or "an ISO date such as 2031-05-04T21:10:00"
    said = f"{sheet.where}: {label} is {str(cell)!r}, which is not {wanted}"
    try:
        time = _make_time(cell, layout, scale)
    except Exception:  # astropy raises many classes for a bad date
        raise UserError(said) from None
    if not _in_calendar(time):
        raise UserError(f"{said} from the years -4712 to 9999")
    return time


def _make_time(cells: Any, layout: str | None, scale: str) -> Time:
    with warnings.catch_warnings():
        # Leap seconds of years to come are not known; a flare is too short to notice.
        warnings.simplefilter("ignore")
        return Time(cells, format=layout, scale=scale)


def _in_calendar(times: Time) -> NDArray[np.bool_]:
    days = np.asarray(times.jd1 + times.jd2)
    return (days >= 0.0) & (days <= _LAST_DATE)


def _difference(later: Time, first: Time) -> NDArray[np.float64]:
    """Return later - first in seconds, leap seconds counted where the scale has them."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        if first.scale == "utc":
            later, first = later.tai, first.tai
        days = (later.jd1 - first.jd1) + (later.jd2 - first.jd2)
    return np.asarray(days) * _SECONDS_A_DAY


def _of_flare(sheet: Sheet, key: str) -> Any:
    """Return an entry of the metadata, which may be a table by flare."""
    entry = sheet.meta.get(key)
    if not isinstance(entry, Mapping):
        return entry
    # A flare named 3 is a number as a key in YAML.
    return {str(name): value for name, value in entry.items()}.get(sheet.flare)
