"""Air that changes along the way, over ground that need not be flat: where rays go through it.

The path is cut into segments in each of which the air is the same all along, so that rays are
exact inside (`forecast.physics.rays`); at a boundary height and direction go on unchanged. Between
stations N is taken as linear in range at equal heights above the surface, and as that of the
nearest station beyond the first and last one. With the default number of segments, halving them
moves the height of a ray at the target by less than 2 % of what the change of the air along the
way does (tested). Ground is a line of heights above the water; rays are held against it at its
points and every `_GROUND_STEP` between, where a ray of Earth's own curvature sags by 2 cm.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.rays import EXTENSIONS, advance, build_medium, locate

__all__ = ["PathAir", "above_water", "build_path_air", "path_heights", "trace_path"]

_SEGMENTS = 24  # at least so many where the air changes
_GROUND_STEP = 1000.0  # m
_NEVER = 1e-30


class PathAir(NamedTuple):
    """Air prepared for tracing along paths, a batch of cases.

    ``z``, ``mu`` (case, segment, node) and ``count`` (case, segment): as in
    `forecast.physics.rays.Medium`; a case without air has ``count`` 0. ``radius`` (case,), m.
    ``edge``: distances at which rays are looked at, rising from 0 to the target's, m, (hop + 1,);
    ``segment``: which segment each hop runs through, (hop,); ``ground``: height of the ground at
    each edge, m, (hop + 1,), −inf where it is water. ``block``: edges between which rays well over
    the ground are taken at one go, each stretch within one segment, (stretch + 1,).
    """

    z: np.ndarray
    mu: np.ndarray
    count: np.ndarray  # type: ignore[assignment]  # not tuple.count
    radius: np.ndarray
    edge: np.ndarray
    segment: np.ndarray
    ground: np.ndarray
    block: np.ndarray


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
        (point, 2): distance from the observer, not falling, and height above the water, m.
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
    points = _ground_points(ground, distance)
    land = points[points[:, 1] > 0.0]
    blocks = np.unique(np.concatenate([bounds, np.linspace(0.0, distance, _SEGMENTS + 1)]))
    if not land.size:
        blocks = bounds
    edge = np.unique(np.concatenate([blocks, land[:, 0]]))
    level = np.full(edge.size, -np.inf)
    if land.size:
        level = np.interp(edge, points[:, 0], points[:, 1])
        level[level <= 0.0] = -np.inf
    hop = 0.5 * (edge[1:] + edge[:-1])
    segment = np.clip(np.searchsorted(bounds, hop) - 1, 0, pieces - 1)
    shape = (cases, pieces, -1)
    return PathAir(
        medium.z.reshape(shape), medium.mu.reshape(shape), medium.count.reshape(cases, pieces),
        radius, edge, segment, level, np.searchsorted(edge, blocks),
    )  # fmt: skip


def _ground_points(ground: Any, distance: float) -> np.ndarray:
    """The ground's points within the path, with more between them."""
    if ground is None:
        return np.zeros((0, 2))
    points = np.asarray(ground, dtype=float)
    if points.ndim != 2 or points.shape[1] != 2 or not np.all(np.isfinite(points)):
        raise ValueError("build_path_air: ground must be (point, 2) of finite numbers")
    if not np.all(np.diff(points[:, 0]) >= 0.0):
        raise ValueError("build_path_air: distances of the ground must not fall")
    if points[0, 0] > 1.0 or points[-1, 0] < distance - 1.0:
        raise ValueError(
            f"build_path_air: ground reaches from {points[0, 0]:g} to {points[-1, 0]:g} m; "
            f"expected 0 to {distance:g} m"
        )
    more = np.arange(0.0, distance, _GROUND_STEP)
    at = np.unique(np.clip(np.concatenate([points[:, 0], more]), 0.0, distance))
    return np.stack([at, np.interp(at, points[:, 0], points[:, 1])], axis=-1)


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
        before; and where it did, NaN if it did not. The ground under the observer and under the
        target does not block.
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
    _trace_all(*air, launch, angle, distance, heights, blocked)
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


@njit(cache=True, nogil=True, error_model="numpy")
def _hop(z, mu, count, here, w, length):  # pragma: no cover - compiled
    """Carry a ray over a length of one segment: Z and slope there, and how far it came."""
    layer, start, mu_start = locate(z, mu, count, here)
    slope2 = w * w
    energy = max((1.0 + mu_start) * slope2 / (1.0 + slope2), _NEVER)
    end, w, gone, _, _, _ = advance(
        z, mu, count, layer, start, mu_start, energy, w > 0.0, length, False, False
    )
    return end, w, gone


@njit(cache=True, nogil=True, error_model="numpy")
def follow(
    z, mu, count, radius, edge, segment, ground, block, launch, elevation, distance, heights
):  # pragma: no cover - compiled
    """One ray hop by hop; fills `heights` at `distance`; returns where it was blocked, or NaN."""
    here = radius * np.log1p(launch / radius)
    w = np.tan(elevation)
    asked = 0
    hops = segment.size
    while asked < distance.size and distance[asked] <= edge[0]:
        heights[asked] = launch
        asked += 1
    for b in range(block.size - 1):
        first, last = block[b], block[b + 1]
        s = segment[first]
        length = edge[last] - edge[first]
        free = asked >= distance.size or distance[asked] >= edge[last]
        if free:
            highest = -np.inf
            for k in range(first + 1, last + 1):
                if k < hops:
                    highest = max(highest, ground[k])
            end, slope, gone = _hop(z[s], mu[s], count[s], here, w, length)
            # A ray cannot lie deeper between its ends than its steeper slope takes it half-way.
            lowest = min(here, end) - 0.5 * length * max(abs(w), abs(slope))
            if gone >= length and (highest < 0.0 or radius * np.expm1(lowest / radius) > highest):
                here, w = end, slope
                if asked < distance.size and distance[asked] <= edge[last]:
                    heights[asked] = radius * np.expm1(here / radius)
                    asked += 1
                continue
        for k in range(first, last):
            x = edge[k]
            while x < edge[k + 1]:
                stop = edge[k + 1]
                if asked < distance.size and distance[asked] < stop:
                    stop = distance[asked]
                here, w, gone = _hop(z[s], mu[s], count[s], here, w, stop - x)
                if gone < stop - x:
                    return x + gone
                x = stop
                if asked < distance.size and distance[asked] <= x:
                    heights[asked] = radius * np.expm1(here / radius)
                    asked += 1
            if k + 1 < hops and ground[k + 1] > radius * np.expm1(here / radius):
                return edge[k + 1]
    return np.nan


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _trace_all(
    z, mu, count, radius, edge, segment, ground, block, launch, angle, distance, heights, blocked
):  # pragma: no cover - compiled
    cases, rays = angle.shape
    for task in prange(cases * rays):
        c = task // rays
        r = task % rays
        if count[c].min() < 2 or not 0.0 <= launch[c] < np.inf:
            continue
        if not abs(angle[c, r]) < 0.5 * np.pi:
            continue
        blocked[c, r] = follow(
            z[c], mu[c], count[c], radius[c], edge, segment, ground, block, launch[c],
            angle[c, r], distance, heights[c, r],
        )  # fmt: skip
