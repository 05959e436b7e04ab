"""Where to stand for a sightline: the odds by height of the eye, and at each candidate place.

Every member's air is traced for a list of observer heights at once, and again for each candidate
place with its ground and its distance to the target. The share of members in which the target is
open is the probability of that height (`forecast.outlook.stand_choice`).

Heights over ground, or through air that changes along the way, are judged by fewer members; places
of such sightlines are not judged, since their ways are others. Elsewhere the air is that of the
sightline's own site all along the path; without a duct a higher eye never
sees less. In a duct it may: rays from an eye just under or over the duct's top are split there, so
that the far target falls into the gap, while a lower eye still sees it (found by the tests).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from forecast.outlook.along import NO_STATIONS, Stations
from forecast.outlook.sightlines import line_airs, wave_refractivity
from forecast.outlook.surroundings import NOTHING_AROUND, Surroundings
from forecast.physics.earth import euler_radius
from forecast.physics.rays import Medium, build_medium
from forecast.physics.sightline import LARGEST_SQUEEZE, trace_sightlines
from forecast.schema import SIGHTLINE_STATES

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = [
    "StandShares",
    "Views",
    "eye_heights",
    "join_shares",
    "place_distances",
    "place_grounds",
    "stand_geometry",
    "stand_heights",
    "stand_shares",
    "trace_places",
    "trace_stands",
]

_BLOCK = 100_000  # sightlines traced at once; bounds memory to some 25 MB
_STAND_MEMBERS = 32  # of those there are; a sweep of heights needs no finer odds
_PLACE_TRACES = 600  # sightlines of a row and line that all its places may take together
_FEWEST_MEMBERS = 16  # but a place is never judged by fewer members than this


class Views(NamedTuple):
    """What is seen from several heights, (column, …, stand); NaN where that cannot be told.

    ``is_open``: 1 where the sightline is open. ``extent``: the target's visible part, m.
    ``in_duct``: 1 where M somewhere above the eye is less than at the eye, so that a duct holds
    level rays down.
    """

    is_open: np.ndarray
    extent: np.ndarray
    in_duct: np.ndarray


class StandShares(NamedTuple):
    """Members counted per row: shares (1), medians (m) and numbers of members.

    ``stand_open``, ``stand_extent``, ``stand_in_duct``: (row, sightline, stand); ``place_open``,
    ``place_extent``: (row, sightline, place, stand); ``place_members``, ``stand_members``:
    (row, sightline), how many members the places and the heights were judged by.
    """

    stand_open: np.ndarray
    stand_extent: np.ndarray
    stand_in_duct: np.ndarray
    place_open: np.ndarray
    place_extent: np.ndarray
    place_members: np.ndarray
    stand_members: np.ndarray


def stand_heights(lines: list[Sightline]) -> np.ndarray:
    """Observer heights to try, m, (sightline, stand), rising, padded with NaN."""
    return _padded([np.sort(np.asarray(line.stand_heights, dtype=float)) for line in lines])


def eye_heights(lines: list[Sightline]) -> np.ndarray:
    """The same heights above the water or ground that the air's heights count from, m."""
    offset = np.array([line.sea_level_offset for line in lines], dtype=float)
    return stand_heights(lines) - offset[:, None]


def place_distances(lines: list[Sightline]) -> np.ndarray:
    """Distances of the candidate places to the target, m, (sightline, place), padded with NaN."""
    return _padded([np.array([p.distance for p in line.places], dtype=float) for line in lines])


def place_grounds(lines: list[Sightline]) -> np.ndarray:
    """Heights of the candidate places' ground, m, (sightline, place), padded with NaN."""
    return _padded([np.array([p.ground_height for p in line.places], float) for line in lines])


def stand_geometry(lines: list[Sightline]) -> dict[str, Any]:
    """Heights and places as variables, {name: (dims, array)}; places only if there are any."""
    out: dict[str, Any] = {
        "stand_height": (("sightline", "stand"), stand_heights(lines)),
        "stand_eye_height": (("sightline", "stand"), eye_heights(lines)),
    }
    distance = place_distances(lines)
    if distance.shape[1]:
        both = ("sightline", "place")
        names = np.full(distance.shape, "", dtype=object)
        for i, line in enumerate(lines):
            names[i, : len(line.places)] = [place.name for place in line.places]
        out["place_name"] = (both, names.astype(str))
        out["place_ground_height"] = (both, place_grounds(lines))
        out["place_distance"] = (both, distance)
    return out


