"""What the pictures of one sightline draw: the water's curve, rays by fate, silhouettes.

Nothing here draws. Angles in rad, lengths in m, as in `forecast.outlook.view.SightlineView`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from forecast.physics.sightline import LARGEST_SQUEEZE

if TYPE_CHECKING:
    from forecast.outlook.view import SightlineView

__all__ = [
    "AIR_NAMES",
    "ARC_MINUTE",
    "ENDS",
    "PASSES",
    "REACHES",
    "angle_range",
    "broken_curve",
    "bulge",
    "fan_fates",
    "height_range",
    "hidden_parts",
    "is_known",
    "is_point",
    "is_traced",
    "land_heights",
    "outline_heights",
    "picture_top",
    "profile_top",
    "seen_directions",
    "sightings",
    "silhouette",
    "silhouette_span",
    "target_rays",
    "visible_parts",
]

ARC_MINUTE = np.pi / 10800.0  # rad
#: What the airs of `forecast.outlook.view.AIRS` are called in pictures.
AIR_NAMES = {"air": "this air", "standard": "standard air", "straight": "straight rays (no air)"}
#: Fates of the rays of the fan: met water or ground, passed the target, reached it.
ENDS, PASSES, REACHES = 0, 1, 2

_LEAST_SPAN = 4.0 * ARC_MINUTE  # of the pictures' angles
_MARGIN = 0.1  # of a range, left free on either side
_LOWEST_AIR, _LOWEST_AIR_MOST = 60.0, 300.0  # m; how high the picture of the lowest air reaches
_NEAR = 0.03  # share of the picture's height within which a ray meets a point


def is_point(view: SightlineView) -> bool:
    """Whether the target has no height of its own, such as a lamp."""
    return not view.top > view.base


def is_known(view: SightlineView) -> bool:
    """Whether the geometry can be drawn at all."""
    numbers = (view.line.distance, view.radius, view.observer_height, view.base, view.top)
    return bool(np.all(np.isfinite(numbers))) and min(view.line.distance, view.radius) > 0.0


def is_traced(view: SightlineView, air: str) -> bool:
    """Whether rays could be followed through an air, wherever they ended."""
    reached = np.isfinite(np.asarray(view.heights.get(air, ()), dtype=float))
    return bool(reached.any()) or bool(np.isfinite(view.horizon.get(air, np.nan)))


def land_heights(view: SightlineView, distance: np.ndarray) -> np.ndarray:
    """Height of the land above the water at distances, m; 0 where there is none or none known."""
    land = np.zeros((0, 2)) if view.terrain is None else np.asarray(view.terrain, dtype=float)
    land = land[np.isfinite(land).all(axis=1)]
    if not len(land):
        return np.zeros(distance.shape)
    return np.maximum(np.interp(distance, land[:, 0], land[:, 1], left=0.0, right=0.0), 0.0)


def bulge(view: SightlineView, distance: np.ndarray) -> np.ndarray:
    """How far the water stands above the straight line between its ends.

    Parameters
    ----------
    view : SightlineView
        Geometry.
    distance : ndarray
        Distance from the observer, m.

    Returns
    -------
    ndarray
        m; 0 at the observer and at the target. A height above the water plus this is the height
        above the line, in which straight rays are straight to a part in 1000.
    """
    return distance * (view.line.distance - distance) / (2.0 * view.radius)


def visible_parts(view: SightlineView) -> np.ndarray:
    """Heights of the target that are seen, (part, 2): from, to; one of no height for a point."""
    lit = np.asarray(view.visible, dtype=float).reshape(-1, 2)
    parts = np.stack([np.maximum(lit[:, 0], view.base), np.minimum(lit[:, 1], view.top)], axis=1)
    least = parts[:, 1] >= parts[:, 0] if is_point(view) else parts[:, 1] > parts[:, 0]
    return parts[least]


def hidden_parts(view: SightlineView) -> np.ndarray:
    """Heights of the target that are not seen, (part, 2): from, to; none for a point."""
    edges = np.concatenate([[view.base], visible_parts(view).ravel(), [view.top]]).reshape(-1, 2)
    return edges[edges[:, 1] > edges[:, 0]]


def _ends_of_fan(view: SightlineView) -> np.ndarray:
    """Height of each ray of the fan at the target; NaN if it met something before."""
    rays = np.asarray(view.fan_height, dtype=float)
    if rays.size == 0:
        return np.zeros(0)
    far = np.asarray(view.fan_distance, dtype=float)
    if far[-1] <= view.line.distance:
        return rays[:, -1]
    after = int(np.searchsorted(far, view.line.distance))
    if after == 0:
        return rays[:, 0]
    share = (view.line.distance - far[after - 1]) / (far[after] - far[after - 1])
    return (1.0 - share) * rays[:, after - 1] + share * rays[:, after]


def fan_fates(view: SightlineView) -> np.ndarray:
    """What becomes of each ray of the fan: `ENDS`, `PASSES` or `REACHES`, (fan,)."""
    end = _ends_of_fan(view)
    hit = (end >= view.base) & (end <= view.top)
    return np.where(np.isnan(end), ENDS, np.where(hit, REACHES, PASSES))


def target_rays(view: SightlineView) -> np.ndarray:
    """Rays to the upper ends of the target's visible parts, laid between those of the fan.

    Parameters
    ----------
    view : SightlineView
        Fan and visible heights.

    Returns
    -------
    ndarray
        Heights at `fan_distance`, (ray, step). A fan seldom holds a ray that meets a lamp.
    """
    end, angle = _ends_of_fan(view), np.asarray(view.fan_elevation, dtype=float)
    rays = np.asarray(view.fan_height, dtype=float)
    found = []
    step = np.abs(np.diff(end))
    smooth = step <= LARGEST_SQUEEZE * view.line.distance * np.diff(angle)
    for height in visible_parts(view)[:, 1]:
        between = smooth & ((end[:-1] - height) * (end[1:] - height) <= 0.0) & (step > 0.0)
        for i in np.flatnonzero(between):
            share = (height - end[i]) / (end[i + 1] - end[i])
            found.append((1.0 - share) * rays[i] + share * rays[i + 1])
        if not between.any() and np.isfinite(end).any():
            near = int(np.nanargmin(np.abs(end - height)))
            if abs(end[near] - height) < _NEAR * _scene_top(view):
                found.append(rays[near])
    return np.array(found).reshape(len(found), rays.shape[1] if rays.ndim == 2 else 0)


def broken_curve(view: SightlineView, air: str) -> tuple[np.ndarray, np.ndarray]:
    """The transfer curve with a gap wherever it jumps or is blocked.

    Parameters
    ----------
    view : SightlineView
        Transfer curves.
    air : str
        One of `forecast.outlook.view.AIRS`.

    Returns
    -------
    elevation, height : ndarray
        NaN in every gap, (point,).
    """
    angle = np.asarray(view.elevation, dtype=float)
    height = np.asarray(view.heights.get(air, ()), dtype=float)
    if height.size != angle.size or angle.size == 0:
        return np.zeros(0), np.zeros(0)
    jumps = np.abs(np.diff(height)) > LARGEST_SQUEEZE * view.line.distance * np.diff(angle)
    at = np.flatnonzero(jumps) + 1
    middle = 0.5 * (angle[at - 1] + angle[at])
    return np.insert(angle, at, middle), np.insert(height, at, np.nan)


def _heights_at(view: SightlineView, air: str, angle: np.ndarray) -> np.ndarray:
    """Height to which any direction leads: between rays of one piece of the curve, else nearest."""
    known, height = broken_curve(view, air)
    if known.size == 0:
        return np.full(angle.shape, np.nan)
    if known.size == 1:
        return np.where(angle == known[0], height[0], np.nan)
    after = np.clip(np.searchsorted(known, angle), 1, known.size - 1)
    share = (angle - known[after - 1]) / (known[after] - known[after - 1])
    left, right = height[after - 1], height[after]
    value = (1.0 - share) * left + share * right
    value = np.where(np.isfinite(value), value, np.where(share < 0.5, left, right))
    # Directions beyond those computed lead nowhere known.
    return np.where((angle >= known[0]) & (angle <= known[-1]), value, np.nan)


def outline_heights(view: SightlineView, offset: np.ndarray) -> np.ndarray:
    """Height of the outline at offsets across the line of sight; NaN beside it."""
    points = np.asarray(view.outline, dtype=float).reshape(-1, 2)
    points = points[np.all(np.isfinite(points), axis=1)]
    if points.shape[0] == 0:
        return np.full(offset.shape, np.nan)
    return np.interp(offset, points[:, 0], points[:, 1], left=np.nan, right=np.nan)


def silhouette_span(view: SightlineView) -> tuple[float, float, bool]:
    """Offsets that the silhouettes' boxes show, m, and whether the target's width is nominal."""
    nominal = not view.line.silhouette
    points = np.asarray(view.outline, dtype=float).reshape(-1, 2)[:, 0]
    points = points[np.isfinite(points)]
    left, right = (float(points.min()), float(points.max())) if points.size else (0.0, 0.0)
    width = max(right - left, 1e-3)
    # A block of nominal width is to look like a post, an outline to fill its box.
    margin = (3.0 if nominal else 0.08) * width
    return left - margin, right + margin, nominal


def silhouette(
    view: SightlineView, air: str, angle: np.ndarray, offset: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Where the target covers the view, and where water or ground does.

    Parameters
    ----------
    view : SightlineView
        Transfer curves and outline.
    air : str
        One of `forecast.outlook.view.AIRS`.
    angle : ndarray
        Directions, rad, (row,).
    offset : ndarray
        Offsets across the line of sight at the target's distance, m, (column,).

    Returns
    -------
    covered : ndarray of bool
        (row, column): the direction leads to a height between the base and the outline.
    ends : ndarray of bool
        (row,): the direction meets water or ground before the target.
    """
    height = _heights_at(view, air, angle)
    with np.errstate(invalid="ignore"):
        covered = (height[:, None] <= outline_heights(view, offset)) & (height >= view.base - 1e-9)[
            :, None
        ]
    known = np.asarray(view.elevation, dtype=float)
    horizon = view.horizon.get(air, np.nan)
    if known.size and is_traced(view, air):
        ends = np.isnan(height) & (angle <= known[-1])
    else:
        ends = angle <= horizon
    return covered, ends


