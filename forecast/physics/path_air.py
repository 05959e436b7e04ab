"""Air that changes along the way, over ground that need not be flat: where rays go through it.

The path is cut into segments in each of which the air is the same all along, so that rays are
exact inside (`forecast.physics.rays`); at a boundary height and direction go on unchanged. Between
stations N is taken as linear in range at equal heights above the surface, and as that of the
nearest station beyond the first and last one. With the default number of segments, halving them
moves the height of a ray at the target by less than 2 % of what the change of the air along the
way does (tested). Ground is a line of heights above the water (`forecast.physics.path_rays`).
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.path_rays import trace_all
from forecast.physics.rays import EXTENSIONS, build_medium

__all__ = ["PathAir", "above_water", "build_path_air", "path_heights", "trace_path"]

_SEGMENTS = 24  # at least so many where the air changes
_OWN_SLOPE = 1000.0  # m before the target: ground that rises to it from there is its own
_CLIFF = 1e-3  # m over which a cliff is taken to rise


class PathAir(NamedTuple):
    """Air prepared for tracing along paths, a batch of cases.

    ``z``, ``mu`` (case, segment, node) and ``count`` (case, segment): as in
    `forecast.physics.rays.Medium`; a case without air has ``count`` 0. ``radius`` (case,), m.
    ``edge``: distances at which rays are looked at, rising from 0 to the target's, m, (hop + 1,);
    ``segment``: which segment each hop runs through, (hop,); ``ground``: height of the ground at
    each edge, m, (hop + 1,), straight between, −inf where none is to block rays. ``block``: edges
    between which rays well over the ground are taken at one go, each stretch within one segment,
    (stretch + 1,); ``crest``: the highest ground of each, m, −inf where all is water, (stretch,).
    """

    z: np.ndarray
    mu: np.ndarray
    count: np.ndarray  # type: ignore[assignment]  # not tuple.count
    radius: np.ndarray
    edge: np.ndarray
    segment: np.ndarray
    ground: np.ndarray
    block: np.ndarray
    crest: np.ndarray


def above_water(height: Any, offset: float) -> np.ndarray:
    """Heights above the water from heights above mean sea level.

    Parameters
    ----------
    height : array_like
        Above mean sea level, m.
    offset : float
        How far the water stands above mean sea level, m.

    Returns
    -------
    ndarray
        m.

    Raises
    ------
    ValueError
        If a height lies under water.
    """
    above = np.asarray(height, dtype=float) - offset
    if np.any(above < 0.0):
        raise ValueError(f"above_water: a height lies {-np.min(above):g} m under the water")
    return above


def build_path_air(
    height: Any,
    refractivity: Any,
    station: Any,
    earth_radius: Any,
    distance: float,
    wave: str = "radio",
    ground: Any = None,
    segments: int | None = None,
) -> PathAir:
    """Prepare air that changes along a path.

    Parameters
    ----------
    height, refractivity : array_like
        Height above the water (m) and N (N-units), (case, station, level). A station without a
        usable level is left to its neighbours.
    station : array_like
        Distances of the stations from the observer, m, not falling, (station,).
    earth_radius : array_like
        Radius of the Earth along the path, m, scalar or (case,).
    distance : float
        Distance of the target, m.
    wave : {"radio", "optical"}
        How profiles are continued outside their levels, `forecast.physics.rays.EXTENSIONS`.
    ground : array_like, optional
        (point, 2): distance from the observer, not falling, and height above the water, m; two
        heights at one distance are a cliff. Ground that rises to the target without a break
        within the last kilometre is the target's own and blocks nothing.
    segments : int, optional
        How many, where there are several stations.

    Returns
    -------
    PathAir

    Raises
    ------
    ValueError
        If shapes do not fit, stations or ground fall, the ground holds NaN or does not reach from
        the observer to the target, or the distance is not above 0.
    """
    z = np.asarray(height, dtype=float)
    n = np.asarray(refractivity, dtype=float)
    at = np.asarray(station, dtype=float)
    if wave not in EXTENSIONS:
        raise ValueError(f"build_path_air: wave {wave!r}; choose from {', '.join(EXTENSIONS)}")
    if z.ndim != 3 or z.shape != n.shape or at.shape != z.shape[1:2]:
        raise ValueError(
            f"build_path_air: height {z.shape}, refractivity {n.shape} and station {at.shape} "
            "must be (case, station, level) twice and (station,)"
        )
    if not np.all(np.diff(at) >= 0.0):
        raise ValueError("build_path_air: stations must be in order of their distances")
    if not 0.0 < distance < 2e6:
        raise ValueError("build_path_air: distance must be above 0 and below 2,000 km")
    cases, stations, _ = z.shape
    pieces = 1 if stations == 1 else (segments or max(_SEGMENTS, 2 * stations))
    bounds = np.linspace(0.0, distance, pieces + 1)
    middle = 0.5 * (bounds[1:] + bounds[:-1])
    radius = np.array(np.broadcast_to(np.asarray(earth_radius, dtype=float), (cases,)))
    if stations > 1:
        gradient, scale = EXTENSIONS[wave]
        blended = np.full((2, cases, pieces, 2 * z.shape[2]), np.nan)
        _blend(z, n, at, middle, 1e-3 * gradient, scale, blended)
        z, n = blended
    medium = build_medium(
        z.reshape(cases * pieces, -1),
        n.reshape(cases * pieces, -1),
        np.repeat(radius, pieces),
        wave,
    )
    edge, level, block = _edges(bounds, ground, distance)
    hop = 0.5 * (edge[1:] + edge[:-1])
    segment = np.clip(np.searchsorted(bounds, hop) - 1, 0, pieces - 1)
    crest = np.maximum(np.maximum.reduceat(level, block[:-1]), level[block[1:]])
    crest[crest <= 0.0] = -np.inf
    shape = (cases, pieces, -1)
    return PathAir(
        medium.z.reshape(shape), medium.mu.reshape(shape), medium.count.reshape(cases, pieces),
        radius, edge, segment, level, block, crest,
    )  # fmt: skip


def _edges(
    bounds: np.ndarray, ground: Any, distance: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Edges at which rays are looked at, the ground there, and where stretches begin and end."""
    water = np.full(bounds.size, -np.inf), np.arange(bounds.size)
    if ground is None:
        return bounds, *water
    points = np.asarray(ground, dtype=float)
    if points.ndim != 2 or points.shape[1] != 2 or not np.all(np.isfinite(points)):
        raise ValueError("build_path_air: ground must be (point, 2) of finite numbers")
    at, height = points.T
    if not np.all(np.diff(at) >= 0.0):
        raise ValueError("build_path_air: distances of the ground must not fall")
    if not (at.size and at[0] <= 1.0 and at[-1] >= distance - 1.0):
        reach = f"from {at[0]:g} to {at[-1]:g} m" if at.size else "nowhere"
        raise ValueError(f"build_path_air: ground reaches {reach}; expected 0 to {distance:g} m")
    if np.all(height <= 0.0):
        return bounds, *water
    same = np.diff(at, prepend=-np.inf) == 0.0
    at = np.maximum.accumulate(at + _CLIFF * same)
    # Land and the points next to it, between which the shore lies; open water needs none.
    near = height > 0.0
    near[1:] |= height[:-1] > 0.0
    near[:-1] |= height[1:] > 0.0
    inside = at[near & (at > 0.0) & (at < distance)]
    own = max(distance - _OWN_SLOPE, 0.0)
    blocks = np.unique(np.concatenate([bounds, np.linspace(0.0, distance, _SEGMENTS + 1)]))
    edge = np.unique(np.concatenate([blocks, inside, [own]]))
    level = np.interp(edge, at, height)
    falls = np.flatnonzero(np.diff(level) < 0.0)
    first = max(int(np.searchsorted(edge, own)), int(falls[-1]) + 1 if falls.size else 0)
    level[first + 1 :] = -np.inf
    return edge, level, np.searchsorted(edge, blocks)


