"""What a time–height chart shows, as arrays: computed here, drawn in `forecast.output.charts`."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
import xarray as xr

from forecast.output.sun import CIVIL_TWILIGHT, sun_altitude

__all__ = ["Strip", "TimeHeight", "time_height"]

_GAP = 1.5  # a pause longer than this many usual steps is shown as a gap
_ROWS = 420  # heights at which the layers are looked up; about one per pixel
_LONE_WIDTH = np.timedelta64(6 * 3600, "s")  # width of a profile that stands alone
_SUN_STEPS = 600


@dataclass(frozen=True)
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
    ``light``: 0 night, 1 twilight, 2 day at ``light_time``.
    """

    site: str
    time: np.ndarray
    left: np.ndarray
    right: np.ndarray
    ascent: np.ndarray
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
    light_time = left.min() + (
        np.linspace(0.0, 1.0, _SUN_STEPS) * (right.max() - left.min()).astype(float)
    ).astype("timedelta64[s]")
    altitude = sun_altitude(
        light_time,
        float(outlook["latitude"].values[rows[0]]),
        float(outlook["longitude"].values[rows[0]]),
    )
    # The Sun's upper limb is seen on the horizon at -0.833°: 34' refraction, 16' radius.
    light = (altitude > CIVIL_TWILIGHT).astype(int) + (altitude > -0.833)
    return TimeHeight(
        site=site,
        time=time,
        left=left,
        right=right,
        ascent=outlook["source_kind"].values[rows].astype(str) == "ascent",
        edges=edges,
        gradient=_rows_gradient(outlook, rows, edges),
        bins=bins[keep],
        likelihood=outlook["duct_likelihood"].values[rows][:, keep],
        strips=strips,
        light_time=light_time,
        light=light,
        rows=rows,
    )


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
    """
    if time.size == 1:
        return time - _LONE_WIDTH // 2, time + _LONE_WIDTH // 2
    step = np.diff(time).astype(float)
    # A step is judged against the shorter of its neighbours' steps, so that both a missing ascent
    # and the change from ascents to hourly model times show as they are.
    around = np.stack([np.append(step[1:], np.inf), np.insert(step[:-1], 0, np.inf)])
    usual = np.maximum(np.where(np.isinf(around), -np.inf, around).max(axis=0), 0.0)
    usual = np.where(usual > 0.0, usual, step)
    gap = step > _GAP * usual
    half = 0.5 * np.where(gap, np.minimum(usual, step), step)
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


def _rows_gradient(outlook: xr.Dataset, rows: np.ndarray, edges: np.ndarray) -> np.ndarray:
    """Gradient dM/dz (per km) of the native layer around the middle of each row."""
    middle = 0.5 * (edges[1:] + edges[:-1])
    out = np.full((rows.size, middle.size), np.nan)
    height = outlook["height"].values
    gradient = outlook["refractivity_gradient"].values
    radius = outlook["earth_radius"].values
    for i, row in enumerate(rows):
        good = np.isfinite(height[row])
        z = height[row][good]
        steepness = gradient[row][good] + 1e9 / radius[row]
        layer = np.searchsorted(z, middle, side="right") - 1
        inside = (layer >= 0) & (layer < z.size - 1)
        out[i, inside] = steepness[layer[inside]]
    return out