def sightings(view: SightlineView, air: str, height: float) -> tuple[np.ndarray, np.ndarray]:
    """Directions in which one height of the target appears.

    Parameters
    ----------
    view : SightlineView
        Transfer curves.
    air : str
        One of `forecast.outlook.view.AIRS`.
    height : float
        Height at the target, m.

    Returns
    -------
    angle : ndarray
        Rising, rad.
    upright : ndarray of bool
        Whether what is higher appears higher there.
    """
    known, reached = broken_curve(view, air)
    off = reached - height
    with np.errstate(invalid="ignore"):
        at = np.flatnonzero((off[:-1] < 0.0) != (off[1:] < 0.0))
        at = at[np.isfinite(off[at]) & np.isfinite(off[at + 1])]
    share = off[at] / (off[at] - off[at + 1])
    return known[at] + share * (known[at + 1] - known[at]), off[at + 1] > off[at]


def seen_directions(view: SightlineView, air: str) -> np.ndarray:
    """Directions in which any of the target appears through one of the airs, rad, (any,)."""
    if is_point(view):
        return sightings(view, air, view.top)[0]
    angle, height = broken_curve(view, air)
    with np.errstate(invalid="ignore"):
        shown = angle[(height >= view.base) & (height <= view.top)]
    return np.concatenate([shown, sightings(view, air, view.top)[0]])


