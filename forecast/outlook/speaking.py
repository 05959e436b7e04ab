"""Which profile speaks for each site and valid time, and its air down to the surface.

An ascent speaks before a model profile, the shortest lead time before longer ones.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from forecast.outlook.along import Stations, row_stations
from forecast.outlook.surface import (
    STATE_NAMES,
    LaidSurface,
    SurfaceInputs,
    lay_surface,
    surface_inputs,
)
from forecast.outlook.surroundings import NOTHING_AROUND, Surroundings
from forecast.schema import CEILINGS_M, QUALITY_FLAGS

if TYPE_CHECKING:
    from forecast.settings import Settings

__all__ = ["Row", "Speaking", "speaking_profiles"]

_SMALLEST_ENSEMBLE = 8


@dataclass(frozen=True)
class Row:
    """One valid time of a site: the profile that speaks, and its ensemble if it has one."""

    index: int
    ensemble: tuple[int, ...]


@dataclass(frozen=True)
class Speaking:
    """Profiles that speak, one per row, and all others for their ensembles.

    ``profiles``: all, with the coordinate ``site``; ``state`` and ``water``: their usable levels,
    (profile, level), and what their surface layers need. By row: ``chosen`` profiles, ``guess``
    (their levels), ``filled`` (which of them were interpolated), ``tops`` (highest usable level
    before the cut, m), ``row_water``, ``surface`` (levels with the surface layer, and what became
    of it), ``site``, ``latitude``, and ``stations``: rows that stand for the air along the way, by
    number of the sightline.
    """

    rows: list[Row]
    profiles: xr.Dataset
    state: dict[str, np.ndarray]
    water: SurfaceInputs
    chosen: xr.Dataset
    guess: dict[str, np.ndarray]
    filled: np.ndarray
    tops: np.ndarray
    row_water: SurfaceInputs
    surface: LaidSurface
    site: np.ndarray
    latitude: np.ndarray
    stations: dict[int, Stations]

    @property
    def air(self) -> dict[str, np.ndarray]:
        """Levels with the surface layer."""
        return self.surface.air


def speaking_profiles(
    profiles: xr.Dataset, settings: Settings, around: Surroundings = NOTHING_AROUND
) -> Speaking:
    """Choose the profiles that speak and prepare their air.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles (profile, level); without the coordinate ``site`` the station is the site.
    settings : forecast.settings.Settings
        Sites, sightlines, heights needed.
    around : Surroundings
        Water series.

    Returns
    -------
    Speaking
        Sorted by site, then time.
    """
    if "site" not in profiles.coords:
        profiles = profiles.assign_coords(site=("profile", profiles["station"].values.astype(str)))
    rows = _speaking_rows(profiles)
    state, wind, filled, tops = _usable_levels(profiles, _reach(settings))
    water = surface_inputs(profiles, wind, state, settings, around.water)
    index = [row.index for row in rows]
    chosen = profiles.isel(profile=index)
    guess = {name: a[index] for name, a in state.items()}
    row_water = water.take(index)
    site = chosen["site"].values.astype(str)
    return Speaking(
        rows=rows,
        profiles=profiles,
        state=state,
        water=water,
        chosen=chosen,
        guess=guess,
        filled=filled[index],
        tops=tops[index],
        row_water=row_water,
        surface=lay_surface(guess, row_water),
        site=site,
        latitude=chosen["latitude"].values.astype(float),
        stations=row_stations(
            list(settings.sightlines), settings.sites, site, chosen["time"].values
        ),
    )


def _speaking_rows(profiles: xr.Dataset) -> list[Row]:
    """One row per (site, time), sorted by both."""
    site = profiles["site"].values.astype(str)
    station = profiles["station"].values.astype(str)
    time = profiles["time"].values
    model = profiles["source_kind"].values.astype(str) != "ascent"
    lead = profiles["lead_time"].values.astype("timedelta64[s]").astype(float)
    groups: dict[tuple[str, Any], list[int]] = {}
    for i in range(time.size):
        groups.setdefault((site[i], time[i]), []).append(i)
    member = profiles["member"].values if "member" in profiles.coords else np.full(time.size, 0)
    rows = []
    for key in sorted(groups):
        best = min(groups[key], key=lambda i: (model[i], lead[i], station[i], i))
        same = [
            i
            for i in groups[key]
            if model[i] and (lead[i], station[i]) == (lead[best], station[best])
        ]
        same.sort(key=lambda i: member[i])
        whole = tuple(same) if model[best] and len(same) >= _SMALLEST_ENSEMBLE else ()
        rows.append(Row(best, whole))
    return rows


def _reach(settings: Settings) -> float:
    """Height up to which rays and charts need the air, m."""
    # A ray that grazes the surface half-way stands d²/2a above it at the far end.
    far = [
        line.target_height + line.observer_height + line.distance**2 / 12.0e6
        for line in settings.sightlines
    ]
    return max(settings.chart_top, max(CEILINGS_M), *far, 0.0) * 1.05


def _usable_levels(
    profiles: xr.Dataset, reach: float
) -> tuple[dict[str, np.ndarray], np.ndarray, np.ndarray, np.ndarray]:
    """Pack each profile's complete levels to the front and cut them above `reach`.

    Returns the state arrays, wind speed and which levels were interpolated (profile, level), and
    the height of each profile's highest usable level before the cut.
    """
    arrays = {
        name: profiles[name].transpose("profile", "level").values.astype(float)
        for name in STATE_NAMES
    }
    valid = np.logical_and.reduce([np.isfinite(a) for a in arrays.values()])
    height = np.where(valid, arrays["height"], -np.inf)
    tops = height.max(axis=1)
    # One level beyond the reach stays, so that the layer across it is known.
    beyond = np.cumsum(valid & (height > reach), axis=1)
    valid &= beyond <= 1
    order = np.argsort(~valid, axis=1, kind="stable")[:, : max(2, int(valid.sum(axis=1).max()))]
    packed = np.take_along_axis(valid, order, axis=1)
    speed = np.full(valid.shape, np.nan)
    if "eastward_wind" in profiles and "northward_wind" in profiles:
        speed = np.hypot(
            profiles["eastward_wind"].transpose("profile", "level").values.astype(float),
            profiles["northward_wind"].transpose("profile", "level").values.astype(float),
        )
    state = {
        name: np.where(packed, np.take_along_axis(a, order, axis=1), np.nan)
        for name, a in arrays.items()
    }
    filled = np.zeros(valid.shape, dtype=bool)
    if "quality" in profiles:
        quality = profiles["quality"].transpose("profile", "level").values
        filled = (quality.astype(np.int64) & QUALITY_FLAGS["interpolated"]) != 0
    speed, filled = (np.take_along_axis(a, order, axis=1) for a in (speed, filled))
    return state, speed, filled & packed, tops