def trace_stands(
    lines: list[Sightline], state: dict[str, np.ndarray], latitude: np.ndarray, site: np.ndarray
) -> Views:
    """Every sightline from each of its observer heights.

    Parameters
    ----------
    lines : list of Sightline
        ``stand_heights`` count like ``observer_height``: above the level that ``sea_level_offset``
        is counted from.
    state : dict of ndarray
        Height (m), pressure (Pa), temperature (K), specific humidity (kg/kg), (column, level),
        the surface layer already joined.
    latitude, site : ndarray
        Of each column.

    Returns
    -------
    Views
        (column, sightline, stand); NaN for columns of other sites, columns without air and heights
        under water.
    """
    heights = eye_heights(lines)
    views = _unseen((site.size, *heights.shape))
    for i, line in enumerate(lines):
        own = np.flatnonzero(site == line.site)
        possible = np.flatnonzero(heights[i] >= 0.0)
        if own.size == 0 or possible.size == 0:
            continue
        medium = _medium(line, {n: a[own] for n, a in state.items()}, latitude[own])
        seen = _view(medium, line, heights[i, possible], np.full(possible.size, line.distance))
        for whole, part in zip(views, seen, strict=True):
            whole[own[:, None], i, possible] = part
    return views


def trace_places(
    lines: list[Sightline], state: dict[str, np.ndarray], latitude: np.ndarray, site: np.ndarray
) -> Views:
    """Every sightline from each observer height above the ground of each of its places.

    Parameters
    ----------
    lines, state, latitude, site
        As in `trace_stands`; the air over a place is that of the sightline's site, and so is the
        curvature of the Earth.

    Returns
    -------
    Views
        (column, sightline, place, stand).
    """
    heights, distances, grounds = (
        part(lines) for part in (eye_heights, place_distances, place_grounds)
    )
    views = _unseen((site.size, *distances.shape, heights.shape[1]))
    for i, line in enumerate(lines):
        own = np.flatnonzero(site == line.site)
        if own.size == 0 or not line.places:
            continue
        eyes = grounds[i, :, None] + heights[i]
        p, s = np.nonzero(eyes >= 0.0)
        if p.size == 0:
            continue
        medium = _medium(line, {n: a[own] for n, a in state.items()}, latitude[own])
        seen = _view(medium, line, eyes[p, s], distances[i, p])
        for whole, part in zip(views, seen, strict=True):
            mine = whole[:, i]
            mine[own[:, None], p, s] = part
    return views


