"""Which height and which place are best to stand at, how sure that is, and how it is said.

A height is best by its probability; of equals by the surer lower bound, then by the larger median
visible extent, then the lowest wins: it needs no hill, mast or stairs, and whoever can stand there
gains nothing by climbing. Where nothing is ever open, no height is best.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from forecast.errors import printable
from forecast.outlook.intervals import probability_interval
from forecast.outlook.stand import (
    StandShares,
    eye_heights,
    place_distances,
    place_grounds,
    stand_heights,
)
from forecast.schema import SURFACE_STATES

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = ["best_choice", "best_occasion", "known_from", "stand_statistics", "stand_words"]

_CLEAR = 0.1  # heights whose probabilities differ by less are told as equal (ours, no source)
_DUCT_CLEAR = 0.25  # likewise for the shares of members with the eye in a duct
_EXTENT_STEP = 0.1  # m; visible extents nearer than the tracer's own tolerance are equal


def known_from(surface_state: np.ndarray, lowest_level: np.ndarray) -> np.ndarray:
    """Height (m) of the eye from which each row can be judged, (row,).

    Where a path has no surface layer because its inputs are missing, nothing is known
    of the air under the lowest level; everywhere else all heights count.
    """
    blind = np.asarray(surface_state) == SURFACE_STATES["unknown"]
    return np.where(blind, np.asarray(lowest_level, dtype=float), 0.0)


def stand_statistics(
    lines: list[Sightline], shares: StandShares, sure: np.ndarray, known: np.ndarray
) -> dict[str, Any]:
    """Probabilities, intervals, visible extents and best choices.

    Parameters
    ----------
    lines : list of Sightline
        Their ``stand_heights`` and ``places``.
    shares : StandShares
        From `stand_shares` or `join_shares`.
    sure : ndarray
        Effective number of members behind each row's interval, (row,).
    known : ndarray
        From `known_from`, (row,), m: lower eyes keep their wide interval but are never named best.

    Returns
    -------
    dict
        {name: (dims, array)}: ``stand_probability`` with ``_lower`` and ``_upper``,
        ``stand_visible_extent``, ``stand_in_duct``, ``best_stand_height`` and, over all rows by
        the mean probability, ``best_stand_height_overall``; if there are places, likewise
        ``place_probability`` …, ``best_place_height`` of each place, ``best_place`` and
        ``best_place_overall`` (positions along ``place``, −1 for none).
    """
    heights = stand_heights(lines)
    eye = eye_heights(lines)
    dims: tuple[str, ...] = ("profile", "sightline", "stand")
    out: dict[str, Any] = {
        "stand_visible_extent": (dims, shares.stand_extent),
        "stand_in_duct": (dims, shares.stand_in_duct),
    }
    chance = shares.stand_open
    trials = np.minimum(sure[:, None], shares.stand_members)[:, :, None]
    lower = _add_interval(out, "stand", dims, chance, trials)
    counts = eye >= known[:, None, None]
    best = best_choice(np.where(counts, chance, np.nan), lower, shares.stand_extent)
    out["best_stand_height"] = (dims[:2], _height_of(heights, best))
    overall = best_choice(*_over_rows(np.where(counts, chance, np.nan), lower, shares.stand_extent))
    out["best_stand_height_overall"] = (("sightline",), _height_of(heights, overall))
    distance = place_distances(lines)
    if distance.shape[1] == 0:
        return out
    dims = ("profile", "sightline", "place", "stand")
    ground = place_grounds(lines)
    chance, extent = shares.place_open, shares.place_extent
    trials = np.minimum(sure[:, None], shares.place_members)[:, :, None, None]
    lower = _add_interval(out, "place", dims, chance, trials)
    out["place_visible_extent"] = (dims, extent)
    counts = ground[:, :, None] + eye[:, None, :] >= known[:, None, None, None]
    chance = np.where(counts, chance, np.nan)
    at_place = best_choice(chance, lower, extent)
    out["best_place_height"] = (dims[:3], _height_of(heights[:, None, :], at_place))
    tops = [_pick(a, at_place) for a in (chance, lower, extent)]
    out["best_place"] = (dims[:2], best_choice(*tops).astype(np.int16))
    chance, lower, extent = _over_rows(chance, lower, extent)
    at_place = best_choice(chance, lower, extent)
    tops = [_pick(a, at_place) for a in (chance, lower, extent)]
    out["best_place_overall"] = (("sightline",), best_choice(*tops).astype(np.int16))
    return out


def best_choice(chance: np.ndarray, lower: np.ndarray, extent: np.ndarray) -> np.ndarray:
    """Position along the last axis of the best choice.

    Parameters
    ----------
    chance, lower, extent : ndarray
        Probability, its lower bound, visible extent (m); (…, choice). NaN chances do not compete.

    Returns
    -------
    ndarray of int
        (…,): the highest chance, of equals the highest lower bound, then the largest extent in
        steps of 0.1 m, then the first; −1 if no chance is known or all are 0.
    """
    left = np.isfinite(chance) & (chance > 0.0)
    for key in (
        np.round(chance, 9),
        np.round(lower, 9),
        np.round(np.nan_to_num(extent) / _EXTENT_STEP),
    ):
        value = np.where(left, np.nan_to_num(key), -np.inf)
        left &= value == value.max(axis=-1, keepdims=True, initial=-np.inf)
    return np.where(left.any(axis=-1), left.argmax(axis=-1) if left.shape[-1] else -1, -1)


def best_occasion(outlook: xr.Dataset, sightline: int) -> tuple[int, int] | None:
    """Valid time and height to name for a sightline: the likeliest ahead, or of late if none is.

    Parameters
    ----------
    outlook : xarray.Dataset
        With the variables of `stand_statistics`.
    sightline : int
        Position along ``sightline``.

    Returns
    -------
    tuple of int or None
        Positions along ``profile`` and ``stand``; of equals the surest, then the earliest. None if
        no height is best at any time.
    """
    rows = _rows(outlook, sightline)
    best = outlook["best_stand_height"].values[rows, sightline]
    if not np.isfinite(best).any():
        return None
    rows = rows[np.isfinite(best)]
    best = best[np.isfinite(best)]
    heights = outlook["stand_height"].values[sightline]
    stand = np.nanargmin(np.abs(heights - best[:, None]), axis=1)
    chance, lower = (
        outlook[f"stand_probability{suffix}"].values[rows, sightline, stand]
        for suffix in ("", "_lower")
    )
    first = np.lexsort((outlook["time"].values[rows], -lower, -chance))[0]
    return int(rows[first]), int(stand[first])


def stand_words(outlook: xr.Dataset, sightline: int) -> str:
    """Where to stand for a sightline, in a sentence of numbers.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`, with the variables of `stand_statistics`.
    sightline : int
        Position along ``sightline``.

    Returns
    -------
    str
        The likeliest height and time; how that compares with other heights at that time, as found,
        and how often the eye lies in a duct where that differs; the likeliest place; what is not
        known.
    """
    rows = _rows(outlook, sightline)
    heights = outlook["stand_height"].values[sightline]
    chance = outlook["stand_probability"].values[:, sightline]
    known = np.isfinite(chance[rows])
    if not known.any():
        return "No height can be judged: there is no usable air."
    unknown = _unknown_below(outlook, rows)
    found = best_occasion(outlook, sightline)
    if found is None:
        tried = heights[known.any(axis=0)]
        judged = " that can be judged" if unknown else ""
        span = f"{tried.min():g} to {tried.max():g} m" if tried.size > 1 else f"{tried[0]:g} m"
        times = int(known.any(axis=1).sum())
        covered = f"all {times} valid times" if times > 1 else "the only valid time"
        return f"Never open from any height{judged} ({span}): 0 % at {covered}.{unknown}"
    row, best = found
    time = np.datetime_as_string(outlook["time"].values[row].astype("datetime64[m]"))
    spread = _spread(outlook, "stand", (row, sightline, best))
    text = f"Best from {heights[best]:g} m ({spread}) at {time.replace('T', ' ')} UTC"
    text += f"; {_comparison(outlook, row, sightline, best)}."
    place = int(outlook["best_place"].values[row, sightline]) if "best_place" in outlook else -1
    if place >= 0:
        at = float(outlook["best_place_height"].values[row, sightline, place])
        stand = int(np.nanargmin(np.abs(heights - at)))
        name = printable(outlook["place_name"].values[sightline, place], 60)
        odds = _spread(outlook, "place", (row, sightline, place, stand))
        text += f" Best place then: {name}, {at:g} m above its ground ({odds})."
    return text + _unknown_below(outlook, np.array([row]))


def _rows(outlook: xr.Dataset, sightline: int) -> np.ndarray:
    """Rows of the sightline's site: those after its latest ascent, or all if there are none."""
    site = outlook["site"].values.astype(str)
    rows = np.flatnonzero(site == str(outlook["sightline_site"].values[sightline]))
    time = outlook["time"].values[rows]
    ascent = outlook["source_kind"].values[rows].astype(str) == "ascent"
    if not ascent.any():
        return rows
    ahead = time > time[ascent].max()
    return rows[ahead] if ahead.any() else rows


def _comparison(outlook: xr.Dataset, row: int, sightline: int, best: int) -> str:
    """How the best height compares with the highest, the lowest and the worst one."""
    heights = outlook["stand_height"].values[sightline]
    chance = outlook["stand_probability"].values[row, sightline]
    known = known_from(outlook["surface_layer_state"].values, outlook["lowest_level"].values)[row]
    eye = outlook["stand_eye_height"].values[sightline]
    judged = np.flatnonzero(np.isfinite(chance) & (eye >= known))
    low, high = judged[0], judged[-1]
    worst = int(judged[np.argmin(chance[judged])])

    def said(stand: int) -> str:
        return f"{heights[stand]:g} m {100.0 * chance[stand]:.0f} %"

    if judged.size == 1:
        return "no other height can be judged" if known > 0.0 else "no other height was tried"
    if chance[best] - chance[worst] < _CLEAR:
        return f"other heights do as well, none under {100.0 * chance[worst]:.0f} %"
    if chance[best] - chance[high] >= _CLEAR:
        ducts = _ducts(outlook, row, sightline, best, high)
        return f"as found, low beats high: from {said(high)}{ducts}"
    if worst > low and chance[low] - chance[worst] >= _CLEAR:
        ducts = _ducts(outlook, row, sightline, low, worst)
        return f"as found, middling is worst: from {said(worst)}, but from {said(low)}{ducts}"
    return f"as found, higher is better: from {said(worst)}"


def _ducts(outlook: xr.Dataset, row: int, sightline: int, one: int, other: int) -> str:
    """How often the eye lies in a duct at two heights, if that differs clearly."""
    heights = outlook["stand_height"].values[sightline]
    share = outlook["stand_in_duct"].values[row, sightline]
    if not share[one] - share[other] >= _DUCT_CLEAR:
        return ""
    return (
        f" (the eye is in a duct in {100.0 * share[one]:.0f} % of members at {heights[one]:g} m, "
        f"in {100.0 * share[other]:.0f} % at {heights[other]:g} m)"
    )


def _unknown_below(outlook: xr.Dataset, rows: np.ndarray) -> str:
    known = known_from(outlook["surface_layer_state"].values, outlook["lowest_level"].values)[rows]
    if not (known > 0.0).any():
        return ""
    return (
        f" Heights below {known.max():.0f} m are not known: the air next to the surface could not "
        "be modelled."
    )


def _spread(outlook: xr.Dataset, name: str, at: tuple[int, ...]) -> str:
    chance, lower, upper = (
        100.0 * float(outlook[f"{name}_probability{suffix}"].values[at])
        for suffix in ("", "_lower", "_upper")
    )
    return f"{chance:.0f} %, {lower:.0f} to {upper:.0f} %"


def _add_interval(
    out: dict[str, Any], name: str, dims: tuple[str, ...], chance: np.ndarray, sure: np.ndarray
) -> np.ndarray:
    """Put a probability and its bounds into `out`; the lower one is returned."""
    lower, upper = probability_interval(chance * sure, np.broadcast_to(sure, chance.shape))
    bounds = np.minimum(lower, chance), np.maximum(upper, chance)
    for suffix, values in zip(("", "_lower", "_upper"), (chance, *bounds), strict=True):
        out[f"{name}_probability{suffix}"] = (dims, values)
    return bounds[0]


def _over_rows(*arrays: np.ndarray) -> list[np.ndarray]:
    """Means over rows; a choice counts only if it is known wherever any is."""
    known = np.isfinite(arrays[0])
    rows = known.any(axis=tuple(range(2, known.ndim)), keepdims=True)
    everywhere = np.where(rows, known, True).all(axis=0) & rows.any(axis=0)
    number = np.maximum(rows.sum(axis=0), 1)
    return [
        np.where(everywhere, np.nansum(np.where(rows, a, np.nan), axis=0) / number, np.nan)
        for a in arrays
    ]


def _pick(values: np.ndarray, position: np.ndarray) -> np.ndarray:
    picked = np.take_along_axis(values, np.maximum(position, 0)[..., None], axis=-1)[..., 0]
    return np.where(position >= 0, picked, np.nan)


def _height_of(heights: np.ndarray, position: np.ndarray) -> np.ndarray:
    whole = np.broadcast_to(heights, (*position.shape, heights.shape[-1]))
    return _pick(whole, position)
