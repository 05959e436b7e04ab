"""Which spans of time are worth going for, and the physical reason in a sentence of numbers."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from typing import TYPE_CHECKING

import numpy as np
import xarray as xr

from forecast.outlook.reasons import duct_reason, sightline_reason

if TYPE_CHECKING:
    from forecast.settings import Settings

__all__ = ["Window", "find_windows"]

_GAP = 1.5  # a pause longer than this many usual steps ends a window


@dataclass(frozen=True)
class Window:
    """A span of valid times over the threshold.

    Attributes
    ----------
    site : str
        Site.
    kind : str
        ``sightline`` or ``duct``.
    subject : str
        The sightline's name, or "duct under 300 m" and so on.
    start, end, best_time : datetime
        First, last and likeliest valid time, UTC; the likeliest of those that lie ahead, if any.
    probability, lower, upper : float
        At the likeliest valid time, with the 90 % interval.
    valid_times : int
        Valid times in the window.
    reason : str
        Why, from the numbers of the likeliest valid time.
    ahead : bool
        Whether it reaches beyond the site's latest ascent: something to plan for, not to look
        back on. A site without ascents has nothing but what lies ahead.
    """

    site: str
    kind: str
    subject: str
    start: datetime
    end: datetime
    best_time: datetime
    probability: float
    lower: float
    upper: float
    valid_times: int
    reason: str
    ahead: bool


def find_windows(outlook: xr.Dataset, settings: Settings) -> list[Window]:
    """Runs of valid times whose probability reaches the threshold, best first.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    settings : forecast.settings.Settings
        Holds ``window_threshold``.

    Returns
    -------
    list of Window
        What lies ahead first; then sightlines before ducts; within each by probability, its lower
        bound and time. A duct window inside one of a lower ceiling adds nothing and is left out.
    """
    windows: list[Window] = []
    site = outlook["site"].values.astype(str)
    for name in dict.fromkeys(site):
        rows = np.flatnonzero(site == name)
        for s in range(outlook.sizes.get("sightline", 0)):
            if str(outlook["sightline_site"].values[s]) == name:
                subject = str(outlook["sightline_name"].values[s])
                for run in _runs(outlook, rows, "sightline", s, settings.window_threshold):
                    windows.append(_window(outlook, run, "sightline", s, subject))
        lower: list[tuple[datetime, datetime]] = []
        for c, ceiling in enumerate(outlook["ceiling"].values):
            for run in _runs(outlook, rows, "duct", c, settings.window_threshold):
                window = _window(outlook, run, "duct", c, f"duct under {_height(ceiling)}")
                if not any(a <= window.start and window.end <= b for a, b in lower):
                    windows.append(window)
            lower += [(w.start, w.end) for w in windows if w.site == name and w.kind == "duct"]
    order = {"sightline": 0, "duct": 1}
    windows.sort(
        key=lambda w: (
            not w.ahead,
            order[w.kind],
            -w.probability,
            -w.lower,
            w.start,
            w.site,
            w.subject,
        )
    )
    return windows


def _runs(
    outlook: xr.Dataset, rows: np.ndarray, kind: str, item: int, threshold: float
) -> list[np.ndarray]:
    """Rows of one site in which the probability stays at or above the threshold."""
    chance = outlook[f"{kind}_probability"].values[rows, item]
    time = outlook["time"].values[rows].astype("datetime64[s]").astype(np.int64)
    if rows.size == 0:
        return []
    step = np.diff(time).astype(float)
    # Against both neighbours: ascents every 6 h and hourly model times may share a site.
    usual = np.maximum(np.append(step[1:], -np.inf), np.insert(step[:-1], 0, -np.inf))
    pause = (step > _GAP * usual) & np.isfinite(usual)
    likely = np.nan_to_num(chance, nan=-1.0) >= threshold
    breaks = np.flatnonzero((np.diff(likely.astype(int)) != 0) | pause) + 1
    return [
        rows[part]
        for part in np.split(np.arange(rows.size), breaks)
        if part.size and likely[part[0]]
    ]


def _window(outlook: xr.Dataset, run: np.ndarray, kind: str, item: int, subject: str) -> Window:
    chance = outlook[f"{kind}_probability"].values[run, item]
    lower = outlook[f"{kind}_probability_lower"].values[run, item]
    upper = outlook[f"{kind}_probability_upper"].values[run, item]
    latest = _latest_ascent(outlook, str(outlook["site"].values[run[0]]))
    ahead = _utc(outlook["time"].values[run[-1]]) > latest
    # Of a window that has begun, what is over is nothing to go for.
    past = np.array([ahead and _utc(outlook["time"].values[i]) <= latest for i in run])
    best = int(np.lexsort((np.arange(run.size), -lower, -chance, past))[0])
    row = int(run[best])
    times = [_utc(outlook["time"].values[i]) for i in (run[0], run[-1], row)]
    if kind == "sightline":
        reason = sightline_reason(outlook, row, item)
    else:
        reason = duct_reason(outlook, row, float(outlook["ceiling"].values[item]))
    return Window(
        str(outlook["site"].values[row]),
        kind,
        subject,
        times[0],
        times[1],
        times[2],
        float(chance[best]),
        float(lower[best]),
        float(upper[best]),
        int(run.size),
        reason,
        ahead,
    )


def _latest_ascent(outlook: xr.Dataset, site: str) -> datetime:
    rows = (outlook["site"].values.astype(str) == site) & (
        outlook["source_kind"].values.astype(str) == "ascent"
    )
    if not rows.any():
        return datetime.min.replace(tzinfo=UTC)
    return _utc(outlook["time"].values[rows].max())


def _utc(time: np.datetime64) -> datetime:
    return datetime.fromtimestamp(int(time.astype("datetime64[s]").astype(np.int64)), UTC)


def _height(metres: float) -> str:
    return f"{metres:.0f} m" if metres < 1000.0 else f"{metres / 1000.0:g} km"
