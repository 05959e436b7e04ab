"""What a time–height chart shows, as arrays: computed here, drawn in `forecast.output.charts`."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
import xarray as xr

from forecast.physics.sun import CIVIL_TWILIGHT, SUNRISE, sun_altitude

__all__ = ["Strip", "TimeHeight", "best_profile", "column_edges", "time_height", "utc"]

_GAP = 1.5  # a pause longer than this many usual steps is shown as a gap
_NEAR = 4  # steps on either side that tell which step is usual
_WIDEST = np.timedelta64(24 * 3600, "s")  # no profile stands for more than a day
_ROWS = 420  # heights at which the layers are looked up; about one per pixel
_LONE_WIDTH = np.timedelta64(6 * 3600, "s")  # width of a profile that stands alone
_SUN_STEP = np.timedelta64(600, "s")
_MOST_SUN_STEPS = 6000


@dataclass(frozen=True, eq=False)
class Strip:
    """Probability of one thing over time: label and arrays (profile,)."""

    label: str
    kind: str
    probability: np.ndarray
    lower: np.ndarray
    upper: np.ndarray


@dataclass(frozen=True)
class TimeHeight:
    """Data of a time–height chart of one site.

    ``left``, ``right``: edges of each profile's column in time; ``edges``: height edges (m) of the
    rows; ``gradient``: dM/dz (per km) of the native layer that covers each row, (profile, row),
    NaN outside the profile; ``likelihood`` of lying inside a duct at ``bins`` (m), (profile, bin);
    ``light``: 0 night, 1 twilight, 2 day at ``light_time``, −1 if the place is not known;
    ``ahead``: profiles after the latest ascent, or all where there is no ascent.
    """

    site: str
    time: np.ndarray
    left: np.ndarray
    right: np.ndarray
    ascent: np.ndarray
    ahead: np.ndarray
    edges: np.ndarray
    gradient: np.ndarray
    bins: np.ndarray
    likelihood: np.ndarray
    strips: list[Strip]
    light_time: np.ndarray
    light: np.ndarray
    rows: np.ndarray


def time_height(outlook: xr.Dataset, site: str, top: float) -> TimeHeight:
    """Gather what the chart of a site shows.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    site : str
        Name of the site.
    top : float
        Top of the chart, m.

    Returns
    -------
    TimeHeight
        Arrays; the gradients are those of the native layers, looked up and not interpolated.

    Raises
    ------
    ValueError
        If the outlook has no row of this site.
    """
    rows = np.flatnonzero(outlook["site"].values.astype(str) == site)
    if rows.size == 0:
        raise ValueError(f"time_height: no profile of site {site!r} in the outlook")
    time = outlook["time"].values[rows].astype("datetime64[s]")
    left, right = column_edges(time)
    edges = np.linspace(0.0, top, _ROWS + 1)
    bins = outlook["height_bin"].values
    keep = bins <= top
    strips = []
    for s in range(outlook.sizes.get("sightline", 0)):
        if str(outlook["sightline_site"].values[s]) == site:
            label = str(outlook["sightline_name"].values[s])
            strips.append(_strip(outlook, rows, "sightline", s, label))
    for c, ceiling in enumerate(outlook["ceiling"].values):
        under = f"{ceiling:.0f} m" if ceiling < 1000 else f"{ceiling / 1000:g} km"
        strips.append(_strip(outlook, rows, "duct", c, f"duct under {under}"))
    light_time, light = _daylight(outlook, rows, left.min(), right.max())
    ascent = outlook["source_kind"].values[rows].astype(str) == "ascent"
    latest = time[ascent].max(initial=np.datetime64("0001-01-01", "s"))
    return TimeHeight(
        site=site,
        time=time,
        left=left,
        right=right,
        ascent=ascent,
        ahead=time > latest,
        edges=edges,
        gradient=_rows_gradient(outlook, rows, edges),
        bins=bins[keep],
        likelihood=outlook["duct_likelihood"].values[rows][:, keep],
        strips=strips,
        light_time=light_time,
        light=light,
        rows=rows,
    )


def best_profile(data: TimeHeight, strip: Strip) -> int | None:
    """Which profile to name for a strip: the likeliest ahead, or of late if none lies ahead.

    Parameters
    ----------
    data : TimeHeight
        Data of the chart.
    strip : Strip
        One of its strips.

    Returns
    -------
    int or None
        Index along ``profile``, of equals the surest and then the earliest; None if no probability
        is known.
    """
    known = np.isfinite(strip.probability)
    choice = known & data.ahead if data.ahead.any() else known
    if not choice.any():
        return None
    lower = np.nan_to_num(strip.lower, nan=-1.0)
    chance = np.where(choice, strip.probability, -1.0)
    return int(np.lexsort((data.time, -lower, -chance))[0])


def column_edges(time: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Span of time that each profile stands for: half-way to its neighbours, never over a gap.

    Parameters
    ----------
    time : ndarray of datetime64[s]
        Valid times, rising.

    Returns
    -------
    tuple of ndarray
        Left and right edges.

    Notes
    -----
    A gap is a step longer than 1.5 times the median of the steps around it, so that both a missing
    ascent and the change from ascents to hourly model times show as they are.
    """
    if time.size == 1:
        return time - _LONE_WIDTH // 2, time + _LONE_WIDTH // 2
    step = np.diff(time).astype(float)
    around = np.pad(step, _NEAR, constant_values=np.nan)
    around = np.sort(np.lib.stride_tricks.sliding_window_view(around, 2 * _NEAR + 1), axis=1)
    middle = (np.isfinite(around).sum(axis=1) - 1) // 2  # of an even number, the shorter
    usual = around[np.arange(step.size), middle]
    half = 0.5 * np.minimum(np.where(step > _GAP * usual, usual, step), _WIDEST.astype(float))
    right = time + np.append(half, half[-1]).astype("timedelta64[s]")
    left = time - np.insert(half, 0, half[0]).astype("timedelta64[s]")
    return left, right


