"""What an observer sees of a far target through air and over ground that change along the way.

Where `forecast.physics.sightline` knows every direction at which something happens, here a fan is
cast and refined: where a ray that arrives has a neighbour that does not, the boundary is halved
down, and where the height at the target turns, the turn is. Folds thinner than the fan's step (some
5″) can be missed. Heights that run faster with elevation than `LARGEST_SQUEEZE` allows do not
count, as there.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.lit_intervals import merge_intervals
from forecast.physics.path_air import PathAir, follow
from forecast.physics.rays import locate
from forecast.physics.sightline import GRAZING_MARGIN, LARGEST_SQUEEZE
from forecast.physics.transfer_curve import straight_elevation
from forecast.schema import SIGHTLINE_STATES

__all__ = ["PathTable", "trace_path_sightline"]

_RAYS = 512  # of the fan
_FINER = 8  # steps within one where the height at the target is rough
_SMOOTH, _SMOOTH_SHARE = 1.0, 0.05  # m and share of a step: second differences under these are
_HALVINGS = 24  # of a step: from seconds of arc to under a millionth of it
_MARGIN = 5e-4  # rad beyond the directions that can matter
_INTERVALS = 12
_MOST = 6 * _RAYS
_SHUT = SIGHTLINE_STATES["shut"]
_GRAZING = SIGHTLINE_STATES["grazing"]
_OPEN = SIGHTLINE_STATES["open"]


class PathTable(NamedTuple):
    """Result of `trace_path_sightline`: the fields of `SightlineTable`, arrays (case, 1), and more.

    ``horizon_elevation`` is that of the highest ray that meets water or ground before the target.
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
    land = np.flatnonzero(np.isfinite(air.ground[1:])) + 1
    crests = (air.ground[land] - observer_height) / air.edge[land]
    # From the base in straight rays to the top in rays as curved as the Earth; what air that
    # bends more does is found in the kernel.
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
def _height(
    z, mu, count, radius, edge, segment, ground, block, launch, angle, far, out
):  # pragma: no cover - compiled
    """Height of a ray at the target, NaN if blocked; and where it was."""
    out[0] = np.nan
    blocked = follow(
        z, mu, count, radius, edge, segment, ground, block, launch, angle, far, out
    )  # fmt: skip
    return out[0], blocked


@njit(cache=True, nogil=True, error_model="numpy")
def _critical(z, mu, count, radius, launch):  # pragma: no cover - compiled
    """Largest energies that the air under and over the eye can take from a ray, of any segment."""
    below = 0.0
    above = 0.0
    for s in range(count.size):
        layer, _, start = locate(z[s], mu[s], count[s], radius * np.log1p(launch / radius))
        for i in range(count[s]):
            if i <= layer:
                below = max(below, start - mu[s, i])
            else:
                above = max(above, start - mu[s, i])
    return below, above


