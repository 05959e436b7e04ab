"""From an outlook to one sightline at one valid time, ready to be drawn and told."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import xarray as xr

from forecast.errors import InputError
from forecast.outlook.along import Stations
from forecast.outlook.line_air import LineAir, over_water
from forecast.outlook.reasons import sightline_reason, view_sentence
from forecast.outlook.sightlines import line_airs, plain_air, wave_refractivity
from forecast.outlook.speaking import Speaking
from forecast.outlook.surroundings import NOTHING_AROUND, Surroundings
from forecast.outlook.view import AIRS, SightlineView
from forecast.physics.curvature import modified_refractivity
from forecast.physics.ducts import find_ducts
from forecast.physics.transfer_curve import ARC_SECOND, straight_elevation, view_elevations
from forecast.schema import SIGHTLINE_STATES

if TYPE_CHECKING:
    from forecast.outlook.windows import Window
    from forecast.settings import Settings, Sightline

__all__ = ["likeliest_row", "nearest_row", "view_sightline", "window_views"]

_LOW_AIR = 300.0  # m, how much of the air is shown beside the picture
_FAN_RAYS, _FAN_STEPS = 61, 240
_MARGIN = 180.0 * ARC_SECOND
_TARGET_RAYS = 5
_MOST_VIEWS = 12
_POLE_WIDTH = 0.05  # of a target's height, where its outline is not given
_STATES = {code: name for name, code in SIGHTLINE_STATES.items()} | {-1: "unknown"}


def nearest_row(outlook: xr.Dataset, line: Sightline, time: np.datetime64) -> int:
    """Row of a sightline's site whose valid time is nearest to a time.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    line : Sightline
        Its site is looked up.
    time : datetime64
        UTC.

    Returns
    -------
    int
        Index along ``profile``; −1 if the site has no row.
    """
    rows = np.flatnonzero(outlook["site"].values.astype(str) == line.site)
    if rows.size == 0:
        return -1
    away = np.abs(outlook["time"].values[rows] - time)
    return int(rows[np.argmin(away)])


def likeliest_row(outlook: xr.Dataset, number: int) -> int:
    """Row in which a sightline is likeliest open: of those ahead of the latest ascent, if any.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    number : int
        Which of its sightlines.

    Returns
    -------
    int
        Index along ``profile``; −1 if the sightline's site has no row.
    """
    site = str(outlook["sightline_site"].values[number])
    rows = np.flatnonzero(outlook["site"].values.astype(str) == site)
    if rows.size == 0:
        return -1
    ascents = rows[outlook["source_kind"].values[rows].astype(str) == "ascent"]
    ahead = rows[rows > ascents[-1]] if ascents.size else rows
    rows = ahead if ahead.size else rows
    chance, lower = (
        np.nan_to_num(outlook[f"sightline_probability{end}"].values[rows, number], nan=-1.0)
        for end in ("", "_lower")
    )
    return int(rows[np.lexsort((rows, -lower, -chance))[0]])


def view_sightline(
    told: Speaking,
    outlook: xr.Dataset,
    settings: Settings,
    number: int,
    row: int,
    around: Surroundings = NOTHING_AROUND,
) -> SightlineView:
    """What an observer would see of one target at one valid time.

    Parameters
    ----------
    told : Speaking
        From `forecast.outlook.speaking.speaking_profiles`, of the same profiles and settings.
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    settings : forecast.settings.Settings
        Of the run.
    number : int
        Which of the sightlines.
    row : int
        Which of the outlook's rows; it must be of the sightline's site.
    around : Surroundings
        Terrain.

    Returns
    -------
    SightlineView
        Directions within some minutes of arc of horizon and target.
    """
    line = settings.sightlines[number]
    column = {name: a[row : row + 1] for name, a in told.air.items()}
    air = _line_air(told, line, number, row, around)
    radius = float(air.radius[0])
    airs: dict[str, LineAir] = {
        "air": air,
        "standard": plain_air(line, line.wave, radius, around),
        "straight": plain_air(line, "straight", radius, around),
    }
    observer, top, distance, base = over_water(line)
    tables = {name: airs[name].trace(line) for name in AIRS}
    horizon = {name: float(table.horizon_elevation[0, 0]) for name, table in tables.items()}
    ends = straight_elevation(observer, np.array([base, top]), distance, radius)
    seen = [float(table.apparent_elevation[0, 0]) for table in tables.values()]
    low = np.nanmin([*horizon.values(), ends[0]])
    high = np.nanmax([*horizon.values(), ends[1], *seen])
    elevation = view_elevations(low - _MARGIN, high + _MARGIN)[0]
    curve = air.heights(line, elevation[None, :], distance)[0]
    fan = np.unique(
        np.concatenate(
            [
                np.linspace(low - _MARGIN, high + _MARGIN, _FAN_RAYS),
                _leading_to(np.linspace(base, top, _TARGET_RAYS), elevation, curve),
            ]
        )
    )
    steps = np.linspace(0.0, distance, _FAN_STEPS)
    table = tables["air"]
    visible = np.stack([table.visible_bottom[0, 0], table.visible_top[0, 0]], axis=-1)
    chance = [
        float(outlook[f"sightline_probability{end}"].values[row, number])
        for end in ("", "_lower", "_upper")
    ]
    origin = told.surface.origin[row]
    level = _lowest_air(
        column, origin, line, radius, max(_LOW_AIR, observer, min(top, 3.0 * _LOW_AIR))
    )
    return SightlineView(
        line=line,
        time=outlook["time"].values[row],
        source=_source(outlook, row),
        zone=next((s.timezone for s in settings.sites if s.name == line.site), "UTC"),
        radius=radius,
        observer_height=observer,
        base=base,
        top=top,
        outline=_outline(line, base, top),
        elevation=elevation,
        heights={name: airs[name].heights(line, elevation[None, :], distance)[0] for name in AIRS},
        horizon=horizon,
        visible=visible[np.isfinite(visible[:, 0])],
        fan_elevation=fan,
        fan_distance=steps,
        fan_height=air.heights(line, fan[None, :], steps)[0],
        terrain=_ground(line, around),
        **level,
        probability=(chance[0], chance[1], chance[2]),
        state=_STATES[int(table.state[0, 0])],
        words=(view_sentence(outlook, row, number), sightline_reason(outlook, row, number)),
    )


def _line_air(
    told: Speaking, line: Sightline, number: int, row: int, around: Surroundings
) -> LineAir:
    """The air of one sightline at one row, with the rows that stand for it on the way."""
    rows = np.array([row])
    stations = {}
    if number in told.stations:
        way = told.stations[number]
        beside = np.setdiff1d(way.column[row], [row, -1])
        rows = np.concatenate([rows, beside])
        place = {int(r): k for k, r in enumerate(rows)}
        column = np.full((rows.size, way.distance.size), -1)
        column[0] = [place.get(int(r), -1) for r in way.column[row]]
        stations[0] = Stations(way.distance, column)
    site = told.site[rows]
    site[1:] = ""
    air = {name: a[rows] for name, a in told.air.items()}
    for _, _, _, found in line_airs([line], air, told.latitude[rows], site, stations, around):
        return found
    raise InputError(
        "its ground could not be read, so that it is not told of", source=line.name,
        remedy="see what was set aside",
    )  # fmt: skip


def _source(outlook: xr.Dataset, row: int) -> str:
    if str(outlook["source_kind"].values[row]) == "ascent":
        return "ascent"
    lead = outlook["lead_time"].values[row].astype("timedelta64[s]").astype(float) / 3600.0
    return f"model, {lead:.0f} h ahead"


def _ground(line: Sightline, around: Surroundings) -> np.ndarray | None:
    """Terrain over the water."""
    if line.name not in around.ground:
        return None
    ground = around.ground[line.name].copy()
    ground[:, 1] -= line.sea_level_offset
    return ground


def _outline(line: Sightline, base: float, top: float) -> np.ndarray:
    """The target's silhouette over the water; a pole where none is given."""
    if line.silhouette:
        outline = np.array(line.silhouette, dtype=float)
        outline[:, 1] = np.maximum(outline[:, 1] - line.sea_level_offset, 0.0)
        return outline
    half = 0.5 * max(_POLE_WIDTH * (top - base), 0.0)
    return np.array([[-half, top], [half, top]])


