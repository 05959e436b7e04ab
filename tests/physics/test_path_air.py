"""Rays through air that changes along the way, and over ground, against independent geometry."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from forecast.physics.path_air import above_water, build_path_air, path_heights, trace_path
from forecast.physics.path_sightline import trace_path_sightline
from forecast.physics.rays import build_medium, trace_rays
from forecast.physics.sightline import LARGEST_SQUEEZE, trace_sightlines
from forecast.physics.transfer_curve import straight_elevation
from forecast.schema import SIGHTLINE_STATES

A = 6371e3
Z = np.concatenate([[0.0], np.geomspace(2.0, 3000.0, 60)])


def lids(count, seed=3):
    """N of columns with a lid of random height and strength, (case, level)."""
    rng = np.random.default_rng(seed)
    lid, width = rng.uniform(20.0, 300.0, (count, 1)), rng.uniform(20.0, 60.0, (count, 1))
    fall = rng.uniform(0.0, 25.0, (count, 1))
    return 320.0 - 0.04 * Z - 0.5 * fall * (1.0 + np.tanh((Z - lid) / width))


def one_station(n, distance, **more):
    z = np.broadcast_to(Z, n.shape)
    return build_path_air(z[:, None], n[:, None], [0.0], A, distance, **more)


def straight(distance, **more):
    """No air at all, finely layered: μ(Z) is not linear in an empty sphere."""
    z = np.concatenate([np.arange(0.0, 500.0, 5.0), np.geomspace(500.0, 9e3, 200)])[None, None]
    return build_path_air(z, 0.0 * z, [0.0], A, distance, **more)


def test_the_same_air_all_along_is_that_of_one_column():
    n = lids(8)
    angle = np.linspace(-3e-3, 3e-3, 31)
    ends = trace_rays(build_medium(np.broadcast_to(Z, n.shape), n, A), 12.0, angle, 70e3, False)
    alone = trace_path(one_station(n, 70e3), 12.0, angle)
    z = np.broadcast_to(Z, (8, 4, Z.size))
    four = build_path_air(z, np.repeat(n[:, None], 4, axis=1), [0.0, 1e4, 3e4, 7e4], A, 70e3)
    for height, blocked in (alone, trace_path(four, 12.0, angle)):
        arrived = np.isnan(ends.blocked_at)
        np.testing.assert_allclose(height[arrived], ends.height[arrived], atol=1e-6)
        assert np.all(np.isnan(height[~arrived]))
        np.testing.assert_allclose(blocked[~arrived], ends.blocked_at[~arrived], atol=1e-4)


def test_sightlines_of_one_column_agree_with_the_exact_search():
    n = lids(150)
    medium = build_medium(np.broadcast_to(Z, n.shape), n, A)
    for observer, top, distance in ((4.0, 36.0, 40e3), (12.0, 60.0, 60e3)):
        exact = trace_sightlines(medium, observer, top, distance, largest_squeeze=LARGEST_SQUEEZE)
        found = trace_path_sightline(one_station(n, distance), observer, top)
        assert np.mean(found.state == exact.state) > 0.98
        away = np.abs(found.hidden_height - exact.hidden_height)
        # A fan can miss a fold thinner than its step; all others it finds to the millimetre.
        assert np.mean(away < 0.1) > 0.95
        assert np.nanmedian(away) < 1e-3
        seen = np.isfinite(exact.apparent_elevation) & (away < 0.1)
        tilt = np.abs(found.apparent_elevation - exact.apparent_elevation)[seen]
        assert np.quantile(tilt, 0.9) < 5e-6  # 1″


def test_air_that_changes_bends_as_the_ray_equation_says():
    """Against an ODE in the continuous medium: κ = −(∂n/∂z cos θ − ∂n/∂x sin θ)/n in (x, z)."""
    distance = 60e3

    def refractivity(x, z):
        lid = 60.0 + 80.0 * x / distance
        return 320.0 - 0.04 * z - 8.0 * (1.0 + np.tanh((z - lid) / 50.0))

    stations = np.linspace(0.0, distance, 61)
    z = np.arange(0.0, 1500.0, 2.0)
    n = refractivity(stations[:, None], z)[None]
    air = build_path_air(np.broadcast_to(z, n.shape), n, stations, A, distance, segments=240)

    def rate(x, y):
        height, slope = y
        step = 0.05
        rise = (refractivity(x, height + step) - refractivity(x, height - step)) / (2 * step)
        along = (refractivity(x + step, height) - refractivity(x - step, height)) / (2 * step)
        bend = 1e-6 * (rise - along * slope)
        # Curved Earth: heights over the sphere, small angles.
        return [slope * (1.0 + height / A), bend + (1.0 + 2.0 * height / A) / A]

    for angle in (2e-4, 1e-3, 3e-3):
        found, _ = trace_path(air, 40.0, np.array([angle]))
        ray = solve_ivp(rate, (0.0, distance), [40.0, angle], rtol=1e-9, atol=1e-9)
        assert found[0, 0] == pytest.approx(ray.y[0, -1], abs=0.5)
        same = build_path_air(z[None, None], n[:, :1], [0.0], A, distance)
        unchanged, _ = trace_path(same, 40.0, np.array([angle]))
        assert abs(found[0, 0] - unchanged[0, 0]) > 5.0 or angle > 2e-3


def test_halving_the_segments_moves_rays_little_against_what_the_change_does():
    n = np.stack([lids(6, 1), lids(6, 2), lids(6, 5)], axis=1)
    z = np.broadcast_to(Z, n.shape)
    angle = np.linspace(0.0, 3e-3, 21)
    coarse, fine = (
        trace_path(build_path_air(z, n, [0.0, 4e4, 8e4], A, 8e4, segments=k), 60.0, angle)[0]
        for k in (24, 48)
    )
    alone, _ = trace_path(one_station(n[:, 0], 8e4), 60.0, angle)
    change = np.nanmedian(np.abs(fine - alone))
    assert np.nanmedian(np.abs(coarse - fine)) < 0.02 * change


def test_a_ray_traced_back_arrives_where_it_started():
    n = np.stack([lids(4, 1), lids(4, 2)], axis=1)
    z = np.broadcast_to(Z, n.shape)
    there = build_path_air(z, n, [0.0, 5e4], A, 5e4)
    back = build_path_air(z, n[:, ::-1], [0.0, 5e4], A, 5e4)
    angle = np.array([1e-3, 2e-3])
    steps = np.array([5e4 - 1e-3, 5e4])
    end = path_heights(there, 50.0, angle, steps)
    slope = np.diff(end, axis=-1)[..., 0] / 1e-3
    for case in range(4):
        for ray in range(2):
            one = type(back)(back.z[case : case + 1], back.mu[case : case + 1],
                             back.count[case : case + 1], back.radius[:1], *back[4:])  # fmt: skip
            # dh/dx at the surface against the angle at height h: tan θ = (dh/dx) / (1 + h/a).
            down = -np.arctan(slope[case, ray] / (1.0 + end[case, ray, 1] / A))
            home, _ = trace_path(one, end[case, ray, 1], np.array([down]))
            assert home[0, 0] == pytest.approx(50.0, abs=0.05)


def test_behind_a_ridge_the_hidden_height_is_that_of_the_triangle():
    # In straight rays the line over the crest decides: same elevation from the eye (plane
    # trigonometry of the sphere).
    ground = [[0.0, 0.0], [9.9e3, 0.0], [10e3, 120.0], [10.1e3, 0.0], [40e3, 0.0]]
    air = straight(40e3, ground=ground)
    found = trace_path_sightline(air, 30.0, 600.0)
    crest = straight_elevation(30.0, 120.0, 10e3, A)
    hidden = float(found.hidden_height[0, 0])
    assert straight_elevation(30.0, hidden, 40e3, A) == pytest.approx(float(crest), abs=2e-7)
    assert found.blocked_by[0] == pytest.approx(10e3, abs=1.0)
    assert found.blocked_by_height[0] == pytest.approx(120.0, abs=0.5)
    assert found.state[0, 0] == SIGHTLINE_STATES["open"]


def test_a_ridge_over_everything_shuts_and_is_named():
    ground = [[0.0, 0.0], [20e3, 900.0], [40e3, 0.0]]
    found = trace_path_sightline(straight(40e3, ground=ground), 30.0, 300.0)
    assert found.state[0, 0] == SIGHTLINE_STATES["shut"]
    assert found.blocked_by[0] == pytest.approx(20e3, abs=1e3)
    assert np.isnan(found.apparent_elevation[0, 0])


def test_water_blocks_without_being_called_ground():
    found = trace_path_sightline(straight(40e3), 10.0, 300.0)
    # Hidden by the bulge: (d − horizon)² / 2a to a part in a thousand.
    horizon = np.sqrt(2.0 * A * 10.0)
    assert found.hidden_height[0, 0] == pytest.approx((40e3 - horizon) ** 2 / (2 * A), rel=2e-3)
    assert np.isnan(found.blocked_by[0])


def test_bad_geometry_is_refused():
    n = lids(1)
    with pytest.raises(ValueError, match="reaches from 0 to 30000 m; expected 0 to 40000 m"):
        one_station(n, 40e3, ground=[[0.0, 0.0], [30e3, 10.0]])
    with pytest.raises(ValueError, match="finite"):
        one_station(n, 40e3, ground=[[0.0, 0.0], [2e4, np.nan], [4e4, 0.0]])
    with pytest.raises(ValueError, match="must not fall"):
        one_station(n, 40e3, ground=[[0.0, 0.0], [3e4, 1.0], [2e4, 1.0], [4e4, 0.0]])
    with pytest.raises(ValueError, match="under the ground"):
        trace_path_sightline(one_station(n, 4e4, ground=[[0.0, 50.0], [4e4, 0.0]]), 10.0, 50.0)
    with pytest.raises(ValueError, match="in order"):
        build_path_air(np.zeros((1, 2, 3)), np.zeros((1, 2, 3)), [5.0, 1.0], A, 1e4)
    with pytest.raises(ValueError, match=r"lies 2\.5 m under the water"):
        above_water([4.0, 0.5], 3.0)


def test_a_station_without_air_is_left_to_its_neighbours():
    n = np.repeat(lids(1)[:, None], 3, axis=1)
    hole = n.copy()
    hole[:, 1] = np.nan
    z = np.broadcast_to(Z, n.shape)
    angle = np.array([5e-4, 2e-3])
    whole, left = (
        trace_path(build_path_air(z, values, [0.0, 2e4, 4e4], A, 4e4), 20.0, angle)[0]
        for values in (n, hole)
    )
    np.testing.assert_allclose(left, whole, atol=1e-6)
    none = build_path_air(z, np.full(n.shape, np.nan), [0.0, 2e4, 4e4], A, 4e4)
    assert trace_path_sightline(none, 20.0, 40.0).state[0, 0] == -1
