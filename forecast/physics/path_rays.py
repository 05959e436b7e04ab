"""Where a ray goes hop by hop through air that changes along the way, and where ground stops it.

Inside a segment of air a ray is the exact parabola in each layer that `forecast.physics.rays`
describes, and the ground between two of its points is a straight line in the same coordinates (to
the square of its rise over 8 a: 5 mm for 500 m), so that where they meet is the root of a quadratic
in each layer. Only rays that come lower than the ground of a stretch are held against it.
"""

from __future__ import annotations

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.rays import advance, locate

__all__ = ["follow", "meets_surface", "trace_all"]

_NEVER = 1e-30  # energy of a level ray, as in `advance`: no slope is ever 0
_MOST_STEPS = 5000  # through layers, over one piece of ground


@njit(cache=True, nogil=True, error_model="numpy")
def _turning(z, mu, count, layer, mu_start, energy, rise):  # pragma: no cover - compiled
    """Layer in which a ray that starts in `layer` turns back, −1 if it does not; and Z there."""
    least = mu_start - energy
    i = layer
    if rise:
        while i < count - 1 and mu[i + 1] > least:
            i += 1
        if i == count - 1:
            return -1, np.inf
    else:
        while i >= 0 and mu[i] > least:
            i -= 1
        if i < 0:
            return -1, -np.inf
    share = (least - mu[i]) / (mu[i + 1] - mu[i])
    return i, z[i] + share * (z[i + 1] - z[i])


@njit(cache=True, nogil=True)
def _mark(layer, rise, times):  # pragma: no cover - compiled
    """Number for turning so many times in a layer; sums of them tell rays apart."""
    name = 2 * layer + (1 if rise else 0) + 3
    return times * name * (name * 7919 + 104729)