def trace_path(air: PathAir, launch_height: Any, elevation: Any) -> tuple[np.ndarray, np.ndarray]:
    """Trace rays to the target's distance.

    Parameters
    ----------
    air : PathAir
        (case,).
    launch_height : array_like
        m above the water, scalar or (case,).
    elevation : array_like
        rad, (ray,) or (case, ray).

    Returns
    -------
    height, blocked_at : ndarray
        m, (case, ray): height at the target's distance, NaN if the ray met water or ground
        before; and where it did, m from the observer, NaN if it did not.
    """
    heights, blocked = _run(air, launch_height, elevation, air.edge[-1:])
    return heights[..., 0], blocked


def path_heights(air: PathAir, launch_height: Any, elevation: Any, distance: Any) -> np.ndarray:
    """Heights of rays at several distances.

    Parameters
    ----------
    air, launch_height, elevation
        As for `trace_path`.
    distance : array_like
        m, rising, none beyond the target, (distance,).

    Returns
    -------
    ndarray
        m, (case, ray, distance); NaN after the ray has met water or ground.
    """
    return _run(air, launch_height, elevation, np.asarray(distance, dtype=float))[0]


def _run(
    air: PathAir, launch_height: Any, elevation: Any, distance: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    cases = air.radius.size
    angle = np.asarray(elevation, dtype=float)
    angle = np.array(np.broadcast_to(angle, (cases, angle.shape[-1])))
    launch = np.array(np.broadcast_to(np.asarray(launch_height, dtype=float), (cases,)))
    heights = np.full((*angle.shape, distance.size), np.nan)
    blocked = np.full(angle.shape, np.nan)
    trace_all(*air, launch, angle, distance, heights, blocked)
    return heights, blocked


@njit(cache=True, nogil=True)
def _level(z, n, at, gradient, scale, low, high):  # pragma: no cover - compiled
    """N of one profile at a height; continued below and above its levels."""
    if at <= z[low]:
        return n[low] + gradient * (at - z[low])
    if at >= z[high]:
        return n[high] * np.exp(-(at - z[high]) / scale)
    a, b = low, high
    while b - a > 1:
        middle = (a + b) // 2
        if z[middle] <= at:
            a = middle
        else:
            b = middle
    return n[a] + (n[b] - n[a]) * (at - z[a]) / (z[b] - z[a])


@njit(cache=True, nogil=True, parallel=True)
def _blend(z, n, station, middle, gradient, scale, out):  # pragma: no cover - compiled
    """Profiles at the segments' middles, on the levels of both neighbours together."""
    cases, stations, levels = z.shape
    for c in prange(cases):
        packed_z = np.empty((stations, levels))
        packed_n = np.empty((stations, levels))
        size = np.zeros(stations, dtype=np.int64)
        for s in range(stations):
            last = -np.inf
            for i in range(levels):
                here = z[c, s, i]
                if np.isfinite(here) and np.isfinite(n[c, s, i]) and here > last and here >= 0.0:
                    packed_z[s, size[s]] = here
                    packed_n[s, size[s]] = n[c, s, i]
                    last = here
                    size[s] += 1
        for m in range(middle.size):
            left = -1
            right = -1
            for s in range(stations):
                if size[s] < 2:
                    continue
                if station[s] <= middle[m]:
                    left = s
                elif right < 0:
                    right = s
            if left < 0:
                left = right
            if right < 0:
                right = left
            if left < 0:
                continue
            share = 0.0
            if right != left:
                share = (middle[m] - station[left]) / (station[right] - station[left])
            i = 0
            j = 0
            k = 0
            last = -np.inf
            while i < size[left] or j < size[right]:
                from_left = j >= size[right] or (
                    i < size[left] and packed_z[left, i] <= packed_z[right, j]
                )
                if from_left:
                    at = packed_z[left, i]
                    i += 1
                else:
                    at = packed_z[right, j]
                    j += 1
                if at <= last:
                    continue
                last = at
                one = _level(packed_z[left], packed_n[left], at, gradient, scale, 0, size[left] - 1)
                other = _level(
                    packed_z[right], packed_n[right], at, gradient, scale, 0, size[right] - 1
                )
                out[0, c, m, k] = at
                out[1, c, m, k] = one + share * (other - one)
                k += 1
