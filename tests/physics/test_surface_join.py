"""The surface layer must meet the profile without a jump and touch nothing above."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.physics.column_batch import analyse_columns
from forecast.physics.ducts import find_ducts
from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.physics.surface_join import SURFACE_HEIGHTS, join_surface_layer, trusted_level
from forecast.physics.surface_layer import SurfaceLayer, solve_sea, surface_profile
from forecast.schema import LEVEL_ORIGINS

N = SURFACE_HEIGHTS.size


def columns(difference, wind=6.0, lowest=10.0):
    """One column of standard air from `lowest` up, over water colder by `difference`."""
    z = np.concatenate([[0.5], np.arange(lowest, 1000.0, 10.0)])[None, :]
    t = 288.15 - 0.0065 * z
    p = 101325.0 * (1.0 - 0.0065 * z / 288.15) ** 5.2559
    q = specific_humidity_from_relative_humidity(0.75, t, p)
    trusted = trusted_level(z)
    k = int(trusted[0])
    layer = solve_sea(wind, t[0, k], q[0, k], p[0, 0], t[0, k] - difference, z[0, k], z[0, k])
    return (z, p, t, q), trusted, layer


@pytest.mark.parametrize("difference", [-5.0, -1.0, 0.0, 1.0, 3.0])
def test_no_jump_where_they_meet_and_nothing_changed_above(difference):
    state, trusted, layer = columns(difference)
    joined = join_surface_layer(*state, trusted, layer)
    k = int(trusted[0])
    for old, new in zip(state, joined[:4], strict=True):
        np.testing.assert_array_equal(new[0, N + k :], old[0, k:])
    # The profile's own value just below the trusted level differs by what the law says, not by
    # a step: extrapolating the modelled levels to the trusted height gives the measured air.
    z, _, t, q = (a[0] for a in joined[:4])
    below = np.flatnonzero(np.isfinite(z[:N]))
    x = np.log(z[below[-3:]])
    at = np.log(state[0][0, k])
    for name, values, measured, tolerance in (
        ("temperature", t, state[2][0, k], 0.05),
        ("humidity", q, state[3][0, k], 5e-5),
    ):
        reached = np.polyval(np.polyfit(x, values[below[-3:]], 2), at)
        assert abs(reached - measured) < tolerance, name


def test_levels_below_the_trusted_one_give_way():
    state, trusted, layer = columns(2.0)
    joined = join_surface_layer(*state, trusted, layer)
    assert trusted[0] == 1
    assert np.isnan(joined.height[0, N])  # the screen at 0.5 m
    heights = joined.height[0][np.isfinite(joined.height[0])]
    assert (np.diff(heights) > 0.0).all()
    assert heights[0] < 0.1


def test_pressure_is_hydrostatic():
    state, trusted, layer = columns(-3.0)
    joined = join_surface_layer(*state, trusted, layer)
    z, p, t, q = (a[0] for a in joined[:4])
    good = np.flatnonzero(np.isfinite(z))[:10]
    density = p[good] / (287.05287 * t[good] * (1 + 0.608 * q[good]))
    fall = -np.diff(p[good])
    expected = 9.80665 * 0.5 * (density[1:] + density[:-1]) * np.diff(z[good])
    np.testing.assert_allclose(fall, expected, rtol=2e-3, atol=1e-2)


def test_no_spurious_layer_above_the_evaporation_duct():
    # Over warmer water M has one minimum, that of the evaporation duct, and rises from there on.
    state, trusted, layer = columns(-3.0)
    joined = join_surface_layer(*state, trusted, layer)
    batch = analyse_columns(*(joined[i] for i in (1, 2, 3, 0)), 6371e3)
    ducts = find_ducts(joined.height, batch.modified_refractivity)
    assert ducts.count[0] == 1
    assert ducts.top[0, 0] < 20.0


def test_columns_that_cannot_be_modelled_stay_as_they_are():
    state, trusted, layer = columns(2.0)
    failed = layer._replace(converged=np.array([False]))
    joined = join_surface_layer(*state, trusted, failed)
    for old, new in zip(state, joined[:4], strict=True):
        assert np.isnan(new[0, :N]).all()
        np.testing.assert_array_equal(new[0, N:], old[0])


def test_trusted_levels_lie_over_the_water_and_in_the_surface_layer():
    z = np.array([[0.0, 2.0, 9.0, 30.0], [0.0, 2.0, 70.0, 90.0], [np.nan, 12.0, 30.0, 60.0]])
    assert trusted_level(z).tolist() == [2, -1, 1]


def drawn_columns(n, seed, lapse=None):
    """Levels from 9…40 m up over drawn water, wind and humidity; the air above has any gradient."""
    rng = np.random.default_rng(seed)
    z = rng.uniform(9.0, 40.0, n)[:, None] + np.concatenate([[0.0], np.arange(6.0, 300.0, 12.0)])
    t0, rh = rng.uniform(276.0, 302.0, n), rng.uniform(0.5, 0.98, n)
    p = rng.uniform(985e2, 1035e2, n)[:, None] * np.exp(-z / 8300.0)
    slope = rng.uniform(-0.05, 0.05, n) if lapse is None else np.full(n, lapse)
    t = t0[:, None] + slope[:, None] * (z - z[:, :1])
    q0 = specific_humidity_from_relative_humidity(rh, t0, p[:, 0])
    q = q0[:, None] * (1.0 - rng.uniform(-2e-4, 8e-4, n)[:, None] * (z - z[:, :1]))
    sst = np.clip(t0 + rng.uniform(-6.0, 6.0, n), 271.0, None)
    return (z, p, t, q), rng.uniform(1.0, 14.0, n), sst


def modified(z, p, t, q):
    return analyse_columns(p, t, q, z, 6371e3).modified_refractivity


def test_the_joint_is_no_extremum_that_neither_side_has():
    # M of the layer itself, on fine heights up to the joint, says which way it runs there.
    state, wind, sst = drawn_columns(400, 21)
    z, p, t, q = state
    trusted = trusted_level(z)
    layer = solve_sea(wind, t[:, 0], q[:, 0], p[:, 0], sst, z[:, 0], z[:, 0])
    joined = join_surface_layer(*state, trusted, layer)
    m = modified(*joined[:4])
    seen = 0
    for c in np.flatnonzero(layer.converged):
        last = np.flatnonzero(np.isfinite(joined.height[c, :N]))[-1]
        below = m[c, N] - m[c, last]
        above = m[c, N + 1] - m[c, N]
        fine = np.linspace(joined.height[c, last], z[c, 0], 25)
        one = SurfaceLayer._make([a[c : c + 1] for a in layer])
        air_t, air_q = surface_profile(one, fine)
        scale = 287.05 * air_t.mean() * (1.0 + 0.608 * air_q.mean())
        air_p = p[c, 0] * np.exp(9.80665 * (z[c, 0] - fine) / scale)
        of_layer = np.diff(modified(fine[None], air_p[None], air_t, air_q)[0])
        if below * above < 0.0:
            seen += 1
            # One side rises and the other falls: so must the layer itself next to the joint, or
            # turn within the last step.
            assert of_layer[-1] * above < 0.0 or (np.sign(of_layer) != np.sign(of_layer[0])).any()
        # Nor a jump: the step below spans no more than the layer does there.
        assert below == pytest.approx(of_layer.sum(), abs=0.02)
    assert 10 < seen < 250


def test_similarity_continued_above_the_joint_gives_the_extrema_of_similarity():
    # Where the profile itself follows the law beyond its lowest level, M turns where the law does
    # (once, at the height of the evaporation duct, but for the most stable air) and nowhere else.
    (z, p, t, q), wind, sst = drawn_columns(300, 22)
    layer = solve_sea(wind, t[:, 0], q[:, 0], p[:, 0], sst, z[:, 0], z[:, 0])
    with np.errstate(invalid="ignore"):
        t, q = surface_profile(layer, z)
    joined = join_surface_layer(z, p, t, q, trusted_level(z), layer)
    m = modified(*joined[:4])
    with np.errstate(invalid="ignore"):
        law_t, law_q = surface_profile(layer, joined.height)
    law = modified(joined.height, joined.air_pressure, law_t, law_q)
    turning = 0
    for c in np.flatnonzero(layer.converged):
        here = np.isfinite(m[c])
        turns, own = (np.diff(np.sign(np.diff(a[c][here]))) for a in (m, law))
        np.testing.assert_array_equal(turns, own)
        turning += np.abs(turns).sum() == 2.0
    assert turning > 150


def test_from_two_metres_the_air_runs_between_the_two_values():
    (z, p, t, q), wind, sst = drawn_columns(300, 23)
    rng = np.random.default_rng(24)
    screen_t = t[:, 0] + rng.uniform(-2.0, 2.0, 300)
    screen_q = q[:, 0] * rng.uniform(0.9, 1.1, 300)
    layer = solve_sea(wind, screen_t, screen_q, p[:, 0], sst, 10.0, 2.0)
    joined = join_surface_layer(z, p, t, q, trusted_level(z, True), layer, 2.0)
    modelled, between = LEVEL_ORIGINS["modelled_surface_layer"], LEVEL_ORIGINS["interpolated"]
    two = int(np.flatnonzero(SURFACE_HEIGHTS == 2.0)[0])
    checked = 0
    for c in np.flatnonzero(layer.converged):
        law = joined.origin[c, : two + 1]
        assert (law[law >= 0] == modelled).all()
        gap = np.flatnonzero(joined.origin[c] == between)
        assert gap[0] == two + 1 and joined.origin[c, N] == LEVEL_ORIGINS["measured"]
        assert joined.air_temperature[c, two] == pytest.approx(screen_t[c], abs=1e-6)
        assert joined.specific_humidity[c, two] == pytest.approx(screen_q[c], abs=1e-9)
        span = np.concatenate([[two], gap, [N]])
        theta = joined.air_temperature[c, span] + 0.0098 * joined.height[c, span]
        for values in (theta, joined.specific_humidity[c, span]):
            steps = np.diff(values)
            assert (steps >= -1e-9).all() or (steps <= 1e-9).all()
        checked += 1
    assert checked > 200
