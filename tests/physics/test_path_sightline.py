"""What is seen along a way, against a fan of 400,001 rays, the exact search, and plane geometry."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.physics.path_air import build_path_air, path_heights, trace_path
from forecast.physics.path_sightline import trace_path_sightline
from forecast.physics.rays import build_medium
from forecast.physics.sightline import LARGEST_SQUEEZE, trace_sightlines
from forecast.physics.transfer_curve import ARC_SECOND, straight_elevation
from forecast.schema import SIGHTLINE_STATES
from tests.strategies import EARTH_RADIUS, random_refractivity_column

RNG_SEED = 11
RIDGE = np.array([[0.0, 0.0], [24e3, 0.0], [25e3, 60.0], [26e3, 0.0], [60e3, 0.0]])


def columns(count, seed=RNG_SEED):
    """Columns with one to three ducts, some at the ground, some nested: height and N."""
    rng = np.random.default_rng(seed)
    drawn = [random_refractivity_column(rng) for _ in range(count)]
    z, n = np.full((2, count, max(len(one[0]) for one in drawn)), np.nan)
    for i, (height, refractivity) in enumerate(drawn):
        z[i, : height.size], n[i, : height.size] = height, refractivity
    return z, n


def changing(count):
    """Air that changes from one such column to another, (case, station, level)."""
    (z, n), (z2, n2) = columns(count), columns(count, RNG_SEED + 1)
    width = max(z.shape[1], z2.shape[1])
    z, n, z2, n2 = (
        np.pad(a, ((0, 0), (0, width - a.shape[1])), constant_values=np.nan) for a in (z, n, z2, n2)
    )
    return np.stack([z, z2], axis=1), np.stack([n, n2], axis=1)


def lit_by_a_fan(angle, height, steepest):
    """Intervals of height between neighbours of a uniform fan that run less fast than steepest."""
    low, high = np.sort(np.stack([height[1:], height[:-1]]), axis=0)
    slow = high - low <= steepest * (angle[1] - angle[0])  # False where one is blocked
    if not slow.any():
        return np.empty((0, 2))
    order = np.argsort(low[slow])
    low, reached = low[slow][order], np.maximum.accumulate(high[slow][order])
    gap = np.flatnonzero(low[1:] > reached[:-1] + 1e-5)
    return np.stack([low[np.r_[0, gap + 1]], reached[np.r_[gap, -1]]], axis=1)


def seen_of(intervals, top):
    """Lowest visible height under the top, NaN if none, and how much of the target is seen."""
    inside = np.clip(intervals[intervals[:, 0] < top], 0.0, top)
    return (inside[0, 0] if inside.size else np.nan), float(np.sum(inside[:, 1] - inside[:, 0]))


@pytest.mark.parametrize("ground", [None, RIDGE])
def test_a_fan_of_400_001_rays_lights_no_more_and_no_less(ground):
    """0.1 m at both ends, for changing air with ducts, over open sea and behind a ridge."""
    observer, top, distance = 12.0, 60.0, 60e3
    z, n = changing(9)
    air = build_path_air(z, n, [0.0, distance], EARTH_RADIUS, distance, ground=ground)
    found = trace_path_sightline(air, observer, top)
    angle = np.linspace(-18e-3, 18e-3, 400_001)
    compared = 0
    for case in range(z.shape[0]):
        one = type(air)(*(part[case : case + 1] for part in air[:4]), *air[4:])
        height = trace_path(one, observer, angle)[0][0]
        # Where what counts as too squeezed hangs on a quarter more or less, no answer is firm.
        firm = [
            seen_of(lit_by_a_fan(angle, height, share * LARGEST_SQUEEZE * distance), top)
            for share in (0.8, 1.25)
        ]
        if not np.allclose(*firm, atol=0.05, equal_nan=True):
            continue
        compared += 1
        hidden = float(found.hidden_height[case, 0])
        hidden = hidden if hidden < top else np.nan
        np.testing.assert_allclose(hidden, firm[0][0], rtol=0.0, atol=0.1)
        assert found.visible_extent[case, 0] == pytest.approx(firm[0][1], abs=0.1)
    assert compared > 5


def test_in_one_column_every_field_is_that_of_the_exact_search():
    """0.1 m and 0.2″, where neither answer hangs on what counts as too squeezed."""
    z, n = columns(300)
    medium = build_medium(z, n, EARTH_RADIUS)
    for observer, top, distance in ((2.0, 30.0, 20e3), (12.0, 60.0, 60e3), (60.0, 300.0, 105e3)):
        air = build_path_air(z[:, None], n[:, None], [0.0], EARTH_RADIUS, distance)
        squeezes = np.array([1.0, 0.5, 2.0]) * LARGEST_SQUEEZE
        exact = [
            trace_sightlines(medium, observer, top, distance, largest_squeeze=squeeze)
            for squeeze in squeezes
        ]
        found = [
            trace_path_sightline(air, observer, top, largest_squeeze=squeeze)
            for squeeze in squeezes
        ]

        def alike(one, other, name, near, top=top):
            # Neither search refines what lies over the top.
            a, b = (np.minimum(getattr(table, name), top) for table in (one, other))
            return np.isclose(a, b, rtol=0.0, atol=near, equal_nan=True)

        firm = np.ones(exact[0].state.shape, dtype=bool)
        for tables in (exact, found):
            for other in tables[1:]:
                for name in ("hidden_height", "visible_extent"):
                    firm &= alike(tables[0], other, name, 0.05)
        assert firm.mean() > 0.6
        for name, near in (
            ("hidden_height", 0.1),
            ("visible_extent", 0.1),
            ("apparent_elevation", 0.2 * ARC_SECOND),
        ):
            # The exact search judges steepness by chords between its own few rays, which leaves
            # out or lets in a slice here and there; and where a fold ends below the top it stops
            # at 1e-4 m of height, which on a flat turn leaves up to 0.5″ of elevation.
            assert alike(found[0], exact[0], name, near)[firm].mean() > 0.95, (name, distance)
        assert np.mean(found[0].state == exact[0].state) > 0.98
        # The horizon is no matter of squeezing.
        np.testing.assert_allclose(
            found[0].horizon_elevation, exact[0].horizon_elevation, atol=0.2 * ARC_SECOND
        )


def straight(distance, ground):
    z = np.concatenate([np.arange(0.0, 500.0, 5.0), np.geomspace(500.0, 9e3, 200)])[None, None]
    return build_path_air(z, 0.0 * z, [0.0], EARTH_RADIUS, distance, ground=ground)


def test_a_ray_ends_where_its_straight_line_meets_the_slope():
    """Between two points of the ground, not at one of them: chords of plane trigonometry."""
    ground = np.array([[0.0, 0.0], [10e3, 0.0], [20e3, 400.0], [40e3, 0.0]])
    angle = np.array([-1e-3, 2e-3, 5e-3])
    _, blocked = trace_path(straight(40e3, ground), 30.0, angle)
    for theta, at in zip(angle, blocked[0], strict=True):
        # Height of a straight line over the sphere; the slope's own height is linear in distance.
        fall = np.cos(theta) / np.cos(theta + at / EARTH_RADIUS)
        height = (EARTH_RADIUS + 30.0) * fall - EARTH_RADIUS
        assert height == pytest.approx(np.interp(at, *ground.T), abs=0.02)
        assert 10e3 < at < 20e3
    # One that clears the crest is met by no slope behind it.
    assert np.isnan(trace_path(straight(40e3, ground), 30.0, np.array([2e-2]))[1][0, 0])


def test_points_added_on_the_same_line_change_nothing():
    z, n = columns(6)
    angle = np.linspace(-3e-3, 3e-3, 101)
    dense = np.unique(np.concatenate([RIDGE[:, 0], np.linspace(0.0, 60e3, 700)]))
    dense = np.stack([dense, np.interp(dense, *RIDGE.T)], axis=-1)
    one, other = (
        trace_path(
            build_path_air(z[:, None], n[:, None], [0.0], EARTH_RADIUS, 60e3, ground=ground),
            12.0, angle,
        )
        for ground in (RIDGE, dense)
    )  # fmt: skip
    np.testing.assert_array_equal(np.isnan(one[0]), np.isnan(other[0]))
    np.testing.assert_allclose(one[0], other[0], atol=1e-3)
    np.testing.assert_allclose(one[1], other[1], atol=1.0)


def test_a_low_ray_held_against_the_ground_goes_where_it_goes_without():
    """Ground a hair above the water makes the rays go layer by layer; the way stays the same."""
    z, n = columns(12)
    angle = np.linspace(-2e-3, 2e-3, 201)
    low = np.array([[0.0, 1e-6], [30e3, 1e-6], [30e3, 2e-6], [60e3, 1e-6]])
    one, other = (
        trace_path(
            build_path_air(z[:, None], n[:, None], [0.0], EARTH_RADIUS, 60e3, ground=ground),
            12.0, angle,
        )[0]
        for ground in (None, low)
    )  # fmt: skip
    np.testing.assert_allclose(one, other, atol=1e-3)


def test_a_cliff_hides_what_lies_behind_its_edge():
    ground = [[0.0, 0.0], [10e3, 0.0], [10e3, 120.0], [10.5e3, 120.0], [10.5e3, 0.0], [40e3, 0.0]]
    found = trace_path_sightline(straight(40e3, ground), 30.0, 600.0)
    hidden = float(found.hidden_height[0, 0])
    edge = float(straight_elevation(30.0, 120.0, 10e3, EARTH_RADIUS))
    assert straight_elevation(30.0, hidden, 40e3, EARTH_RADIUS) == pytest.approx(edge, abs=2e-7)
    assert found.blocked_by[0] == pytest.approx(10e3, abs=1.0)


def test_the_slope_up_to_the_target_is_its_own():
    """The foot of a hill whose top is looked at is seen, not named as what hides it."""
    flank = [[0.0, 0.0], [39.2e3, 0.0], [40e3, 250.0]]
    free, own = (
        trace_path_sightline(straight(40e3, ground), 30.0, 300.0) for ground in (None, flank)
    )
    np.testing.assert_allclose(own.hidden_height, free.hidden_height, atol=1e-3)
    assert np.isnan(own.blocked_by[0])
    # A ridge in front of that slope does hide it.
    ridge = [[0.0, 0.0], [38.9e3, 0.0], [39e3, 220.0], [39.2e3, 0.0], [40e3, 250.0]]
    hidden = trace_path_sightline(straight(40e3, ridge), 30.0, 300.0)
    assert hidden.hidden_height[0, 0] > 220.0
    assert hidden.blocked_by[0] == pytest.approx(39e3, abs=1.0)


def test_behind_a_near_target_the_sea_goes_on_to_its_horizon():
    found = trace_path_sightline(straight(5e3, None), 30.0, 40.0)
    # Dip of the sea horizon in straight rays: cos d = a / (a + h), plane geometry.
    dip = np.arccos(EARTH_RADIUS / (EARTH_RADIUS + 30.0))
    assert found.horizon_elevation[0, 0] == pytest.approx(-dip, abs=0.2 * ARC_SECOND)
    assert found.hidden_height[0, 0] == pytest.approx(0.0, abs=1e-3)
    assert found.state[0, 0] == SIGHTLINE_STATES["open"]


def test_heights_along_a_way_end_at_the_ground():
    steps = np.array([0.0, 10e3, 24.5e3, 25e3, 30e3, 60e3])
    height = path_heights(straight(60e3, RIDGE), 12.0, np.array([-2e-4, 4e-3]), steps)
    assert np.isfinite(height[0, 0, :3]).all()
    assert np.isnan(height[0, 0, 3:]).all()  # 12 − 5 + 49 m at 25 km; the ridge has 60
    assert np.isfinite(height[0, 1]).all()
    np.testing.assert_allclose(height[0, :, 0], 12.0)
