"""The configured sightlines: their geometry, and what columns of air do to them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from datetime import datetime
from functools import partial
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo

import numpy as np

from forecast.outlook.along import NO_STATIONS, Stations
from forecast.outlook.line_air import LineAir, PathAirs, SiteAir, over_water
from forecast.outlook.surface import STATE_NAMES
from forecast.outlook.surroundings import NOTHING_AROUND, Surroundings
from forecast.physics.appearance import appearance
from forecast.physics.column_batch import analyse_columns
from forecast.physics.earth import MEAN_EARTH_RADIUS, euler_radius
from forecast.physics.rays import build_medium
from forecast.physics.refractive_index import optical_refractivity
from forecast.physics.sightline import SightlineTable, standard_levels, standard_medium

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = [
    "arrival_change",
    "line_airs",
    "look_along",
    "plain_air",
    "sightline_geometry",
    "trace_paths",
    "wave_refractivity",
]

_FLOATS = ("hidden_height", "visible_extent", "apparent_elevation", "horizon_elevation")
_IMAGES = ("upright_images", "inverted_images")
_BOUNDS = ("visible_bottom", "visible_top")


def sightline_geometry(
    lines: list[Sightline],
    latitude: np.ndarray,
    site: np.ndarray,
    around: Surroundings = NOTHING_AROUND,
) -> dict[str, Any]:
    """Geometry of the sightlines, and what straight rays and standard air would show."""
    geometry: dict[str, Any] = {
        name: ("sightline", np.array([getattr(line, name) for line in lines], dtype=float))
        for name in (
            "observer_height",
            "target_height",
            "target_base_height",
            "distance",
            "azimuth",
        )
    }
    for label in ("straight", "standard"):
        hidden = np.full(len(lines), np.nan)
        elevation = np.full(len(lines), np.nan)
        for i, line in enumerate(lines):
            here = latitude[site == line.site]
            radius = float(euler_radius(np.mean(here) if here.size else 45.0, line.azimuth))
            if line.name in around.blind:
                continue
            wave = line.wave if label == "standard" else "straight"
            table = plain_air(line, wave, radius, around).trace(line)
            hidden[i] = table.hidden_height[0, 0]
            elevation[i] = table.apparent_elevation[0, 0]
        geometry[f"hidden_height_{label}"] = ("sightline", hidden)
        geometry[f"apparent_elevation_{label}"] = ("sightline", elevation)
    return geometry


def line_airs(
    lines: list[Sightline],
    state: dict[str, np.ndarray],
    latitude: np.ndarray,
    site: np.ndarray,
    stations: Mapping[int, Stations] = NO_STATIONS,
    around: Surroundings = NOTHING_AROUND,
) -> Iterator[tuple[int, Sightline, np.ndarray, LineAir]]:
    """The air of each sightline as its light or radio wave meets it.

    Parameters
    ----------
    lines : list of Sightline
        Those whose ground could not be read, and those without a column, are left out.
    state : dict of ndarray
        Height (m), pressure (Pa), temperature (K), specific humidity (kg/kg), (column, level).
    latitude, site : ndarray
        Of each column; a column of no site stands only for the air on the way of others.
    stations : mapping
        Columns along the sightlines that name sites on their way.
    around : Surroundings
        Terrain.

    Yields
    ------
    tuple
        Number of the sightline, the sightline, its columns, the air of those columns.
    """
    refractivity: dict[tuple[str, float], np.ndarray] = {}
    for i, line in enumerate(lines):
        own = np.flatnonzero(site == line.site)
        if own.size == 0 or line.name in around.blind:
            continue
        key = (line.wave, line.wavelength if line.wave == "optical" else 0.0)
        if key not in refractivity:
            refractivity[key] = wave_refractivity(state, line)
        radius = euler_radius(latitude[own], line.azimuth)
        ground = around.ground.get(line.name)
        if i not in stations and ground is None:
            medium = build_medium(state["height"][own], refractivity[key][own], radius, line.wave)
            yield i, line, own, SiteAir(medium)
            continue
        there = (
            stations[i] if i in stations else Stations(np.zeros(1), np.arange(site.size)[:, None])
        )
        column = there.column[own]
        missing = (column < 0)[:, :, None]
        height, n = (
            np.where(missing, np.nan, a[column]) for a in (state["height"], refractivity[key])
        )
        yield i, line, own, PathAirs(height, n, there.distance, radius, line, ground)


def plain_air(
    line: Sightline, wave: str, radius: float, around: Surroundings = NOTHING_AROUND
) -> LineAir:
    """Standard air (``radio``, ``optical``) or none (``straight``) over the ground of a sightline.

    One column; ``radius`` in m.
    """
    ground = around.ground.get(line.name)
    if ground is None:
        return SiteAir(standard_medium(wave, radius))
    z, n = standard_levels(wave)
    return PathAirs(z[:, None], n[:, None], np.zeros(1), np.array([radius]), line, ground)


def trace_paths(
    lines: list[Sightline],
    state: dict[str, np.ndarray],
    latitude: np.ndarray,
    site: np.ndarray,
    stations: Mapping[int, Stations] = NO_STATIONS,
    around: Surroundings = NOTHING_AROUND,
) -> dict[str, Any]:
    """Every sightline through its air, columns being rows or members, as in `line_airs`."""
    found = _Table(site.size, len(lines))
    for i, line, own, air in line_airs(lines, state, latitude, site, stations, around):
        found.put(own, i, air.trace(line))
    return found.named()


def look_along(
    lines: list[Sightline],
    state: dict[str, np.ndarray],
    latitude: np.ndarray,
    site: np.ndarray,
    geometry: dict[str, Any],
    stations: Mapping[int, Stations] = NO_STATIONS,
    around: Surroundings = NOTHING_AROUND,
) -> dict[str, Any]:
    """As `trace_paths`, and what each target looks like; for rows, not for members.

    ``geometry`` is that of `sightline_geometry`.
    """
    found = _Table(site.size, len(lines))
    shape = (site.size, len(lines))
    names = ("lift", "magnification", "apparent_height", "clear_height")
    looks = {name: np.full(shape, np.nan) for name in names}
    classes = np.zeros(shape, dtype=np.int16)
    blocked = np.full(shape, np.nan)
    for i, line, own, air in line_airs(lines, state, latitude, site, stations, around):
        table = air.trace(line)
        blocked[own, i] = air.blocked_by
        found.put(own, i, table)
        if line.wave == "optical":
            observer, top, distance, base = over_water(line)
            hidden = bool(geometry["hidden_height_standard"][1][i] > top)
            seen = appearance(
                partial(air.heights, line, distance=distance),
                air.radius, observer, base, top, distance, table, hidden,
            )  # fmt: skip
            for name, values in looks.items():
                values[own, i] = getattr(seen, name)
            classes[own, i] = seen.classes
    both = ("profile", "sightline")
    named = found.named(intervals=True)
    named.update({name: (both, values) for name, values in looks.items()})
    return {**named, "appearance": (both, classes), "blocked_by": (both, blocked)}


def arrival_change(
    elevation: np.ndarray, time: np.ndarray, site: np.ndarray, zones: dict[str, str]
) -> np.ndarray:
    """How far the direction of arrival has moved from its median over the site's local day.

    Parameters
    ----------
    elevation : ndarray
        Elevation at which the target's highest visible part appears, rad, (row, sightline).
    time : ndarray of datetime64
        UTC, (row,).
    site : ndarray of str
        (row,).
    zones : dict
        IANA time zone of each site; UTC where it is missing.

    Returns
    -------
    ndarray
        rad, (row, sightline); NaN where nothing is seen.
    """
    seconds = time.astype("datetime64[s]").astype(np.int64)
    days = [
        (name, datetime.fromtimestamp(int(at), ZoneInfo(zones.get(name, "UTC"))).date())
        for name, at in zip(site, seconds, strict=True)
    ]
    change = np.full(elevation.shape, np.nan)
    for day in set(days):
        rows = np.array([d == day for d in days])
        seen = np.isfinite(elevation[rows]).any(axis=0)
        median = np.full(seen.size, np.nan)
        if seen.any():
            median[seen] = np.nanmedian(elevation[rows][:, seen], axis=0)
        change[rows] = elevation[rows] - median
    return change


class _Table:
    """Results of all sightlines, columns by sightline."""

    def __init__(self, columns: int, lines: int) -> None:
        shape = (columns, lines)
        self.state: np.ndarray = np.full(shape, -1, dtype=np.int8)
        self.floats = {name: np.full(shape, np.nan) for name in _FLOATS}
        self.images = {name: np.zeros(shape, dtype=np.int16) for name in _IMAGES}
        self.bounds: dict[str, np.ndarray] = {
            name: np.full((*shape, 1), np.nan) for name in _BOUNDS
        }

    def put(self, own: np.ndarray, i: int, table: SightlineTable) -> None:
        """Enter the results of one sightline."""
        self.state[own, i] = table.state[:, 0]
        kept: dict[str, np.ndarray] = {**self.floats, **self.images}
        for name, values in kept.items():
            values[own, i] = getattr(table, name)[:, 0]
        for name, values in self.bounds.items():
            found = getattr(table, name)[:, 0]
            more = found.shape[-1] - values.shape[-1]
            if more > 0:
                wider = np.pad(values, ((0, 0), (0, 0), (0, more)), constant_values=np.nan)
                self.bounds[name] = values = wider
            values[own, i, : found.shape[-1]] = found

    def named(self, intervals: bool = False) -> dict[str, Any]:
        """Arrays with their dimensions, by the names of the schema."""
        both = ("profile", "sightline")
        arrays = {"sightline_state": self.state, **self.floats, **self.images}
        named: dict[str, Any] = {name: (both, values) for name, values in arrays.items()}
        if intervals:
            named.update({k: ((*both, "interval"), v) for k, v in self.bounds.items()})
        return named


def wave_refractivity(air: dict[str, np.ndarray], line: Sightline) -> np.ndarray:
    """Refractivity of columns for the wave of a sightline, (column, level)."""
    p, t, q = (air[name] for name in STATE_NAMES[1:])
    if line.wave == "optical":
        return optical_refractivity(p, t, q, line.wavelength)
    return analyse_columns(p, t, q, air["height"], MEAN_EARTH_RADIUS).refractivity