def angle_range(view: SightlineView) -> tuple[float, float]:
    """Directions that hold all that is seen of the target and all horizons, with a margin, rad."""
    found = np.concatenate(
        [
            *(seen_directions(view, air) for air in AIR_NAMES),
            [view.horizon.get(a, np.nan) for a in AIR_NAMES],
        ]
    )
    for air in AIR_NAMES:
        # Where nothing is seen, the line above which one looks past what is in the way.
        open_sky = view.elevation[np.isfinite(view.heights.get(air, np.nan * view.elevation))]
        if open_sky.size and not seen_directions(view, air).size:
            found = np.append(found, open_sky[0])
    found = found[np.isfinite(found)]
    low, high = (float(found.min()), float(found.max())) if found.size else (0.0, 0.0)
    short = max(0.0, _LEAST_SPAN - (high - low))
    low, high = low - 0.4 * short, high + 0.6 * short
    margin = _MARGIN * (high - low)
    return low - margin, high + margin


def height_range(view: SightlineView) -> tuple[float, float]:
    """Heights that hold the target and the lowest lit point of each air, with a margin, m."""
    wanted = [view.base, view.top, 0.0]
    for air in AIR_NAMES:
        height = np.asarray(view.heights.get(air, ()), dtype=float)
        if np.isfinite(height).any():
            wanted.append(float(np.nanmin(height)))
    numbers = np.array(wanted)[np.isfinite(wanted)]
    low, high = float(numbers.min()), float(numbers.max())
    high = max(high, low + 1.0)
    return low, high + 2.0 * _MARGIN * (high - low)


def _scene_top(view: SightlineView) -> float:
    """Height above the line between the ends that holds observer, target, water and land, m."""
    middle = float(bulge(view, np.array(0.5 * view.line.distance)))
    along = np.linspace(0.0, view.line.distance, 241)
    land = float((land_heights(view, along) + bulge(view, along)).max())
    return max(view.observer_height, view.top, 1.15 * middle, land, 5.0)


def picture_top(view: SightlineView) -> float:
    """Height of the ray picture above the line between the ends, m."""
    scene = _scene_top(view)
    top, end, rays = scene, _ends_of_fan(view), target_rays(view)
    if rays.size:
        # Rays held by a duct may climb well over both ends.
        path = rays + bulge(view, np.asarray(view.fan_distance, dtype=float))
        top = max(top, min(float(np.nanmax(path, initial=0.0)), 3.0 * scene))
    elif np.isfinite(end).any():
        # Show by how much the lowest rays miss the target, where that does not dwarf all else.
        top = max(top, min(1.1 * float(np.nanmin(end)), 3.0 * scene))
    return 1.1 * top


def profile_top(view: SightlineView) -> float:
    """How high the picture of the lowest air reaches, m: the observer and the lowest duct."""
    z = np.asarray(view.level_height, dtype=float)
    z = z[np.isfinite(z)]
    ducts = np.asarray(view.ducts, dtype=float).reshape(-1, 2)
    lowest = float(ducts[:, 1].min()) if ducts.size else 0.0
    wanted = [_LOWEST_AIR, 2.0 * view.observer_height, 1.4 * lowest]
    top = max(w for w in wanted if w <= _LOWEST_AIR_MOST)
    return min(top, float(z.max())) if z.size and z.max() > 0.0 else top
