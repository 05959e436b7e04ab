"""Which profiles stand for the air along a sightline that names sites on its way."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING

import numpy as np
from pyproj import Geod

if TYPE_CHECKING:
    from forecast.settings import Sightline, Site

__all__ = ["NO_STATIONS", "Stations", "member_stations", "row_stations", "station_distances"]

_GEOD = Geod(ellps="WGS84")
#: A profile of another site stands for a valid time if it is no further from it than this, s.
_NEAREST = 3 * 3600


@dataclass(frozen=True)
class Stations:
    """Where along a sightline profiles stand, and which columns they are.

    ``distance`` from the observer, m, rising, (station,); ``column``: indices of columns, −1 where
    there is none, (column, station).
    """

    distance: np.ndarray
    column: np.ndarray


#: Every sightline through the air of its own site.
NO_STATIONS: Mapping[int, Stations] = MappingProxyType({})


def station_distances(line: Sightline, sites: tuple[Site, ...]) -> tuple[list[str], np.ndarray]:
    """Sites along a sightline in order, and their distances from the observer.

    Parameters
    ----------
    line : Sightline
        With ``along`` and positions of observer and target; its own site counts too.
    sites : tuple of Site
        Of the settings.

    Returns
    -------
    names : list of str
        By distance.
    distance : ndarray
        m, along the geodesic, (station,); a site behind an end counts as standing at that end.
    """
    assert line.observer is not None and line.target is not None  # the settings have seen to it
    places = {site.name: (site.latitude, site.longitude) for site in sites}
    names = list(dict.fromkeys([line.site, *line.along]))
    azimuth, _, _ = _GEOD.inv(*line.observer[::-1], *line.target[::-1])
    found = []
    for name in names:
        latitude, longitude = places[name]
        bearing, _, away = _GEOD.inv(*line.observer[::-1], longitude, latitude)
        # The foot of the perpendicular, on the sphere that fits there.
        angle = away / 6371e3
        foot = np.arctan2(np.sin(angle) * np.cos(np.radians(bearing - azimuth)), np.cos(angle))
        found.append(float(np.clip(6371e3 * foot, 0.0, line.distance)))
    order = np.argsort(found, kind="stable")
    return [names[i] for i in order], np.array(found)[order]


def row_stations(
    lines: list[Sightline], sites: tuple[Site, ...], site: np.ndarray, time: np.ndarray
) -> dict[int, Stations]:
    """Rows that stand for the air along each sightline that names sites on its way.

    Parameters
    ----------
    lines : list of Sightline
        Those without ``along`` are left out.
    sites : tuple of Site
        Of the settings.
    site, time : ndarray
        Site and valid time of each row, (row,).

    Returns
    -------
    dict
        By number of the sightline: for each row of its own site the rows nearest in time of the
        other sites, none further away than 3 h; −1 for rows of other sites.
    """
    seconds = time.astype("datetime64[s]").astype(np.int64)
    found = {}
    for i, line in enumerate(lines):
        if not line.along:
            continue
        names, distance = station_distances(line, sites)
        column = np.full((site.size, len(names)), -1)
        own = np.flatnonzero(site == line.site)
        for k, name in enumerate(names):
            rows = np.flatnonzero(site == name)
            if rows.size == 0:
                continue
            away = np.abs(seconds[own][:, None] - seconds[rows][None, :])
            best = np.argmin(away, axis=1)
            near = away[np.arange(own.size), best] <= _NEAREST
            column[own[near], k] = rows[best[near]]
        found[i] = Stations(distance, column)
    return found


def member_stations(
    rows: dict[int, Stations], index: np.ndarray, owner: np.ndarray
) -> dict[int, Stations]:
    """The same for member columns: member by member, shorter ensembles over again.

    Parameters
    ----------
    rows : dict
        From `row_stations`.
    index : ndarray
        Which row each part of the members belongs to, (part,).
    owner : ndarray
        Part of each column, (column,); columns of a part stand together.

    Returns
    -------
    dict
        As `row_stations`, columns in place of rows; −1 where a row has no members here.
    """
    place = {int(row): k for k, row in enumerate(index)}
    count = np.bincount(owner, minlength=index.size)
    first = np.full(index.size, -1)
    starts = np.flatnonzero(np.diff(owner, prepend=-1) != 0)
    first[owner[starts]] = starts
    rank = np.arange(owner.size) - first[owner]
    found = {}
    for i, stations in rows.items():
        column = np.full((owner.size, stations.distance.size), -1)
        for k in range(stations.distance.size):
            wanted = np.array([place.get(int(r), -1) for r in stations.column[index, k]])
            part = wanted[owner]
            there = part >= 0
            column[there, k] = first[part[there]] + rank[there] % count[part[there]]
        found[i] = Stations(stations.distance, column)
    return found
