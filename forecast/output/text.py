"""How numbers, times and charts are said in words."""

from __future__ import annotations

import math
from datetime import UTC, datetime, tzinfo
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo

import numpy as np

from forecast.errors import printable

if TYPE_CHECKING:
    import xarray as xr

    from forecast.outlook import Window
    from forecast.output.chart_data import TimeHeight

__all__ = [
    "answer_lines",
    "chart_text",
    "day_and_month",
    "local_time",
    "metres",
    "percent",
    "profile_counts",
    "shorten",
    "time_span",
    "zone_name",
]

_SURE = 0.9  # share of members that agree on a duct, as the solid outlines of the charts
_MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")


def percent(share: float) -> str:
    """A share as whole per cent; a dash if unknown."""
    return "–" if not math.isfinite(share) else f"{100.0 * share:.0f} %"


def metres(height: float) -> str:
    """A height or distance in whole metres, from 10 km in km; a dash if unknown."""
    if not math.isfinite(height):
        return "–"
    return f"{height / 1000.0:.1f} km" if abs(height) >= 10e3 else f"{height:.0f} m"


def local_time(time: datetime, zone: tzinfo) -> str:
    """Day, month and time, such as 3 Jun 18:07; English month names in any locale."""
    there = time.astimezone(zone)
    return f"{day_and_month(there)} {there:%H:%M}"


def day_and_month(time: datetime) -> str:
    """Day and month, such as 3 Jun; English month names in any locale."""
    return f"{time.day} {_MONTHS[time.month - 1]}"


def time_span(start: datetime, end: datetime, zone: tzinfo) -> str:
    """From start to end, the day said twice only if there are two."""
    if start == end:
        return local_time(start, zone)
    last = end.astimezone(zone)
    if start.astimezone(zone).date() == last.date():
        return f"{local_time(start, zone)} to {last:%H:%M}"
    return f"{local_time(start, zone)} to {local_time(end, zone)}"


def answer_lines(windows: list[Window], zone: tzinfo, limit: int = 60) -> tuple[str, str]:
    """What to go for, how likely and how sure; and when.

    Parameters
    ----------
    windows : list of Window
        Best first.
    zone : tzinfo
        Local time.
    limit : int
        Most letters of the window's subject.

    Returns
    -------
    tuple of str
        Two lines; the second is empty if there is no window.
    """
    if not windows:
        return "Nothing worth going for in the times covered.", ""
    w = windows[0]
    head = "Best ahead" if w.ahead else "Nothing ahead. Best of late"
    best = f"{local_time(w.best_time, UTC)} UTC"
    if str(zone) != "UTC":
        best += f", {local_time(w.best_time, zone)} local time"
    when = f"{time_span(w.start, w.end, UTC)} UTC, likeliest at {best}"
    return (
        f"{head}: {shorten(w.subject, limit)}, {percent(w.probability)} likely "
        f"({percent(w.lower)} to {percent(w.upper)})",
        when if w.start < w.end else best,
    )


def zone_name(zone: ZoneInfo) -> str:
    """What to call the clock of a zone."""
    return "UTC" if zone.key == "UTC" else f"local time ({zone.key})"


def shorten(text: str, limit: int) -> str:
    """Text from outside, printable and bounded."""
    return printable(text, limit)


def profile_counts(data: TimeHeight) -> str:
    """How many ascents and model profiles a chart shows."""
    ascents = int(data.ascent.sum())
    numbers = ((ascents, "ascent"), (data.time.size - ascents, "model profile"))
    return " and ".join(f"{n} {what}{'s' if n != 1 else ''}" for n, what in numbers if n)


def chart_text(outlook: xr.Dataset, data: TimeHeight, windows: list[Window], zone: ZoneInfo) -> str:
    """Say in words what a time–height chart shows.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    data : TimeHeight
        What the chart shows.
    windows : list of Window
        Windows of this site, best first.
    zone : ZoneInfo
        Local time.

    Returns
    -------
    str
        A few sentences.
    """
    from forecast.output.chart_data import utc

    parts = [
        f"Time–height chart of {shorten(data.site, 80)}: {profile_counts(data)} from "
        f"{utc(data.time[0]):%Y-%m-%d %H:%M} to {utc(data.time[-1]):%Y-%m-%d %H:%M} UTC, "
        f"heights 0 to {data.edges[-1]:.0f} m."
    ]
    sure = data.likelihood >= _SURE
    if sure.any():
        heights = data.bins[sure.any(axis=0)]
        parts.append(
            f"In {int(sure.any(axis=1).sum())} of {data.time.size} profiles {percent(_SURE)} of "
            f"members agree on a duct, at heights from {heights[0]:.0f} to {heights[-1]:.0f} m."
        )
    else:
        parts.append(f"In no profile {percent(_SURE)} of members agree on a duct.")
    for strip in data.strips:
        known = strip.probability[np.isfinite(strip.probability)]
        if known.size:
            parts.append(
                f"{shorten(strip.label, 80)}: at most {percent(float(known.max()))}, "
                f"over half at {int((known > 0.5).sum())} of {known.size} times."
            )
    if windows:
        w = windows[0]
        parts.append(
            f"Best window: {shorten(w.subject, 80)}, {local_time(w.best_time, zone)} local time, "
            f"{percent(w.probability)}."
        )
    return " ".join(parts)
