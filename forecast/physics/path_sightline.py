"""What an observer sees of a far target through air and over ground that change along the way.

Where `forecast.physics.sightline` knows every direction at which something happens, here a fan is
cast and refined. Between two rays that turn in the same layers equally often (`path_rays.follow`)
the height at the target is a smooth function of elevation: such a pair is halved until the ray
between passes within `_MISFIT` of their mean. A pair that does not turn alike is halved on, down to
the angle within which, at the most that `LARGEST_SQUEEZE` allows, heights run by no more than
`_SEAM`; heights that run faster do not count, as there. Where a ray that arrives has a neighbour
that does not, the boundary between them is halved down.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.lit_intervals import merge_intervals
from forecast.physics.path_air import PathAir
from forecast.physics.path_rays import follow, meets_surface
from forecast.physics.rays import locate
from forecast.physics.sightline import GRAZING_MARGIN, LARGEST_SQUEEZE
from forecast.physics.transfer_curve import straight_elevation
from forecast.schema import SIGHTLINE_STATES

__all__ = ["PathTable", "trace_path_sightline"]

_RAYS = 256  # of the fan, before it is refined
_MISFIT, _MISFIT_SHARE = 0.02, 0.01  # m and share of a step
_SEAM = 0.05  # m
_FINEST = 1e-9  # rad, where nothing is too squeezed to count
_SHARP = 1e-8  # rad, to which a turn is found
_HALVINGS = 24  # of a boundary between arriving and blocked
_MARGIN = 5e-4  # rad beyond the directions that can matter
_STEEPEST_LOOK = 0.5  # rad, down and up
_HIGH = 2.0, 100.0  # times the target's top and m: heights over both need no refining
_INTERVALS = 12
_MOST = 16384  # rays of one case
_SHUT = SIGHTLINE_STATES["shut"]
_GRAZING = SIGHTLINE_STATES["grazing"]
_OPEN = SIGHTLINE_STATES["open"]


class PathTable(NamedTuple):
    """Result of `trace_path_sightline`: the fields of `SightlineTable`, arrays (case, 1), and more.

    ``horizon_elevation`` is that of the highest ray that meets water or ground on the way, or water
    behind the target if the last segment's air went on.
    ``blocked_by``, ``blocked_by_height``: distance and height, m, of the ground that stops the
    ray just under the lowest visible one; NaN where that is the water or nothing, (case,).
    """

    state: np.ndarray
    hidden_height: np.ndarray
    visible_extent: np.ndarray
    apparent_elevation: np.ndarray
    upright_images: np.ndarray
    inverted_images: np.ndarray
    horizon_elevation: np.ndarray
    visible_bottom: np.ndarray
    visible_top: np.ndarray
    blocked_by: np.ndarray
    blocked_by_height: np.ndarray


def trace_path_sightline(
    air: PathAir,
    observer_height: float,
    target_height: float,
    target_base_height: float = 0.0,
    grazing_margin: float = GRAZING_MARGIN,
    largest_squeeze: float = LARGEST_SQUEEZE,
) -> PathTable:
    """State, visible heights and looks of one sightline through a batch of cases.

    Parameters
    ----------
    air : PathAir
        From `forecast.physics.path_air.build_path_air`; its last edge is the target's distance.
    observer_height, target_height, target_base_height : float
        m above the water.
    grazing_margin, largest_squeeze : float
        As for `forecast.physics.sightline.trace_sightlines`.

    Returns
    -------
    PathTable
        State −1 without air.

    Raises
    ------
    ValueError
        If a height is negative, a base lies above its top, or the observer under the ground.
    """
    if not (observer_height >= 0.0 and 0.0 <= target_base_height <= target_height):
        raise ValueError(
            "trace_path_sightline: heights must be at or above the water, the base not over the top"
        )
    if air.ground[0] > observer_height:
        raise ValueError(
            f"trace_path_sightline: the observer at {observer_height:g} m stands under the ground, "
            f"which is {air.ground[0]:g} m high there"
        )
    cases = air.radius.size
    distance = float(air.edge[-1])
    radius = float(np.nanmean(air.radius))
    land = np.flatnonzero(air.ground[1:] > 0.0) + 1
    crests = (air.ground[land] - observer_height) / air.edge[land]
    # From the base in straight rays to the top in rays as curved as the Earth; the kernel widens
    # this for air that bends more.
    base = float(straight_elevation(observer_height, target_base_height, distance, radius))
    low = min(base, 0.0) - _MARGIN
    high = max([(target_height - observer_height) / distance, 0.0, *crests]) + _MARGIN
    floats = np.full((5, cases), np.nan)
    images = np.zeros((2, cases), dtype=np.int16)
    state = np.full(cases, -1, dtype=np.int8)
    visible = np.full((2, cases, _INTERVALS), np.nan)
    _see_all(
        *air, observer_height, target_base_height, target_height, low, high, grazing_margin,
        largest_squeeze * distance, state, floats, images, visible,
    )  # fmt: skip
    at = floats[4]
    level = np.interp(np.nan_to_num(at), air.edge, np.maximum(air.ground, 0.0))
    ground = np.isfinite(at) & (level > 0.5)
    width = max(1, int(np.isfinite(visible[0]).sum(axis=-1).max(initial=1)))
    return PathTable(
        state=state[:, None],
        hidden_height=floats[0][:, None],
        visible_extent=floats[1][:, None],
        apparent_elevation=floats[2][:, None],
        upright_images=images[0][:, None],
        inverted_images=images[1][:, None],
        horizon_elevation=floats[3][:, None],
        visible_bottom=visible[0, :, None, :width],
        visible_top=visible[1, :, None, :width],
        blocked_by=np.where(ground, at, np.nan),
        blocked_by_height=np.where(ground, level, np.nan),
    )


@njit(cache=True, nogil=True, error_model="numpy")
def _look(air, launch, angle, far, out, track):  # pragma: no cover - compiled
    """Height at the target, NaN if blocked; where it was blocked; and the mark of its turns."""
    out[0] = np.nan
    blocked, mark = follow(air, launch, angle, far, out, track)
    return out[0], blocked, mark


@njit(cache=True, nogil=True, error_model="numpy")
def _meets(air, height, track):  # pragma: no cover - compiled
    """Whether a ray just looked at ever meets water or ground."""
    z, mu, count = air[:3]
    s = count.size - 1
    return np.isnan(height) or meets_surface(z[s], mu[s], count[s], track[0], track[1])


@njit(cache=True, nogil=True, error_model="numpy")
def _critical(z, mu, count, radius, launch):  # pragma: no cover - compiled
    """Largest energies that the air under and over the eye can take from a ray, of any segment."""
    below = 0.0
    above = 0.0
    for s in range(count.size):
        layer, _, start = locate(z[s], mu[s], count[s], radius * np.log1p(launch / radius))
        below = max(below, start - np.min(mu[s, : layer + 1]))
        above = max(above, start - np.min(mu[s, layer + 1 : count[s]]))
    return below, above


@njit(cache=True, nogil=True, error_model="numpy")
def _cast(air, launch, low, high, top, finest, far, rays, marks):  # pragma: no cover - compiled
    """Cast the fan and refine it; returns how many rays there are.

    Fills rows of `rays`: elevation, height at the target, where blocked, whether it ever meets
    water or ground.
    """
    out, track = np.empty(1), np.empty(2)
    # Rays still to be looked at, the next one last: elevation, height, blocked, meets.
    waiting = np.empty((4, 80))
    waiting_marks = np.empty(80, dtype=np.int64)
    size = 0
    high_enough = _HIGH[0] * top + _HIGH[1]
    for k in range(_RAYS):
        angle = waiting[0, 0] = low + (high - low) * k / (_RAYS - 1)
        stack = 1
        waiting[1, 0], waiting[2, 0], waiting_marks[0] = _look(air, launch, angle, far, out, track)
        waiting[3, 0] = _meets(air, waiting[1, 0], track)
        while stack > 0:
            top_of = stack - 1
            b, hb = waiting[0, top_of], waiting[1, top_of]
            if k > 0 and stack < 79 and size < _MOST - 2 * (_RAYS - k) - 80:
                a, ha = rays[0, size - 1], rays[1, size - 1]
                alike = marks[size - 1] == waiting_marks[top_of]
                arrive = not (np.isnan(ha) or np.isnan(hb))
                matters = b - a > finest
                if np.isnan(ha) and np.isnan(hb):
                    matters = matters and not alike
                elif arrive:
                    matters = matters and min(ha, hb) < high_enough
                if matters:
                    middle = 0.5 * (a + b)
                    h, blocked, mark = _look(air, launch, middle, far, out, track)
                    bend = abs(h - 0.5 * (ha + hb))
                    straight = bend < _MISFIT + _MISFIT_SHARE * abs(hb - ha)
                    if not (arrive and alike and straight and mark == marks[size - 1]):
                        waiting[0, stack], waiting[1, stack] = middle, h
                        waiting[2, stack], waiting[3, stack] = blocked, _meets(air, h, track)
                        waiting_marks[stack] = mark
                        stack += 1
                        continue
            rays[:, size] = waiting[:, top_of]
            marks[size] = waiting_marks[top_of]
            size += 1
            stack -= 1
    return size


@njit(cache=True, nogil=True, error_model="numpy")
def _boundary(air, launch, a, b, far):  # pragma: no cover - compiled
    """Halve down between a blocked ray at `a` and one that arrives at `b`.

    Returns the elevation of the last that arrives, its height, and where the other was blocked.
    """
    out, track = np.empty(1), np.empty(2)
    kept, at = np.nan, np.nan
    for _ in range(_HALVINGS):
        middle = 0.5 * (a + b)
        h, blocked, _ = _look(air, launch, middle, far, out, track)
        if np.isnan(h):
            a, at = middle, blocked
        else:
            b, kept = middle, h
    return b, kept, at


@njit(cache=True, nogil=True, error_model="numpy")
def _horizon(air, launch, rays, size, far):  # pragma: no cover - compiled
    """Elevation of the highest ray that ever meets water or ground."""
    last = -1
    for i in range(size):
        if rays[3, i] > 0.0:
            last = i
    if last < 0 or last == size - 1:
        return rays[0, last] if last >= 0 else np.nan
    out, track = np.empty(1), np.empty(2)
    a, b = rays[0, last], rays[0, last + 1]
    for _ in range(_HALVINGS):
        middle = 0.5 * (a + b)
        h, _, _ = _look(air, launch, middle, far, out, track)
        if _meets(air, h, track):
            a = middle
        else:
            b = middle
    return a


@njit(cache=True, nogil=True)
def _is_steep(rays, i, steepest):  # pragma: no cover - compiled
    """Whether the heights of rays i − 1 and i run too fast with elevation to count."""
    gap = abs(rays[1, i] - rays[1, i - 1])
    return gap > steepest * (rays[0, i] - rays[0, i - 1]) and gap > 0.01 * _SEAM


@njit(cache=True, nogil=True, error_model="numpy")
def _with_boundaries(air, launch, raw, size, far, rays):  # pragma: no cover - compiled
    """Copy the fan with the boundaries of what is blocked put in.

    Returns how many rays there are, and what blocks the ray just under the lowest that arrives.
    """
    n = 0
    lowest, stopped = np.inf, np.nan
    for i in range(size):
        arrives = not np.isnan(raw[1, i])
        if i > 0 and arrives == np.isnan(raw[1, i - 1]):
            blocked = i - 1 if arrives else i
            edge, kept, at = _boundary(
                air, launch, raw[0, blocked], raw[0, 2 * i - 1 - blocked], far
            )
            if not np.isnan(kept):
                rays[0, n], rays[1, n] = edge, kept
                n += 1
                if arrives and kept < lowest:
                    lowest = kept
                    stopped = at if not np.isnan(at) else raw[2, blocked]
        rays[0, n], rays[1, n] = raw[0, i], raw[1, i]
        n += 1
    return n, stopped


@njit(cache=True, nogil=True, error_model="numpy")
def _lit_heights(rays, size, steepest, lit):  # pragma: no cover - compiled
    """Intervals of height that rays light up between neighbours; returns how many."""
    lits = 0
    low, high = np.inf, -np.inf
    for i in range(size):
        arrives = not np.isnan(rays[1, i])
        if not arrives or (i > 0 and _is_steep(rays, i, steepest)):
            if high > low:
                lit[0, lits], lit[1, lits] = max(low, 0.0), high
                lits += 1
            low, high = np.inf, -np.inf
        if arrives:
            low, high = min(low, rays[1, i]), max(high, rays[1, i])
    # The fan's last ray is only the first of those that leave upwards.
    if size > 0 and not np.isnan(rays[1, size - 1]):
        lit[0, lits], lit[1, lits] = max(low, 0.0), np.inf
        lits += 1
    return merge_intervals(lit, lits)


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _see_all(
    z, mu, count, radius, edge, segment, ground, block, crest, launch, base, top, low, high, margin,
    steepest, state, floats, images, visible,
):  # pragma: no cover - compiled  # fmt: skip
    far = edge[-1:]
    finest = max(_SEAM / steepest, _FINEST)
    for c in prange(radius.size):
        if count[c].min() < 2:
            continue
        air = (z[c], mu[c], count[c], radius[c], edge, segment, ground, block, crest)
        out, track = np.empty(1), np.empty(2)
        raw = np.empty((4, _MOST))
        marks = np.empty(_MOST, dtype=np.int64)
        rays = np.empty((2, 2 * _MOST))
        lit = np.empty((2, 2 * _MOST))
        below, above = _critical(z[c], mu[c], count[c], radius[c], launch)
        first = min(low, -1.1 * np.sqrt(below) - _MARGIN)
        while first > -_STEEPEST_LOOK and _look(air, launch, first, far, out, track)[0] > base:
            first *= 1.5
        last = max(high, 1.1 * np.sqrt(above) + _MARGIN)
        while last < _STEEPEST_LOOK and not _look(air, launch, last, far, out, track)[0] > top:
            last *= 1.5
        size = _cast(air, launch, first, last, top, finest, far, raw, marks)
        floats[3, c] = _horizon(air, launch, raw, size, far)
        size, floats[4, c] = _with_boundaries(air, launch, raw, size, far, rays)
        lits = _lit_heights(rays, size, steepest, lit)
        extent = 0.0
        highest = np.nan
        above_edge = 0.0
        for i in range(lits):
            lower = max(lit[0, i], base)
            upper = min(lit[1, i], top)
            if upper >= lower:
                extent += upper - lower
                highest = upper
                above_edge = upper - lit[0, i]
        if lits > 0:
            floats[0, c] = lit[0, 0]
        for i in range(min(lits, _INTERVALS)):
            visible[0, c, i], visible[1, c, i] = lit[0, i], lit[1, i]
        floats[1, c] = extent
        if np.isnan(highest):
            state[c] = _SHUT
            continue
        floats[2, c] = _mark_images(air, launch, far, rays, size, highest, steepest, images[:, c])
        shown, whole = (above_edge, margin) if top == base else (extent, 0.999 * (top - base))
        state[c] = _OPEN if shown >= min(margin, whole) else _GRAZING


@njit(cache=True, nogil=True, error_model="numpy")
def _mark_images(air, launch, far, rays, size, wanted, steepest, images):  # pragma: no cover
    """Count the directions in which a height appears; returns the highest, in which it is seen."""
    found, turn = -1, -1
    nearest, seen = np.inf, np.nan
    for i in range(1, size):
        a, b = rays[1, i - 1], rays[1, i]
        if b == wanted and i + 1 < size and a < b and rays[1, i + 1] < b:
            turn = i
        if not np.isnan(b) and abs(b - wanted) <= nearest:
            nearest, seen = abs(b - wanted), rays[0, i]
        if np.isnan(a) or np.isnan(b) or _is_steep(rays, i, steepest):
            continue
        if (a - wanted) * (b - wanted) < 0.0 or (a == wanted and b != wanted):
            images[0 if b > a else 1] += 1
            found = i
    out, track = np.empty(1), np.empty(2)
    if turn > 0:
        # Its own fold ends there: the turn lies between the rays on both sides.
        low, high = rays[0, turn - 1], rays[0, turn + 1]
        while high - low > _SHARP:
            one, two = low + 0.382 * (high - low), low + 0.618 * (high - low)
            h = _look(air, launch, one, far, out, track)[0]
            if h > _look(air, launch, two, far, out, track)[0]:
                high = two
            else:
                low = one
        return 0.5 * (low + high)
    if found < 0:
        return seen
    low, high = rays[0, found - 1], rays[0, found]
    rising = rays[1, found] > rays[1, found - 1]
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        h, _, _ = _look(air, launch, middle, far, out, track)
        if (h < wanted) == rising:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)
