"""Visible intervals and images of 300 profiles against fans of 200,001 rays each."""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numba
import numpy as np

from forecast.physics.rays import Medium, build_medium, trace_rays
from forecast.physics.refractive_index import optical_refractivity
from forecast.physics.sightline import SightlineTable, trace_sightlines
from tests.strategies import EARTH_RADIUS, random_refractivity_column

_RAYS = 200_001
_WIDEST = 35e-3  # rad, either side of level
_CLOSE = 0.05  # m, between neighbouring rays that count as continuous
_END = 0.1  # m; or this angle, whichever is more at the distance:
_END_ANGLE = 0.2 / 3600.0 / 57.29577951308232  # rad, 0.2″


class Case(NamedTuple):
    """One profile and a sightline through it."""

    kind: str
    medium: Medium
    observer: float
    distance: float
    top: float


# --- Profiles ------------------------------------------------------------------------------------

_FINE = np.r_[
    0.0, np.geomspace(0.05, 3.0, 10), np.arange(4.0, 40.0, 2.0), np.arange(40.0, 130.0, 6.0),
    np.geomspace(130.0, 3000.0, 14),
]  # fmt: skip


def _light(z: np.ndarray, t: np.ndarray) -> Medium:
    """Dry hydrostatic air of temperature t (K) at heights z (m), for green light."""
    step = np.diff(z) * 0.0341632 / (0.5 * (t[1:] + t[:-1]))
    p = 101325.0 * np.exp(-np.r_[0.0, np.cumsum(step)])
    return build_medium(z, optical_refractivity(p, t, 0.0), EARTH_RADIUS, "optical")


def _warm_lid(rng: np.random.Generator) -> Medium:
    """A thin warm layer over cool air: superior mirages."""
    base, depth = rng.uniform(2.0, 80.0), rng.uniform(0.5, 12.0)
    z = np.union1d(_FINE, base + depth * np.linspace(-1.0, 1.0, 9).clip(-base / depth, None))
    t = 283.15 - 0.0065 * z + rng.uniform(0.5, 8.0) * 0.5 * (1.0 + np.tanh((z - base) / depth))
    return _light(z, t)


def _cold_water(rng: np.random.Generator) -> Medium:
    """Air that warms by a logarithm of height off cold water, up to some tens of metres."""
    depth = rng.uniform(3.0, 60.0)
    share = np.log1p(np.minimum(_FINE, depth) / 0.01) / np.log1p(depth / 0.01)
    return _light(_FINE, 281.15 + rng.uniform(2.0, 8.0) * share - 0.0065 * _FINE)


def _hot_ground(rng: np.random.Generator) -> Medium:
    """Superheated ground: inferior mirages."""
    hot = rng.uniform(2.0, 20.0) * np.exp(-np.sqrt(_FINE / rng.uniform(0.1, 2.0)))
    return _light(_FINE, 288.15 + hot - 0.0098 * _FINE)


def _duct(rng: np.random.Generator) -> Medium:
    return build_medium(*random_refractivity_column(rng), EARTH_RADIUS)


_KINDS: dict[str, tuple[Callable[[np.random.Generator], Medium], int]] = {
    "duct": (_duct, 120),
    "warm lid": (_warm_lid, 60),
    "cold water": (_cold_water, 60),
    "hot ground": (_hot_ground, 60),
}


def _cases(rng: np.random.Generator) -> list[Case]:
    out = []
    for kind, (make, count) in _KINDS.items():
        for _ in range(count):
            duct = kind == "duct"
            observer = rng.uniform(1.0, 150.0) if duct else np.exp(rng.uniform(0.0, np.log(60.0)))
            far = rng.uniform(20e3, 120e3) if duct else rng.uniform(3e3, 50e3)
            if kind == "hot ground":
                far = rng.uniform(1e3, 30e3)
            # What is within the fan's width: a near target is not seen up to its top.
            top = min(rng.uniform(20.0, 300.0), observer + 0.9 * _WIDEST * far)
            out.append(Case(kind, make(rng), observer, far, top))
    return out


# --- Comparison ----------------------------------------------------------------------------------