def _leading_to(wanted: np.ndarray, elevation: np.ndarray, curve: np.ndarray) -> np.ndarray:
    """Directions that lead to given heights, between samples of the transfer curve."""
    above = curve[None, :] >= wanted[:, None]
    crossing = (above[:, 1:] != above[:, :-1]) & np.isfinite(curve[1:] + curve[:-1])
    which, at = np.nonzero(crossing)
    share = (wanted[which] - curve[at]) / (curve[at + 1] - curve[at])
    return elevation[at] + share * (elevation[at + 1] - elevation[at])


def _lowest_air(
    column: dict[str, np.ndarray],
    origin: np.ndarray,
    line: Sightline,
    radius: float,
    ceiling: float,
) -> dict[str, np.ndarray]:
    """The lowest levels, their origin, and the layers that hold rays of the line's wave."""
    refractivity = wave_refractivity(column, line)
    modified = modified_refractivity(refractivity, column["height"], radius)
    ducts = find_ducts(column["height"], modified)
    bounds = np.stack([ducts.base[0], ducts.top[0]], axis=-1)
    height = column["height"][0]
    keep = np.isfinite(height) & np.isfinite(modified[0]) & (height <= ceiling)
    return {
        "level_height": height[keep],
        "level_temperature": column["air_temperature"][0][keep],
        "level_modified_refractivity": modified[0][keep],
        "level_origin": origin[keep].astype(int),
        "ducts": bounds[np.isfinite(bounds[:, 0]) & (bounds[:, 0] <= ceiling)],
    }


def window_views(
    told: Speaking,
    outlook: xr.Dataset,
    windows: list[Window],
    settings: Settings,
    around: Surroundings = NOTHING_AROUND,
) -> list[tuple[int, SightlineView]]:
    """Views of the sightlines' windows, each at its best time, the best windows first.

    Parameters
    ----------
    told, outlook, settings, around
        As for `view_sightline`.
    windows : list of Window
        From `forecast.outlook.find_windows`.

    Returns
    -------
    list of (int, SightlineView)
        Number of the sightline and its view; at most twelve, of windows that lie ahead if any do.
    """
    names = [line.name for line in settings.sightlines]
    ahead = [window for window in windows if window.kind == "sightline" and window.ahead]
    past = [window for window in windows if window.kind == "sightline" and not window.ahead]
    views: list[tuple[int, SightlineView]] = []
    for window in (ahead or past)[:_MOST_VIEWS]:
        number = names.index(window.subject)
        time = np.datetime64(window.best_time.replace(tzinfo=None), "s")
        row = nearest_row(outlook, settings.sightlines[number], time)
        views.append((number, view_sightline(told, outlook, settings, number, row, around)))
    return views
