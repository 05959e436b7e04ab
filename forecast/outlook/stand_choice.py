"""Which height and which place are best to stand at, how sure that is, and how it is said.

A height is best by its probability; of equals by the surer lower bound, then by the larger median
visible extent, then the lowest wins: it needs no hill, mast or stairs, and whoever can stand there
gains nothing by climbing. Where nothing is ever open, no height is best.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from forecast.outlook.stand import StandShares, place_distances, place_grounds, stand_heights
from forecast.outlook.statistics import probability_interval
from forecast.schema import SURFACE_STATES

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = ["best_choice", "known_from", "stand_statistics"]

_EXTENT_STEP = 0.1  # m; visible extents nearer than the tracer's own tolerance are equal


def known_from(surface_state: np.ndarray, lowest_level: np.ndarray) -> np.ndarray:
    """Height (m) of the eye from which each row can be judged, (row,).

    Where a path over water has no surface layer because its inputs are missing, nothing is known
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
    offset = np.array([line.sea_level_offset for line in lines])
    eye = heights - offset[:, None]
    dims: tuple[str, ...] = ("profile", "sightline", "stand")
    out: dict[str, Any] = {
        "stand_visible_extent": (dims, shares.stand_extent),
        "stand_in_duct": (dims, shares.stand_in_duct),
    }
    chance = shares.stand_open
    lower = _add_interval(out, "stand", dims, chance, sure[:, None, None])
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