@njit(cache=True, nogil=True)
def _rough(coarse, i):  # pragma: no cover - compiled
    """Whether the fan's step before ray i may hide a fold, or ends in a blocked ray."""
    if np.isnan(coarse[i]) != np.isnan(coarse[i - 1]):
        return True
    for k in range(max(i - 1, 1), min(i + 1, coarse.size - 1)):
        one, two = coarse[k] - coarse[k - 1], coarse[k + 1] - coarse[k]
        if abs(two - one) > _SMOOTH + _SMOOTH_SHARE * (abs(one) + abs(two)):
            return True
        if np.isnan(two - one) and not np.isnan(coarse[k]):
            return True
    return False


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _see_all(
    z, mu, count, radius, edge, segment, ground, block, launch, base, top, low, high, margin,
    steepest, state, floats, images, visible,
):  # pragma: no cover - compiled  # fmt: skip
    far = edge[-1:]
    for c in prange(radius.size):
        if count[c].min() < 2:
            continue
        out = np.empty(1)
        angle = np.empty(_MOST)
        height = np.empty(_MOST)
        lit = np.empty((2, _MOST))
        below, above = _critical(z[c], mu[c], count[c], radius[c], launch)
        start = min(low, -1.1 * np.sqrt(below) - _MARGIN)
        step = (max(high, 1.1 * np.sqrt(above) + _MARGIN) - start) / (_RAYS - 1)
        coarse = np.empty(_RAYS)
        for i in range(_RAYS):
            coarse[i], _ = _height(
                z[c], mu[c], count[c], radius[c], edge, segment, ground, block, launch,
                start + i * step, far, out,
            )  # fmt: skip
        size = 0
        before = np.nan
        horizon = np.nan
        stopped = np.nan
        first = np.nan
        last = start
        for i in range(_RAYS):
            parts = 1
            if i > 0 and _rough(coarse, i):
                parts = _FINER
            for part in range(1, parts + 1):
                theta = start + (i - 1 + part / parts) * step
                h, blocked = _height(
                    z[c], mu[c], count[c], radius[c], edge, segment, ground, block, launch, theta,
                    far, out,
                )  # fmt: skip
                if np.isnan(h):
                    horizon = theta
                if i > 0 and np.isnan(h) != np.isnan(before):
                    # The boundary between blocked and arriving: keep both its sides.
                    a, b = last, theta
                    at = stopped if np.isnan(before) else blocked
                    kept = np.nan
                    for _ in range(_HALVINGS):
                        middle = 0.5 * (a + b)
                        hm, bm = _height(
                            z[c], mu[c], count[c], radius[c], edge, segment, ground, block, launch,
                            middle, far, out,
                        )  # fmt: skip
                        if np.isnan(hm) == np.isnan(before):
                            a = middle
                        else:
                            b = middle
                        if np.isnan(hm):
                            at = bm
                        else:
                            kept = hm
                    if not np.isnan(kept) and size < _MOST - 2:
                        if np.isnan(before):
                            # Blocked below, arriving above: a new stretch begins.
                            angle[size], height[size] = a, np.nan
                            angle[size + 1], height[size + 1] = b, kept
                            horizon = a
                            if np.isnan(first) or kept < first:
                                first = kept
                                floats[4, c] = at
                        else:
                            angle[size], height[size] = a, kept
                            angle[size + 1], height[size + 1] = b, np.nan
                        size += 2
                if size < _MOST:
                    angle[size], height[size] = theta, h
                    size += 1
                before = h
                last = theta
                if np.isnan(h):
                    stopped = blocked
        # Where the height turns between rays, the turn itself belongs to what is lit.
        lits = 0
        run_low = np.inf
        run_high = -np.inf
        for i in range(size):
            if np.isnan(height[i]):
                if run_high > run_low and lits < _MOST:
                    lit[0, lits], lit[1, lits] = max(run_low, 0.0), run_high
                    lits += 1
                run_low, run_high = np.inf, -np.inf
                continue
            steep = False
            if i > 0 and not np.isnan(height[i - 1]):
                gap = abs(height[i] - height[i - 1])
                steep = gap > steepest * (angle[i] - angle[i - 1]) and gap > 0.1
            if steep:
                if run_high > run_low and lits < _MOST:
                    lit[0, lits], lit[1, lits] = max(run_low, 0.0), run_high
                    lits += 1
                run_low, run_high = np.inf, -np.inf
            run_low = min(run_low, height[i])
            run_high = max(run_high, height[i])
            if 0 < i < size - 1 and not np.isnan(height[i - 1]) and not np.isnan(height[i + 1]):
                turns = (height[i] - height[i - 1]) * (height[i + 1] - height[i]) < 0.0
                if turns and not steep:
                    turn = _turn(
                        z[c], mu[c], count[c], radius[c], edge, segment, ground, block, launch,
                        angle[i - 1], angle[i + 1], height[i] > height[i - 1], far, out,
                    )  # fmt: skip
                    if not np.isnan(turn):
                        run_low = min(run_low, turn)
                        run_high = max(run_high, turn)
        # The fan's last ray is only the first of those that leave upwards.
        if size > 0 and not np.isnan(height[size - 1]) and lits < _MOST:
            lit[0, lits], lit[1, lits] = max(run_low, 0.0), np.inf
            lits += 1
        lits = merge_intervals(lit, lits)
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
        floats[3, c] = horizon
        if np.isnan(highest):
            state[c] = _SHUT
            continue
        _mark_images(angle, height, size, highest, steepest, c, floats, images)
        if top == base:
            clear = above_edge >= margin
        else:
            clear = extent >= min(margin, 0.999 * (top - base))
        state[c] = _OPEN if clear else _GRAZING


@njit(cache=True, nogil=True, error_model="numpy")
def _mark_images(angle, height, size, wanted, steepest, c, floats, images):  # pragma: no cover
    """Count the directions in which a height appears; the highest is where it is seen."""
    for i in range(size - 1):
        a, b = height[i], height[i + 1]
        if np.isnan(a) or np.isnan(b) or a == b or (a - wanted) * (b - wanted) > 0.0:
            continue
        if b == wanted and i + 2 < size and not np.isnan(height[i + 2]):
            continue  # the next pair begins with it
        step = angle[i + 1] - angle[i]
        if abs(b - a) > steepest * step and abs(b - a) > 0.1:
            continue
        images[0 if b > a else 1, c] += 1
        floats[2, c] = angle[i] + step * (wanted - a) / (b - a)
    if np.isnan(floats[2, c]):
        for i in range(size):
            if not np.isnan(height[i]) and abs(height[i] - wanted) < 0.2:
                floats[2, c] = angle[i]


@njit(cache=True, nogil=True, error_model="numpy")
def _turn(
    z, mu, count, radius, edge, segment, ground, block, launch, a, b, largest, far, out
):  # pragma: no cover - compiled
    """Largest or smallest height between two elevations, by golden sections."""
    share = 0.6180339887498949
    left = b - share * (b - a)
    right = a + share * (b - a)
    fl, _ = _height(z, mu, count, radius, edge, segment, ground, block, launch, left, far, out)
    fr, _ = _height(z, mu, count, radius, edge, segment, ground, block, launch, right, far, out)
    for _ in range(30):
        if np.isnan(fl) or np.isnan(fr):
            return np.nan
        if (fl > fr) == largest:
            b, right, fr = right, left, fl
            left = b - share * (b - a)
            fl, _ = _height(
                z, mu, count, radius, edge, segment, ground, block, launch, left, far, out
            )
        else:
            a, left, fl = left, right, fr
            right = a + share * (b - a)
            fr, _ = _height(
                z, mu, count, radius, edge, segment, ground, block, launch, right, far, out
            )
        if abs(fl - fr) < 1e-3:
            break
    return max(fl, fr) if largest else min(fl, fr)
