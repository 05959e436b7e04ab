"""What is visible at a distance by brute force: 200,001 rays, refined where they lie apart."""

from __future__ import annotations

from typing import NamedTuple

import numba
import numpy as np

from forecast.physics.rays import Medium, trace_rays

__all__ = ["Fan", "cast_fan"]

_RAYS = 200_001
_WIDEST = 35e-3  # rad, either side of level
_GAP = 0.05  # m, between neighbouring rays that count as continuous


class Fan(NamedTuple):
    """Lowest visible height (m, NaN: none) and the visible intervals (m), sorted, under the top."""

    lowest: float
    intervals: np.ndarray

    def extent(self, base: float, top: float) -> float:
        """Length (m) of the visible part of base…top."""
        low, high = np.clip(self.intervals, base, top).T
        return float(np.sum(high - low))


def cast_fan(medium: Medium, observer: float, distance: float, top: float) -> Fan:
    """Cast the fan and refine it where the answer under `top` is undecided.

    Neighbouring rays that arrive within 5 cm of each other light up what lies between them.
    Where they do not, or one is blocked, the pair is halved until they do, or until the angle
    cannot be halved further: then the ray's end jumps there. The surroundings of the lowest
    ends are searched again with rays 10,000 times as dense, twice.
    """

    threads = numba.get_num_threads()

    def ends(theta: np.ndarray) -> np.ndarray:
        # Starting threads costs more than a few rays do, above all on a busy machine.
        numba.set_num_threads(threads if theta.size >= _RAYS else 1)
        rays = trace_rays(medium, observer, theta[None, :], distance, reflect=False)
        return np.where(np.isfinite(rays.blocked_at[0]), np.nan, rays.height[0])

    theta = np.linspace(-_WIDEST, _WIDEST, _RAYS)
    height = ends(theta)
    if np.all(np.isnan(height)):
        numba.set_num_threads(threads)
        return Fan(np.nan, np.empty((0, 2)))
    top = max(top, np.nanmin(height))
    pieces = [_lit(theta, height, ends, top)]

    step = theta[1] - theta[0]
    filled = np.where(np.isnan(height), np.inf, height)
    lower = (filled <= np.r_[np.inf, filled[:-1]]) & (filled <= np.r_[filled[1:], np.inf])
    dips = np.flatnonzero(lower & np.isfinite(filled))
    for i in dips[np.argsort(filled[dips])][:8]:
        middle, width = theta[i], step
        for _ in range(2):
            near = middle + np.linspace(-width, width, 4001)
            found = ends(near)
            if np.all(np.isnan(found)):
                break
            pieces.append(_lit(near, found, ends, top))
            middle, width = near[np.nanargmin(found)], width / 1000.0

    numba.set_num_threads(threads)
    pieces = np.concatenate(pieces)
    pieces = pieces[np.argsort(pieces[:, 0])]
    reached = np.maximum.accumulate(pieces[:, 1])
    gap = np.flatnonzero(pieces[1:, 0] > reached[:-1] + 1e-6)
    intervals = np.stack([pieces[np.r_[0, gap + 1], 0], reached[np.r_[gap, -1]]], axis=1)
    return Fan(float(intervals[0, 0]), intervals)


def _lit(theta, height, ends, top: float) -> np.ndarray:
    """Intervals (m) lit between neighbouring rays, those that matter under `top`."""
    left, right = theta[:-1], theta[1:]
    h_left, h_right = height[:-1], height[1:]
    pieces = []
    for _ in range(40):
        both = np.isfinite(h_left) & np.isfinite(h_right)
        with np.errstate(invalid="ignore"):
            close = both & (np.abs(h_left - h_right) <= _GAP)
            low = np.fmin(h_left, h_right)
        lit = close & (low <= top)
        pieces.append(np.sort(np.stack([h_left[lit], h_right[lit]], axis=1), axis=1))
        # A pair with one ray blocked goes on too: continuous to the ground, or a jump?
        open_ = ~close & (low <= top)
        left, right, h_left, h_right = left[open_], right[open_], h_left[open_], h_right[open_]
        middle = 0.5 * (left + right)
        inside = (middle > np.minimum(left, right)) & (middle < np.maximum(left, right))
        if not np.all(inside):
            # Down to neighbouring doubles: what is left is a jump, or ends at the ground.
            grounded = ~inside & ~both[open_] & (low[open_] <= _GAP)
            ground = np.fmin(h_left[grounded], h_right[grounded])
            pieces.append(np.stack([np.zeros_like(ground), ground], axis=1))
            left, right, middle = left[inside], right[inside], middle[inside]
            h_left, h_right = h_left[inside], h_right[inside]
        if left.size == 0:
            break
        h_middle = ends(middle)
        left, right = np.r_[left, middle], np.r_[middle, right]
        h_left, h_right = np.r_[h_left, h_middle], np.r_[h_middle, h_right]
    else:
        grounded = (np.isnan(h_left) != np.isnan(h_right)) & (np.fmin(h_left, h_right) <= _GAP)
        ground = np.fmin(h_left[grounded], h_right[grounded])
        pieces.append(np.stack([np.zeros_like(ground), ground], axis=1))
    # Single rays that arrive alone are lit as well, if only as points.
    arrived = height[np.isfinite(height) & (height <= top)]
    pieces.append(np.stack([arrived, arrived], axis=1))
    return np.concatenate(pieces)