def _union(intervals: np.ndarray) -> np.ndarray:
    """Sorted union of intervals (interval, 2)."""
    out: list[list[float]] = []
    for low, high in sorted(map(tuple, intervals)):
        if out and low <= out[-1][1]:
            out[-1][1] = max(out[-1][1], high)
        else:
            out.append([low, high])
    return np.array(out).reshape(-1, 2)


def _dark(intervals: np.ndarray, top: float) -> np.ndarray:
    """What no interval covers; all below the ground and above the top counts as dark."""
    return np.r_[-np.inf, intervals.ravel().clip(0.0, top), np.inf].reshape(-1, 2)


def _covered(inner: np.ndarray, outer: np.ndarray, margin: float) -> bool:
    """Whether every interval lies in another's, were those wider by the margin at each end."""
    wide = _union(outer + np.array([-margin, margin]))
    return all(np.any((wide[:, 0] <= a) & (b <= wide[:, 1])) for a, b in inner)


def _agree(found: np.ndarray, fan: np.ndarray, top: float, margin: float) -> bool:
    """Whether two unions of intervals have the same ends under the top, within the margin."""
    found, fan = (i[i[:, 0] <= top] for i in (found, fan))
    dark = _dark(found, top), _dark(fan, top)
    return (
        _covered(found.clip(0.0, top), fan.clip(0.0, top), margin)
        and _covered(fan.clip(0.0, top), found.clip(0.0, top), margin)
        and _covered(dark[0], dark[1], margin)
        and _covered(dark[1], dark[0], margin)
    )


def _intervals(table: SightlineTable) -> np.ndarray:
    pairs = np.stack([table.visible_bottom[0, 0], table.visible_top[0, 0]], axis=1)
    return pairs[np.isfinite(pairs[:, 0])]


class Fan(NamedTuple):
    """Heights (m) at which neighbouring rays pass the target's distance, each pair continuous.

    ``low`` by the lower launch elevation, ``high`` by the higher one; ``extremes``: (pair, 2)
    heights that finer rays about the local extremes of the fan light up.
    """

    low: np.ndarray
    high: np.ndarray
    extremes: np.ndarray

    def intervals(self) -> np.ndarray:
        """What the rays light up."""
        pairs = np.concatenate([np.stack([self.low, self.high], axis=1), self.extremes])
        pairs = np.sort(pairs, axis=1).clip(0.0, None)
        if pairs.size == 0:
            return pairs
        pairs = pairs[np.argsort(pairs[:, 0])]
        reached = np.maximum.accumulate(pairs[:, 1])
        gap = np.flatnonzero(pairs[1:, 0] > reached[:-1] + 1e-6)
        return np.stack([pairs[np.r_[0, gap + 1], 0], reached[np.r_[gap, -1]]], axis=1)

    def images(self, height: float) -> tuple[int, int]:
        """In how many directions the height appears: upright and inverted."""
        across = (self.low > height) != (self.high > height)
        upright = int(np.count_nonzero(across & (self.high > self.low)))
        return upright, int(np.count_nonzero(across)) - upright


def _slits(found: np.ndarray, top: float) -> np.ndarray:
    """Middles of the dark slits between intervals that rays 5 cm apart step over."""
    low, high = found[:-1, 1], found[1:, 0]
    thin = (high - low < 2.0 * _CLOSE) & (low < top)
    return 0.5 * (low + high)[thin]


_BLOCKED = -1e-9  # m; just below the lowest ray that arrives


