"""What the chart of where to stand shows and says: computed here, drawn in `stand_chart`."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC
from typing import NamedTuple
from zoneinfo import ZoneInfo

import numpy as np
import xarray as xr

from forecast.outlook.stand_choice import best_occasion, known_from, stand_words
from forecast.output.chart_data import TimeHeight, utc
from forecast.output.text import local_time, metres, percent, profile_counts, shorten
from forecast.schema import CAUTION

__all__ = ["PlaceOdds", "StandOdds", "foot_texts", "head_texts", "stand_odds", "stand_text"]

_MOST_PLACES = 10


class PlaceOdds(NamedTuple):
    """A place at its best: probability and bounds, height above its ground (m), valid time.

    Height and time are missing where nothing is ever open there; all is, where none can be told.
    """

    name: str
    chance: float
    lower: float
    upper: float
    height: float
    time: np.datetime64


@dataclass(frozen=True)
class StandOdds:
    """What the chart shows of one sightline.

    ``chance``: (profile, stand), NaN where nothing is known; ``best``: position of the best height
    of each profile, −1 for none; ``named``: profile and stand worth naming, or None; ``places``:
    the likeliest first; ``left_out``: places not shown.
    """

    heights: np.ndarray
    chance: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    best: np.ndarray
    named: tuple[int, int] | None
    places: list[PlaceOdds]
    left_out: int


def stand_odds(outlook: xr.Dataset, sightline: int, data: TimeHeight) -> StandOdds:
    """Gather what the chart of a sightline shows.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`, with the variables of
        `forecast.outlook.stand_choice.stand_statistics`.
    sightline : int
        Position along ``sightline``.
    data : TimeHeight
        Times of the sightline's site.

    Returns
    -------
    StandOdds
        Only heights that are in the list of this sightline; heights under those that the outlook
        can judge count as not known.
    """
    heights = outlook["stand_height"].values[sightline]
    tried = np.flatnonzero(np.isfinite(heights))
    heights = heights[tried]
    known = known_from(outlook["surface_layer_state"].values, outlook["lowest_level"].values)
    eye = outlook["stand_eye_height"].values[sightline][tried]
    judged = eye >= known[data.rows][:, None]
    chance, lower, upper = (
        np.where(
            judged,
            outlook[f"stand_probability{suffix}"].values[data.rows, sightline][:, tried],
            np.nan,
        )
        for suffix in ("", "_lower", "_upper")
    )
    best = outlook["best_stand_height"].values[data.rows, sightline]
    distance = np.abs(heights - np.where(np.isfinite(best), best, 0.0)[:, None])
    found = best_occasion(outlook, sightline)
    named = None
    if found is not None:
        named = int(np.flatnonzero(data.rows == found[0])[0]), int(found[1])
    places = _places(outlook, sightline, data)
    return StandOdds(
        heights, chance, lower, upper,
        np.where(np.isfinite(best), distance.argmin(axis=1), -1),
        named, places[:_MOST_PLACES], max(0, len(places) - _MOST_PLACES),
    )  # fmt: skip


def head_texts(
    outlook: xr.Dataset, sightline: int, odds: StandOdds, data: TimeHeight, zone: ZoneInfo
) -> tuple[str, str, str]:
    """Whose chart it is, the answer, and what else is to say."""
    name = shorten(str(outlook["sightline_name"].values[sightline]), 70)
    title = f"{shorten(str(outlook.attrs.get('title', '')), 60)} · where to stand for {name}"
    answer, _, rest = stand_words(outlook, sightline).partition("; ")
    if odds.named is not None and zone.key != "UTC":
        answer += f", {local_time(utc(data.time[odds.named[0]]), zone)} local time"
    return title, answer, rest[:1].upper() + rest[1:]


def foot_texts(outlook: xr.Dataset, odds: StandOdds, data: TimeHeight) -> tuple[str, str, str]:
    """What the chart is made from, its source, and the caution."""
    more = f" {odds.left_out} more places in the tables." if odds.left_out else ""
    made = (
        f"{profile_counts(data)}, "
        f"{utc(data.time[0]):%Y-%m-%d %H:%M} to {utc(data.time[-1]):%Y-%m-%d %H:%M} UTC. "
        "The air of the site stands for the whole path; heights are evenly spaced as tried, not to "
        f"scale. {str(outlook.attrs.get('calibration', '')).capitalize()}.{more}"
    )
    return made, f"Source: {outlook.attrs.get('source', '')}.", CAUTION


def stand_text(outlook: xr.Dataset, sightline: int, odds: StandOdds, data: TimeHeight) -> str:
    """Say in words what the chart shows."""
    name = shorten(str(outlook["sightline_name"].values[sightline]), 80)
    low, high = odds.heights[0], odds.heights[-1]
    parts = [
        f"Odds of {name} by height of the eye, {low:g} to {high:g} m, at {data.time.size} valid "
        f"times from {utc(data.time[0]):%Y-%m-%d %H:%M} to {utc(data.time[-1]):%Y-%m-%d %H:%M} "
        f"UTC; the target is {metres(float(outlook['distance'].values[sightline]))} away.",
        stand_words(outlook, sightline),
    ]
    has = odds.best >= 0
    if has.any():
        best, times = np.unique(odds.heights[odds.best[has]], return_counts=True)
        often = int(times.argmax())
        parts.append(
            f"Best height by valid time: {best[0]:g} to {best[-1]:g} m, most often "
            f"{best[often]:g} m ({times[often]} of {has.size} times)."
        )
    for place, chance, lower, upper, at, when in odds.places:
        words = f"{shorten(place, 80)}: {percent(chance)} ({percent(lower)} to {percent(upper)})"
        if np.isfinite(at):
            words += f" from {at:g} m above its ground, {local_time(utc(when), UTC)} UTC"
        parts.append(f"{words}.")
    return " ".join(parts)


def _places(outlook: xr.Dataset, sightline: int, data: TimeHeight) -> list[PlaceOdds]:
    """Best odds of every place at the times that count, the likeliest first."""
    if "place_name" not in outlook:
        return []
    rows = data.rows[data.ahead] if data.ahead.any() else data.rows
    heights = outlook["stand_height"].values[sightline]
    out = []
    for p, name in enumerate(outlook["place_name"].values[sightline].astype(str)):
        if not name:
            continue
        odds = [
            outlook[f"place_probability{suffix}"].values[rows, sightline, p]
            for suffix in ("", "_lower", "_upper")
        ]
        at = outlook["best_place_height"].values[rows, sightline, p]
        if not np.isfinite(at).any():
            nothing = 0.0 if np.isfinite(odds[0]).any() else np.nan
            most = np.nanmax(odds[2]) if np.isfinite(odds[2]).any() else np.nan
            out.append(PlaceOdds(name, nothing, nothing, float(most), np.nan, np.datetime64("NaT")))
            continue
        stand = np.nanargmin(np.abs(heights - np.where(np.isfinite(at), at, 0.0)[:, None]), axis=1)
        chance, lower, upper = (a[np.arange(rows.size), stand] for a in odds)
        chance = np.where(np.isfinite(at), chance, -1.0)
        r = int(np.lexsort((outlook["time"].values[rows], -np.nan_to_num(lower), -chance))[0])
        when = outlook["time"].values[rows[r]]
        c, low, high, up = (float(a[r]) for a in (chance, lower, upper, at))
        out.append(PlaceOdds(name, c, low, high, up, when))
    return sorted(out, key=lambda place: -np.nan_to_num(place.chance, nan=-1.0))