def utc(time: np.datetime64) -> datetime:
    """Timezone-aware datetime of a datetime64."""
    return datetime.fromtimestamp(int(time.astype("datetime64[s]").astype(np.int64)), UTC)


def _strip(outlook: xr.Dataset, rows: np.ndarray, kind: str, item: int, label: str) -> Strip:
    values = [
        outlook[f"{kind}_probability{suffix}"].values[rows, item]
        for suffix in ("", "_lower", "_upper")
    ]
    return Strip(label, kind, *values)


def _daylight(
    outlook: xr.Dataset, rows: np.ndarray, start: np.datetime64, end: np.datetime64
) -> tuple[np.ndarray, np.ndarray]:
    """Times and whether it is night (0), twilight (1) or day (2) then; −1 without a position."""
    length = end - start
    steps = min(max(int(length / _SUN_STEP), 2), _MOST_SUN_STEPS)
    seconds = (np.arange(steps) + 0.5) * length.astype(float) / steps
    time = start + seconds.astype("timedelta64[s]")
    latitude, longitude = (outlook[n].values[rows] for n in ("latitude", "longitude"))
    placed = np.flatnonzero(np.isfinite(latitude) & np.isfinite(longitude))
    if placed.size == 0:
        return time, np.full(steps, -1)
    altitude = sun_altitude(time, float(latitude[placed[0]]), float(longitude[placed[0]]))
    return time, (altitude > CIVIL_TWILIGHT).astype(int) + (altitude > SUNRISE)


def _rows_gradient(outlook: xr.Dataset, rows: np.ndarray, edges: np.ndarray) -> np.ndarray:
    """Gradient dM/dz (per km) of the native layer around the middle of each row."""
    middle = 0.5 * (edges[1:] + edges[:-1])
    out = np.full((rows.size, middle.size), np.nan)
    height = outlook["height"].values
    refractivity = outlook["refractivity"].values
    gradient = outlook["refractivity_gradient"].values
    radius = outlook["earth_radius"].values
    for i, row in enumerate(rows):
        # The gradient of a level is that to the next one with a refractivity.
        good = np.isfinite(height[row]) & np.isfinite(refractivity[row])
        z = height[row][good]
        steepness = gradient[row][good] + 1e9 / radius[row]
        layer = np.searchsorted(z, middle, side="right") - 1
        inside = (layer >= 0) & (layer < z.size - 1)
        out[i, inside] = steepness[layer[inside]]
    return out