def _cast(case: Case, look: np.ndarray) -> Fan:
    """Cast 200,001 rays, and more where they leave the answer under the top open.

    Where neighbours pass the distance more than 5 cm apart, or only one does, the step is split
    into eight, until they are close, or until double precision ends: then the ray's end jumps
    there. About the heights `look`, in the middle of dark slits thinner than that, close means
    0.1 mm. No formula of the intervals under test is used, only rays.
    """
    threads = numba.get_num_threads()

    def ends(theta: np.ndarray) -> np.ndarray:
        # Starting threads costs more than a few rays do.
        numba.set_num_threads(threads if theta.size >= _RAYS else 1)
        rays = trace_rays(
            case.medium, case.observer, theta.ravel()[None, :], case.distance, reflect=False
        )
        numba.set_num_threads(threads)
        height = np.where(np.isfinite(rays.blocked_at[0]), _BLOCKED, rays.height[0])
        return height.reshape(theta.shape)

    def between(left: np.ndarray, right: np.ndarray, parts: int) -> np.ndarray:
        return left[:, None] + np.linspace(0.0, 1.0, parts + 1) * (right - left)[:, None]

    theta = np.linspace(-_WIDEST, _WIDEST, _RAYS)
    height = ends(theta)
    left, right, low, high = theta[:-1], theta[1:], height[:-1], height[1:]
    pairs = []
    for _ in range(13):
        arrive = (low > _BLOCKED) | (high > _BLOCKED)
        matter = arrive & (np.where(low > _BLOCKED, low, high) <= case.top)
        matter |= arrive & (np.where(high > _BLOCKED, high, low) <= case.top)
        close = np.abs(high - low) <= _CLOSE
        for slit in look:
            close &= ((low < slit) == (high < slit)) | (np.abs(high - low) <= 1e-4)
        pairs.append(np.stack([low, high])[:, matter & close])
        again = matter & ~close
        if not again.any():
            break
        t = between(left[again], right[again], 8)
        h = ends(t)
        left, right, low, high = (a.ravel() for a in (t[:, :-1], t[:, 1:], h[:, :-1], h[:, 1:]))

    rise = np.diff(height)
    turns = 1 + np.flatnonzero((rise[:-1] * rise[1:] < 0.0) & (height[1:-1] <= case.top))
    extremes = [np.empty((0, 2))]
    left, right = theta[turns - 1], theta[turns + 1]
    for _ in range(2 if turns.size else 0):
        t = between(left, right, 200)
        h = ends(t)
        h = np.where(h > _BLOCKED, h, np.nan)
        close = np.abs(np.diff(h, axis=1)) <= _CLOSE
        extremes.append(np.stack([h[:, :-1][close], h[:, 1:][close]], axis=1))
        sign = np.where(rise[turns] > 0.0, 1.0, -1.0)[:, None]
        at = np.argmin(np.where(np.isnan(h), np.inf, sign * h), axis=1).clip(1, 199)
        row = np.arange(turns.size)
        left, right = t[row, at - 1], t[row, at + 1]
    return Fan(*np.concatenate(pairs, axis=1), np.concatenate(extremes))


def test_three_hundred_profiles_show_what_fans_of_rays_show(all_threads):
    """Interval ends to 0.1 m or 0.2″, images of 1,500 heights equal: ducts and both mirages.

    Every case is compared; the counts below make sure that the draw is worth it.
    """
    rng = np.random.default_rng(300)
    cases = _cases(rng)
    several = slits = mirages = 0
    faults = []
    for case in cases:
        margin = max(_END, _END_ANGLE * case.distance)
        height = rng.uniform(0.5, case.top, 5)
        tables = [
            trace_sightlines(case.medium, case.observer, h, case.distance, h)
            for h in (case.top, height)
        ]
        found = _intervals(tables[0])
        look = _slits(found, case.top)
        fan = _cast(case, look)
        agree = _agree(found, fan.intervals(), case.top, margin)
        images = np.stack([tables[1].upright_images[0], tables[1].inverted_images[0]], axis=1)
        equal = [tuple(row) for row in images] == [fan.images(h) for h in height]
        if not (agree and equal):
            faults.append((case.kind, case.observer, case.distance, found, fan.intervals()))
        several += len(found) > 1
        slits += len(look)
        mirages += int(np.count_nonzero(images.sum(axis=1) > 1))
    assert not faults
    assert len(cases) == 300
    assert several > 50
    assert slits > 0
    assert mirages > 80


def test_the_comparison_can_fail():
    # Ends moved by more than the margin, an interval too many, a slit left out.
    one = np.array([[0.0, 10.0], [12.0, 300.0]])
    for other in ([[0.0, 10.2], [12.0, 300.0]], [[0.0, 10.0], [11.8, 300.0]], [[0.0, 300.0]],
                  [[0.0, 10.0], [10.5, 10.6], [12.0, 300.0]], [[0.0, 10.0]]):  # fmt: skip
        assert not _agree(np.array(other), one, 200.0, 0.1)
        assert not _agree(one, np.array(other), 200.0, 0.1)
    assert _agree(one + 0.05, one, 200.0, 0.1)