def stand_shares(
    lines: list[Sightline],
    state: dict[str, np.ndarray],
    latitude: np.ndarray,
    site: np.ndarray,
    owner: np.ndarray,
    n_rows: int,
    stations: Mapping[int, Stations] = NO_STATIONS,
    around: Surroundings = NOTHING_AROUND,
) -> StandShares:
    """Count the members in which each height and place sees the target.

    Parameters
    ----------
    lines, state, latitude, site
        As in `trace_stands`; columns are members.
    owner : ndarray of int
        Row that each column belongs to.
    n_rows : int
        How many rows.
    stations, around
        As for `forecast.outlook.sightlines.line_airs`.

    Returns
    -------
    StandShares
        Shares of the members that could be judged; NaN where none could. Heights are judged by some
        32 evenly chosen members, many places by fewer, never under 16: the work stays bounded, and
        the intervals are as wide as that number makes them.
    """
    heights, distances = stand_heights(lines), place_distances(lines)
    stand = np.full((3, n_rows, *heights.shape), np.nan)
    place = np.full((2, n_rows, *distances.shape, heights.shape[1]), np.nan)
    members_used = np.zeros((2, n_rows, len(lines)))
    shares = StandShares(*stand, *place, *members_used)
    rank = _rank(owner)
    for i, line in enumerate(lines):
        own = np.flatnonzero(site == line.site)
        if own.size == 0 or line.name in around.blind:
            continue
        members = np.bincount(owner[own], minlength=n_rows)
        if i in stations or line.name in around.ground:
            few = own[rank[own] % np.maximum(1, members // _FEWEST_MEMBERS)[owner[own]] == 0]
            views = _along(i, line, few, state, latitude, site, stations, around)
            shares.stand_members[:, i] = np.bincount(owner[few], minlength=n_rows)
            _count(views, owner[few], shares[:3], np.s_[i, : len(line.stand_heights)])
            continue
        few = own[rank[own] % np.maximum(1, members // _STAND_MEMBERS)[owner[own]] == 0]
        shares.stand_members[:, i] = np.bincount(owner[few], minlength=n_rows)
        # One line at a time: all at once would not fit where lines and places are many.
        views = trace_stands([line], {n: a[few] for n, a in state.items()}, latitude[few],
                             site[few])  # fmt: skip
        width = views.is_open.shape[-1]
        _count(views, owner[few], shares[:3], np.s_[i, :width])
        if not line.places:
            continue
        traced = len(line.places) * len(line.stand_heights)
        most = max(_FEWEST_MEMBERS, _PLACE_TRACES // traced)
        few = own[rank[own] % np.maximum(1, -(-members // most))[owner[own]] == 0]
        shares.place_members[:, i] = np.bincount(owner[few], minlength=n_rows)
        views = trace_places([line], {n: a[few] for n, a in state.items()}, latitude[few],
                             site[few])  # fmt: skip
        places = np.s_[i, : len(line.places), :width]
        _count(views, owner[few], shares[3:5], places)
    return shares


def _along(
    number: int,
    line: Sightline,
    few: np.ndarray,
    state: dict[str, np.ndarray],
    latitude: np.ndarray,
    site: np.ndarray,
    stations: Mapping[int, Stations],
    around: Surroundings,
) -> Views:
    """Views from each height through air, or over ground, that changes along the way."""
    mine = np.full(site.shape, "", dtype=site.dtype)
    mine[few] = site[few]
    own = {0: stations[number]} if number in stations else NO_STATIONS
    views = _unseen((few.size, 1, len(line.stand_heights)))
    floor = -np.inf
    if line.name in around.ground:
        floor = float(np.interp(0.0, *around.ground[line.name].T))
    for _, _, _, air in line_airs([line], state, latitude, mine, own, around):
        for k, height in enumerate(sorted(line.stand_heights)):
            if height < max(floor, line.sea_level_offset):
                continue
            table = air.trace(replace(line, observer_height=height))
            told = table.state[:, 0] >= 0
            is_open = table.state[:, 0] == SIGHTLINE_STATES["open"]
            views.is_open[:, 0, k] = np.where(told, is_open, np.nan)
            views.extent[:, 0, k] = np.where(told, table.visible_extent[:, 0], np.nan)
            views.in_duct[:, 0, k] = np.where(told, table.horizon_elevation[:, 0] > 0.0, np.nan)
    return views


def join_shares(parts: list[StandShares]) -> StandShares:
    """Shares of rows worked on in parts, one after the other."""
    return StandShares(*(np.concatenate(arrays) for arrays in zip(*parts, strict=True)))


def _padded(rows: list[np.ndarray]) -> np.ndarray:
    out = np.full((len(rows), max((row.size for row in rows), default=0)), np.nan)
    for i, row in enumerate(rows):
        out[i, : row.size] = row
    return out


def _unseen(shape: tuple[int, ...]) -> Views:
    return Views(*(np.full(shape, np.nan, dtype=np.float32) for _ in range(3)))


def _medium(line: Sightline, air: dict[str, np.ndarray], latitude: np.ndarray) -> Medium:
    radius = euler_radius(latitude, line.azimuth)
    return build_medium(air["height"], wave_refractivity(air, line), radius, line.wave)


def _view(medium: Medium, line: Sightline, eye: np.ndarray, distance: np.ndarray) -> Views:
    """Views (column, eye) of a line's target from eyes (m above the water) at distances (m)."""
    top, base = (
        max(height - line.sea_level_offset, 0.0)
        for height in (line.target_height, line.target_base_height)
    )
    columns = medium.z.shape[0]
    views = _unseen((columns, eye.size))
    step = max(1, _BLOCK // eye.size)
    for first in range(0, columns, step):
        part = slice(first, first + step)
        table = trace_sightlines(
            Medium(*(a[part] for a in medium)), eye, top, distance, base,
            largest_squeeze=LARGEST_SQUEEZE,
        )  # fmt: skip
        told = table.state >= 0
        views.is_open[part] = np.where(told, table.state == SIGHTLINE_STATES["open"], np.nan)
        views.extent[part] = np.where(told, table.visible_extent, np.nan)
        views.in_duct[part] = np.where(told, table.horizon_elevation > 0.0, np.nan)
    return views


def _rank(owner: np.ndarray) -> np.ndarray:
    """Which member of its row each column is, counted from 0."""
    order = np.argsort(owner, kind="stable")
    starts = np.searchsorted(owner[order], owner)
    rank = np.empty(owner.size, dtype=int)
    rank[order] = np.arange(owner.size) - starts[order]
    return rank


def _count(views: Views, owner: np.ndarray, into: tuple[np.ndarray, ...], at: Any) -> None:
    """Means of the shares and medians of the extents over each row's known members."""
    for row in np.unique(owner):
        mine = owner == row
        for total, values in zip(into, views, strict=False):
            part = values[mine, 0]
            known = np.isfinite(part).sum(axis=0) > 0
            part = part[:, known].astype(float)
            result = np.full(known.shape, np.nan)
            middle = np.nanmedian if values is views.extent else np.nanmean
            result[known] = middle(part, axis=0)
            total[(row, *at)] = result
