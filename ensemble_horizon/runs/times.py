"""Times as whole microseconds, in any CF calendar.

Every date becomes an integer: microseconds since 1970-01-01 in its own calendar. Integers compare
and subtract exactly, in every calendar, and cost nothing to keep.
"""

from __future__ import annotations

import re
from datetime import datetime, timedelta

import cftime
import numpy as np
import numpy.typing as npt

MICROSECONDS_PER_HOUR = 3_600_000_000
STANDARD = ("standard", "gregorian", "proleptic_gregorian")

# Marks a field that is left out of an alignment.
OUTSIDE = int(np.iinfo(np.int64).min)

_UNIT_MICROSECONDS = {
    ("nanoseconds", "nanosecond", "ns"): 1e-3,
    ("microseconds", "microsecond", "us"): 1.0,
    ("milliseconds", "millisecond", "ms"): 1e3,
    ("seconds", "second", "secs", "sec", "s"): 1e6,
    ("minutes", "minute", "mins", "min"): 6e7,
    ("hours", "hour", "hrs", "hr", "h"): 3.6e9,
    ("days", "day", "d"): 8.64e10,
    ("weeks", "week"): 6.048e11,
}
_MICROSECONDS = {name: size for names, size in _UNIT_MICROSECONDS.items() for name in names}
_SINCE = re.compile(r"^\s*(\w+)\s+since\s+(.+?)\s*$", re.IGNORECASE)
_NS_RANGE = (-9_223_372_036_854_775, 9_223_372_036_854_775)

Ticks = npt.NDArray[np.int64]


def unit_kind(units: str) -> str | None:
    """``"date"`` for 'hours since ...', ``"duration"`` for 'hours', otherwise None.

    Examples
    --------
    >>> unit_kind("hours since 2024-01-01"), unit_kind("Days"), unit_kind("K")
    ('date', 'duration', None)
    """
    if _SINCE.match(units):
        return "date"
    return "duration" if units.strip().lower() in _MICROSECONDS else None


def decode_dates(values: np.ndarray, units: str, calendar: str) -> Ticks:
    """Ticks of dates stored as numbers with CF ``units``; any shape.

    Raises
    ------
    ValueError
        For units or a calendar that no date follows from, and for missing values.

    Examples
    --------
    >>> decode_dates(np.array([0, 6]), "hours since 1970-01-02", "standard") / 3.6e9
    array([24., 30.])
    """
    found = _SINCE.match(units)
    if found is None:
        raise ValueError(f"units {units!r} are not of the form 'hours since ...'")
    size = _MICROSECONDS.get(found.group(1).lower())
    if size is None:
        dates = np.asarray(cftime.num2date(values, units, calendar))
        ticks = [date_ticks(date) for date in dates.flat]
        return np.array(ticks, dtype=np.int64).reshape(dates.shape)
    origin = cftime.num2date(0, units, calendar, only_use_cftime_datetimes=True)
    return date_ticks(origin) + _scaled(values, size)


def decode_durations(values: np.ndarray, units: str) -> Ticks:
    """Ticks of durations stored as numbers with ``units`` such as hours or days; any shape."""
    return _scaled(values, _MICROSECONDS[units.strip().lower()])


def date_ticks(date: cftime.datetime | datetime) -> int:
    """Ticks of one date."""
    if isinstance(date, cftime.datetime):
        units = "microseconds since 1970-01-01"
        return int(cftime.date2num(date, units, calendar=date.calendar or "standard"))
    return (date.replace(tzinfo=None) - datetime(1970, 1, 1)) // timedelta(microseconds=1)


def to_dates(ticks: Ticks, calendar: str) -> np.ndarray:
    """Dates of ticks: datetime64[ns], or cftime objects in a calendar that has no datetime64."""
    ticks = np.asarray(ticks, dtype=np.int64)
    inside = ticks.size == 0 or (ticks.min() > _NS_RANGE[0] and ticks.max() < _NS_RANGE[1])
    if calendar in STANDARD and inside:
        return ticks.astype("datetime64[us]").astype("datetime64[ns]")
    dates = cftime.num2date(
        ticks, "microseconds since 1970-01-01", calendar, only_use_cftime_datetimes=True
    )
    return np.asarray(dates, dtype=object)


def to_hours(ticks: Ticks) -> npt.NDArray[np.float64]:
    """Hours of ticks."""
    return np.asarray(ticks, dtype=np.float64) / MICROSECONDS_PER_HOUR


def iso_text(tick: int, calendar: str) -> str:
    """A date as text, to the minute unless it has seconds.

    Examples
    --------
    >>> iso_text(0, "standard")
    '1970-01-01T00:00'
    """
    date = cftime.num2date(
        int(tick), "microseconds since 1970-01-01", calendar, only_use_cftime_datetimes=True
    )
    return str(date.strftime("%Y-%m-%dT%H:%M" + (":%S" if date.second else "")))


def _scaled(values: np.ndarray, size: float) -> Ticks:
    array = np.ma.asarray(values)
    if np.ma.getmaskarray(array).any() or not np.isfinite(np.asarray(array, dtype=float)).all():
        raise ValueError("some of the times are missing")
    plain = np.asarray(array)
    if plain.dtype.kind in "iu" and size >= 1:
        return plain.astype(np.int64) * np.int64(size)
    ticks = np.rint(plain.astype(np.float64) * size)
    if plain.dtype == np.float32 and plain.size:
        # A float32 day count is off by seconds; whole minutes are what was meant.
        minute = np.rint(ticks / 6e7) * 6e7
        slack = float(np.spacing(np.abs(plain).max())) * size
        ticks = np.where(np.abs(ticks - minute) <= slack, minute, ticks)
    return ticks.astype(np.int64)
