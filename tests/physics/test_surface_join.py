"""The surface layer must meet the profile without a jump and touch nothing above."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.physics.column_batch import analyse_columns
from forecast.physics.ducts import find_ducts
from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.physics.surface_join import SURFACE_HEIGHTS, join_surface_layer, trusted_level
from forecast.physics.surface_layer import solve_sea

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