@njit(cache=True, nogil=True, error_model="numpy")
def _hop(z, mu, count, here, w, length):  # pragma: no cover - compiled
    """Carry a ray over a length of one segment.

    Returns Z and slope at its end, how far it came, its lowest Z, and the mark of its turns.
    """
    layer, start, mu_start = locate(z, mu, count, here)
    slope2 = w * w
    energy = max((1.0 + mu_start) * slope2 / (1.0 + slope2), _NEVER)
    rise = w > 0.0
    end, w, gone, turns, _, _ = advance(
        z, mu, count, layer, start, mu_start, energy, rise, length, False, False
    )
    lowest = min(here, end)
    mark = 0
    if turns > 0:
        there, height = _turning(z, mu, count, layer, mu_start, energy, rise)
        mark += _mark(there, rise, (turns + 1) // 2)
        lowest = min(lowest, height)
        if turns > 1:
            there, height = _turning(z, mu, count, layer, mu_start, energy, not rise)
            mark += _mark(there, not rise, turns // 2)
            lowest = min(lowest, height)
    return end, w, gone, lowest, mark


@njit(cache=True, nogil=True, error_model="numpy")
def _meeting(gap, slope, bend):  # pragma: no cover - compiled
    """Smallest t ≥ 0 with gap + slope t + bend t² ≤ 0; infinity if there is none."""
    if gap < 0.0 or (gap == 0.0 and (slope < 0.0 or (slope == 0.0 and bend < 0.0))):
        return 0.0
    if gap == 0.0:
        return -slope / bend if bend < 0.0 else np.inf
    square = slope * slope - 4.0 * bend * gap
    if square < 0.0:
        return np.inf
    under = np.sqrt(square) - slope
    return 2.0 * gap / under if under > 0.0 else np.inf


@njit(cache=True, nogil=True, error_model="numpy")
def _hop_over(z, mu, count, here, w, length, ground, rate):  # pragma: no cover - compiled
    """Carry a ray over a length of ground that lies at `ground` + `rate` x, layer by layer.

    Returns Z and slope at its end, how far it came, and the mark of its turns.
    """
    i, here, mu_start = locate(z, mu, count, here)
    slope2 = w * w
    energy = max((1.0 + mu_start) * slope2 / (1.0 + slope2), _NEVER)
    c2 = 1.0 + mu_start - energy
    inv_c, half_c = 1.0 / np.sqrt(c2), 0.5 / c2
    root = np.sqrt(energy) * inv_c
    w = root if w > 0.0 else -root
    x = 0.0
    mark = 0
    for _ in range(_MOST_STEPS):
        beta = (mu[i + 1] - mu[i]) / (z[i + 1] - z[i]) * half_c if i < count - 1 else 0.0
        rise = w > 0.0
        node = i + 1 if rise else i
        dx = np.inf
        crosses = False
        w1 = w
        if node < count:
            disc = mu[node] - mu_start + energy
            crosses = disc > 0.0
            if crosses:
                root = np.sqrt(disc) * inv_c
                w1 = root if rise else -root
                dx = 2.0 * (z[node] - here) / (w + w1) if z[node] != here else 0.0
            else:
                dx = -2.0 * w / beta
                w1 = -w
        step = min(dx, length - x)
        met = _meeting(here - ground - rate * x, w - rate, 0.5 * beta)
        if met <= step:
            return here + met * (w + 0.5 * beta * met), w + beta * met, x + met, mark
        if not crosses and dx < np.inf and 0.5 * dx < step:
            mark += _mark(i, rise, 1)
        if dx >= length - x:
            return here + step * (w + 0.5 * beta * step), w + beta * step, length, mark
        x += dx
        w = w1
        if crosses:
            here = z[node]
            if rise:
                i += 1
            elif i == 0:
                return here, w, x, mark
            else:
                i -= 1
        elif here == z[i] and rise and i > 0:
            i -= 1
        elif here == z[i + 1] and not rise:
            i += 1
        elif here == z[i] and rise:
            return here, w, x, mark
    # It swings about one level by next to nothing, which `advance` takes at one go.
    end, w, gone, _, more = _hop(z, mu, count, here, w, length - x)
    return end, w, length if gone >= length - x else x + gone, mark + more


@njit(cache=True, nogil=True, error_model="numpy")
def follow(air, launch, elevation, distance, heights, track):  # pragma: no cover - compiled
    """Follow one ray to the last edge; fills `heights` at the distances (rising).

    ``air``: ``z, mu, count`` of the segments, ``radius``, ``edge``, ``segment``, ``ground``,
    ``block`` and ``crest`` of `forecast.physics.path_air.PathAir`. Fills ``track`` with Z and slope
    where the ray ended. Returns where it was blocked, NaN if it was not, and a number that two
    rays have in common if they turn in the same layers equally often.
    """
    z, mu, count, radius, edge, segment, ground, block, crest = air
    here = radius * np.log1p(launch / radius)
    w = np.tan(elevation)
    asked = 0
    mark = 0
    while asked < distance.size and distance[asked] <= edge[0]:
        heights[asked] = launch
        asked += 1
    for b in range(block.size - 1):
        first, last = block[b], block[b + 1]
        s = segment[first]
        length = edge[last] - edge[first]
        if asked >= distance.size or distance[asked] >= edge[last]:
            end, slope, gone, lowest, turned = _hop(z[s], mu[s], count[s], here, w, length)
            if gone >= length and radius * np.expm1(lowest / radius) > crest[b]:
                here, w = end, slope
                mark += turned
                while asked < distance.size and distance[asked] <= edge[last]:
                    heights[asked] = radius * np.expm1(here / radius)
                    asked += 1
                continue
        for k in range(first, last):
            low, high = ground[k], ground[k + 1]
            land = max(low, high) > 0.0 and min(low, high) > -np.inf
            if land:
                low, high = radius * np.log1p(low / radius), radius * np.log1p(high / radius)
            rate = (high - low) / (edge[k + 1] - edge[k]) if land else 0.0
            x = edge[k]
            while x < edge[k + 1]:
                stop = edge[k + 1]
                if asked < distance.size and distance[asked] < stop:
                    stop = distance[asked]
                if land:
                    here, w, gone, turned = _hop_over(
                        z[s], mu[s], count[s], here, w, stop - x, low + rate * (x - edge[k]), rate
                    )
                else:
                    here, w, gone, _, turned = _hop(z[s], mu[s], count[s], here, w, stop - x)
                mark += turned
                if gone < stop - x:
                    track[0], track[1] = here, w
                    return x + gone, mark
                x = stop
                while asked < distance.size and distance[asked] <= x:
                    heights[asked] = radius * np.expm1(here / radius)
                    asked += 1
    track[0], track[1] = here, w
    return np.nan, mark


@njit(cache=True, nogil=True, error_model="numpy")
def meets_surface(z, mu, count, here, w):  # pragma: no cover - compiled
    """Whether a ray at Z and slope ever meets the surface of a segment that goes on for ever."""
    layer, _, mu_start = locate(z, mu, count, here)
    slope2 = w * w
    energy = max((1.0 + mu_start) * slope2 / (1.0 + slope2), _NEVER)
    if w > 0.0 and _turning(z, mu, count, layer, mu_start, energy, True)[0] < 0:
        return False
    return _turning(z, mu, count, layer, mu_start, energy, False)[0] < 0


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def trace_all(
    z,
    mu,
    count,
    radius,
    edge,
    segment,
    ground,
    block,
    crest,
    launch,
    angle,
    distance,
    heights,
    blocked,
):  # pragma: no cover - compiled
    """Follow the rays of all cases; fills `heights` (case, ray, distance) and `blocked`."""
    cases, rays = angle.shape
    for task in prange(cases * rays):
        c = task // rays
        r = task % rays
        if count[c].min() < 2 or not 0.0 <= launch[c] < np.inf:
            continue
        if not abs(angle[c, r]) < 0.5 * np.pi:
            continue
        track = np.empty(2)
        air = (z[c], mu[c], count[c], radius[c], edge, segment, ground, block, crest)
        blocked[c, r], _ = follow(air, launch[c], angle[c, r], distance, heights[c, r], track)
