"""Times from numbers, a unit and a calendar, as files hold them."""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.errors import InputError, printable

__all__ = ["REAL_CALENDARS", "decode_times"]

#: Calendars whose dates are those of real nights (CF section 4.4.1).
REAL_CALENDARS = ("standard", "gregorian", "proleptic_gregorian")

#: Seconds per unit of time; longer units have no fixed length and are refused.
_SECONDS = {
    **dict.fromkeys(("microsecond", "microseconds", "us", "microsec", "microsecs"), 1e-6),
    **dict.fromkeys(("millisecond", "milliseconds", "ms", "msec", "msecs", "millisec"), 1e-3),
    **dict.fromkeys(("second", "seconds", "s", "sec", "secs"), 1.0),
    **dict.fromkeys(("minute", "minutes", "min", "mins"), 60.0),
    **dict.fromkeys(("hour", "hours", "h", "hr", "hrs"), 3600.0),
    **dict.fromkeys(("day", "days", "d"), 86400.0),
}


def decode_times(
    values: Any, units: str | None, calendar: Any, *, source: str = "", variable: str = ""
) -> np.ndarray:
    """Times from numbers, a unit like ``hours since 2024-05-24`` and a calendar.

    Parameters
    ----------
    values : array_like
        Numbers; NaN becomes NaT.
    units : str or None
        CF unit of time.
    calendar : str or None
        CF calendar; None is ``standard``.
    source, variable : str
        Named in the error.

    Returns
    -------
    ndarray of datetime64[ns]

    Raises
    ------
    InputError
        If the unit or calendar cannot be used, or a time lies outside the years 1678–2261.
    """
    where = {"source": source, "variable": variable}
    name = "standard" if calendar is None else str(calendar).strip().lower()
    if name not in REAL_CALENDARS:
        raise InputError(
            f"calendar is {printable(calendar, 60)!r}, whose dates cannot be matched to real "
            f"nights; expected one of {', '.join(REAL_CALENDARS)}",
            **where,
        )
    word, _, epoch_text = (units or "").partition(" since ")
    seconds = _SECONDS.get(word.strip().lower())
    if seconds is None or not epoch_text.strip():
        raise InputError(
            f"unit of time is {printable(units, 60)!r}; expected 'seconds since <date>', also "
            "minutes, hours or days",
            **where,
            remedy=f'set names.time = "{variable} [seconds since <date>]"',
        )
    numbers = np.asarray(values, dtype=np.float64)
    epoch = _epoch(epoch_text.strip(), name, where)
    offsets = numbers * seconds
    with np.errstate(invalid="ignore"):
        total = offsets + epoch.astype("datetime64[s]").astype(np.int64)
        bad = np.isfinite(total) & ((total < -9.2e9) | (total > 9.2e9))
    if bad.any():
        raise InputError(
            f"holds times outside the years 1678 to 2261 (first such value "
            f"{numbers[bad].flat[0]:g} {printable(units, 60)})",
            **where,
        )
    whole = np.floor(np.nan_to_num(offsets))
    rest = np.round((np.nan_to_num(offsets) - whole) * 1e9)
    result = (
        epoch.astype("datetime64[ns]")
        + whole.astype("timedelta64[s]").astype("timedelta64[ns]")
        + rest.astype("timedelta64[ns]")
    )
    return np.where(np.isfinite(numbers), result, np.datetime64("NaT", "ns"))


def _epoch(text: str, calendar: str, where: dict[str, str]) -> np.datetime64:
    """Reference date as datetime64[us] of the proleptic Gregorian calendar."""
    import cftime

    try:
        date = cftime.num2date(0, f"seconds since {text}", calendar="standard")
    except (ValueError, OverflowError, TypeError) as error:
        raise InputError(
            f"reference date of the time unit is {printable(text, 60)!r} ({error})", **where
        ) from error
    if date.year < 1583:
        if calendar == "proleptic_gregorian":
            date = cftime.num2date(0, f"seconds since {text}", calendar=calendar)
        else:
            # Days since a Julian date: count them to a date both calendars share.
            shared = cftime.num2date(0, "seconds since 2000-01-01", calendar="standard")
            return np.datetime64("2000-01-01", "us") - np.timedelta64(
                round((shared - date).total_seconds() * 1e6), "us"
            )
    return np.datetime64(date.isoformat(), "us")
