"""Where the ticks of a time axis stand and what is written at them, in any time zone."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta, tzinfo

from forecast.output.text import day_and_month

__all__ = ["time_ticks"]

_HOURS = (1, 2, 3, 6, 12)
_DAYS = (1, 2, 3, 5, 7, 14, 28, 56, 91, 182, 365)


def time_ticks(
    start: datetime, end: datetime, zone: tzinfo, most: int
) -> list[tuple[datetime, str]]:
    """Ticks at round hours or days of a zone.

    Parameters
    ----------
    start, end : datetime
        Ends of the axis, aware of their time zone.
    zone : tzinfo
        Zone whose hours and midnights count, also over a change of the clocks.
    most : int
        Most ticks wanted.

    Returns
    -------
    list of (datetime, str)
        Instants (UTC) and their labels: the hour, and the day wherever it is a new one.
    """
    hours = (end - start) / timedelta(hours=1)
    step = next((h for h in _HOURS if hours / h <= most), 0)
    days = next((d for d in _DAYS if hours / 24.0 / d <= most), _DAYS[-1])
    day = start.astimezone(zone).date()
    ticks: list[tuple[datetime, str]] = []
    named = None
    while (midnight := datetime(day.year, day.month, day.day, tzinfo=zone)) <= end:
        for hour in range(0, 24, step) if step else (0,):
            instant = midnight.replace(hour=hour).astimezone(UTC)
            there = instant.astimezone(zone)
            # An hour that the clocks skip comes back as another one.
            if not start <= instant <= end or there.hour != hour:
                continue
            if not step:
                # Counted from a fixed day, so that two axes show the same days.
                if day.toordinal() % days == 0:
                    ticks.append((instant, day_and_month(there)))
                continue
            parts = [f"{there:%H:%M}"]
            if day != named:
                parts = [day_and_month(there)] if hour == 0 else [*parts, day_and_month(there)]
                named = day
            ticks.append((instant, "\n".join(parts)))
        day += timedelta(days=1)
    return ticks
