"""How the ground along a path shifts and blocks a field.

Method: shifted map in turned frames. Between nodes the ground is a plane; height is counted from
it, across it, and the wave advances along it, so that the plane is again the surface of the
transform (Beilis & Tappert, J. Acoust. Soc. Am. 66 (1979) 811–826; Donohue & Kuttler, IEEE Trans.
Antennas Propag. 48 (2000) 260–277; both from memory). Where the slope changes, the field is turned
by the phase ``k ζ (sin β₋ − sin β₊)``. On one slope this is exact; crossing from one to another
it moves heights by ``tan²β`` of what was climbed: a hundredth at a slope of 0.1.

What is steeper than `STEEPEST` does not fit such a map: it becomes a row of edges, black screens
that take away the field below them, standing on the highest gentle ground beneath.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

__all__ = ["STEEPEST", "Relief", "Terrain", "check_terrain", "follow_ground", "ground_scales"]

#: Slope up to which ground is a plane to be followed, m per m.
STEEPEST = 0.1

_LEAST_EDGE = 1.0  # m: less of steep ground above the gentle is left out


class Terrain(NamedTuple):
    """Ground and knife edges along a path: ranges and heights above the datum of M, m.

    ``range`` rises from 0 or before to the end of the path or beyond; the ground is straight
    between its points. Edges, if any, are heights of tops above the datum.
    """

    range: Any
    height: Any
    edge_range: Any = ()
    edge_height: Any = ()


class Relief(NamedTuple):
    """Ground under a march: heights of the gentle and of the true ground at its nodes, (node,).

    ``sine`` and ``cosine`` of the slope are those from each node to the next, (node − 1,). What
    stands on the gentle ground: ranges (m) and tops above the datum (m), (edge,), in order.
    """

    ground: np.ndarray
    true_ground: np.ndarray
    sine: np.ndarray
    cosine: np.ndarray
    edge_range: np.ndarray
    edge_top: np.ndarray


def check_terrain(terrain: Terrain, distance: float, antenna_height: float) -> None:
    """Refuse terrain that cannot be followed.

    Parameters
    ----------
    terrain : Terrain
    distance, antenna_height : float
        m.

    Raises
    ------
    ValueError
        If it is not finite, does not rise in range, misses part of the path, or covers the antenna.
    """
    x, z = (np.asarray(a, dtype=float) for a in terrain[:2])
    if x.ndim != 1 or x.shape != z.shape or x.size < 2:
        raise ValueError("propagate: terrain needs at least two points, ranges and heights alike")
    if not (np.all(np.isfinite(x)) and np.all(np.isfinite(z)) and np.all(np.diff(x) > 0.0)):
        raise ValueError("propagate: terrain must be finite, its ranges rising")
    if x[0] > 0.0 or x[-1] < distance:
        raise ValueError(
            f"propagate: terrain from {x[0]:g} to {x[-1]:g} m; the path goes from 0 to "
            f"{distance:g} m"
        )
    ground = float(np.interp(0.0, x, z))
    if not ground < antenna_height:
        raise ValueError(
            f"propagate: terrain at {ground:g} m is above the antenna at {antenna_height:g} m; "
            "heights count from the same datum"
        )
    at, top = (np.asarray(a, dtype=float) for a in terrain[2:])
    if at.shape != top.shape or at.ndim != 1 or not np.all(np.isfinite(at) & np.isfinite(top)):
        raise ValueError("propagate: edges need finite ranges and heights alike")
    if np.any((at <= 0.0) | (at >= distance)):
        raise ValueError("propagate: an edge lies outside the path")


def ground_scales(terrain: Terrain) -> tuple[float, float, float, bool]:
    """What a grid must know of terrain.

    Parameters
    ----------
    terrain : Terrain

    Returns
    -------
    tuple
        Lowest ground, m; greatest change of slope that is followed, m per m; median distance
        between points, m; whether edges stand in the way.
    """
    x, z = np.asarray(terrain.range, dtype=float), np.asarray(terrain.height, dtype=float)
    slopes = np.diff(z) / np.diff(x)
    edges = np.size(terrain.edge_range) > 0 or bool(np.any(np.abs(slopes) > STEEPEST))
    slopes = np.clip(slopes, -STEEPEST, STEEPEST)
    change = float(max(np.ptp(slopes), np.abs(slopes).max()))
    return float(z.min()), change, float(np.median(np.diff(x))), edges


def follow_ground(terrain: Terrain | None, count: int, step: float) -> Relief:
    """Ground at equal steps.

    Parameters
    ----------
    terrain : Terrain, optional
        None is the sea at 0 m.
    count : int
        Steps.
    step : float
        m.

    Returns
    -------
    Relief
    """
    if terrain is None:
        level, none = np.zeros(count + 1), np.zeros(0)
        return Relief(level, level, np.zeros(count), np.ones(count), none, none)
    x = step * np.arange(count + 1)
    true = np.interp(x, np.asarray(terrain.range, float), np.asarray(terrain.height, float))
    # The highest ground nowhere steeper than allowed that lies below the true one everywhere.
    rise = STEEPEST * x
    gentle = np.minimum(
        np.minimum.accumulate(true - rise) + rise,
        np.minimum.accumulate((true + rise)[::-1])[::-1] - rise,
    )
    slope = np.diff(gentle) / step
    cosine = 1.0 / np.sqrt(1.0 + slope**2)
    steep = np.flatnonzero(true - gentle > _LEAST_EDGE)
    steep = steep[(steep > 0) & (steep < count)]
    at = np.concatenate([x[steep], np.asarray(terrain.edge_range, dtype=float)])
    top = np.concatenate([true[steep], np.asarray(terrain.edge_height, dtype=float)])
    order = np.argsort(at, kind="stable")
    return Relief(gentle, true, slope * cosine, cosine, at[order], top[order])
