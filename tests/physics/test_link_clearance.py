"""Clearance over the ground against geometry, closed forms and the figures of P.530."""

from __future__ import annotations

import itur
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.physics.link_clearance import (
    fresnel_radius,
    judge_clearance,
    obstruction_loss,
    path_clearance,
    required_fractions,
)
from forecast.physics.link_reference import LIGHT_SPEED, knife_edge_loss, knife_edge_parameter

A = 6371e3
FLAT = np.array([[0.0, 0.0], [40e3, 0.0]])


def _plain(quantity) -> float:
    return float(getattr(quantity, "value", quantity))


def test_fresnel_radius_is_where_the_detour_is_half_a_wave():
    d1, d2, f = 12e3, 28e3, 6e9
    r = fresnel_radius(d1, d2, f, np.array([1, 2, 3]))
    detour = np.hypot(d1, r) + np.hypot(d2, r) - d1 - d2
    assert detour / (LIGHT_SPEED / f) == pytest.approx([0.5, 1.0, 1.5], rel=1e-4)
    # Rec. P.530 in km and GHz, through a library; 17.3 is √300 rounded.
    library = itur.models.itu530.fresnel_ellipse_radius(12.0, 28.0, 6.0)
    assert r[0] == pytest.approx(_plain(library), rel=1e-3)


def test_over_the_sea_the_worst_point_of_equal_antennas_is_the_middle():
    # Bulge in the middle d²/8ka: 23.5 m for 40 km and 4/3, against F1 = √(λ d / 4).
    result = path_clearance(FLAT, 60.0, 60.0, 6e9, np.array([4 / 3, 1.0, np.inf]))
    bulge = 40e3**2 / (8.0 * np.array([4 / 3, 1.0, np.inf]) * A)
    middle = np.sqrt(LIGHT_SPEED / 6e9 * 40e3 / 4.0)
    assert result.clearance == pytest.approx(60.0 - bulge)
    assert result.fraction == pytest.approx((60.0 - bulge) / middle)
    assert result.distance == pytest.approx(20e3)
    assert result.radius == pytest.approx(middle)


@given(
    st.floats(0.3, 8.0),
    st.floats(0.0, 80.0),
    st.floats(0.0, 80.0),
    st.floats(0.0, 1.2),
    st.lists(st.floats(0.0, 120.0), min_size=3, max_size=12),
)
def test_the_worst_point_by_a_finer_search(k, h1, h2, required, heights):
    x = np.linspace(0.0, 30e3, len(heights))
    ground = np.column_stack([x, heights])
    found = path_clearance(ground, h1, h2, 3e9, k, A, required)
    fine = np.linspace(0.0, 30e3, 3001)[1:-1]
    line = np.interp(fine, [0.0, 30e3], [heights[0] + h1, heights[-1] + h2])
    clear = line - np.interp(fine, x, heights) - fine * (30e3 - fine) / (2.0 * k * A)
    zone = fresnel_radius(fine, 30e3 - fine, 3e9)
    # 500 points and the ground's own against 3,000: 10 m of way is not many centimetres of room,
    # except beside the antennas, where the zone closes.
    away = (fine > 600.0) & (fine < 29400.0)
    assert found.fraction <= np.min((clear / zone)[away]) + 0.05
    assert found.margin <= np.min((clear - required * zone)[away]) + 0.1
    # And the point that is told has the room that is told.
    at = found.distance
    there = (
        np.interp(at, [0.0, 30e3], [heights[0] + h1, heights[-1] + h2])
        - np.interp(at, x, heights)
        - at * (30e3 - at) / (2.0 * k * A)
    )
    assert found.clearance == pytest.approx(there, abs=1e-6)
    assert found.fraction * found.radius == pytest.approx(found.clearance, abs=1e-9)


def test_a_mast_of_rock_between_sparse_points_is_found():
    # A cliff: two heights at one distance. Its top is a point of the ground, not of the even grid.
    ground = np.array([[0, 0], [7123.4, 0], [7123.4, 55.0], [7123.5, 55.0], [7123.5, 0], [20e3, 0]])
    result = path_clearance(ground, 50.0, 50.0, 10e9, 4 / 3)
    assert result.distance == pytest.approx(7123.4, abs=0.2)
    assert result.clearance < -5.0
    assert result.fraction < 0.0


def test_lower_k_leaves_less_room_and_negative_k_more_than_flat():
    k = np.array([0.5, 0.8, 1.0, 4 / 3, 5.0, np.inf, -5.0, -1.0])
    result = path_clearance(FLAT, 40.0, 30.0, 6e9, k)
    assert np.all(np.diff(result.clearance) > 0.0)
    assert np.isnan(path_clearance(FLAT, 40.0, 30.0, 6e9, np.nan).fraction)


def test_rule():
    # Rec. ITU-R P.530-18 section 2.2.2.1, from memory.
    assert required_fractions() == (1.0, 0.3)
    assert required_fractions("temperate", "isolated", 80e3) == (1.0, 0.0)
    assert required_fractions("tropical", "isolated", 40e3) == (1.0, 0.6)
    assert required_fractions("tropical", "isolated", 10e3) == (1.0, 0.0)


def test_verdict_names_the_k_that_leaves_less_room():
    # 40 km over the sea at 6 GHz, F1 22.4 m in the middle. Full zone at 4/3: 23.5 + 22.4 = 45.9 m.
    # 0.3 F1 at k = 0.5: 62.8 + 6.7 = 69.5 m. Antennas of 60 m have 14.1 m, and lack 9.5 m.
    verdict = judge_clearance(FLAT, 60.0, 60.0, 6e9, 4 / 3, np.array(0.5))
    assert verdict.at_median.margin == pytest.approx(14.1, abs=0.1)
    assert verdict.at_low.margin == pytest.approx(-9.5, abs=0.1)
    assert verdict.low_governs
    assert verdict.margin == verdict.at_low.margin
    assert verdict.margin_fraction == pytest.approx(-9.5 / 22.36, abs=0.01)
    # Raising both antennas by the margin makes it nought.
    mended = judge_clearance(FLAT, 60.0 - verdict.margin, 60.0 - verdict.margin, 6e9, 4 / 3, 0.5)
    assert mended.margin == pytest.approx(0.0, abs=1e-9)
    # With k no lower than 1 the median governs.
    assert not judge_clearance(FLAT, 60.0, 60.0, 6e9, 4 / 3, 1.2).low_governs


def test_loss_of_an_obstruction_lies_above_a_knife_edge():
    # Rec. P.530 section 2.2.1 eq. 2, through a library; and its own words: between knife edge and
    # smooth Earth.
    height = -0.5 * 17.3 * np.sqrt(100.0 / (6.0 * 20.0))
    library = itur.models.itu530.diffraction_loss(10.0, 10.0, height, 6.0)
    assert obstruction_loss(-0.5) == pytest.approx(_plain(library), abs=1e-9)
    fraction = np.linspace(-3.0, -0.3, 20)
    zone = fresnel_radius(10e3, 10e3, 6e9)
    nu = knife_edge_parameter(-fraction * zone, 10e3, 10e3, 6e9)
    assert np.all(obstruction_loss(fraction) > knife_edge_loss(nu))
    assert obstruction_loss(1.0) == 0.0


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"ground": np.zeros((1, 2))}, "two points"),
        ({"ground": np.array([[0.0, 1.0], [5e3, np.nan]])}, "NaN"),
        ({"ground": np.array([[10.0, 1.0], [5e3, 0.0]])}, "rise from 0"),
        ({"first_height": -1.0}, "antennas"),
        ({"frequency": 0.0}, "frequency"),
        ({"k": 0.0}, "4/3"),
        ({"earth_radius": -1.0}, "radius"),
    ],
)
def test_bad_input_is_named(change, message):
    good = {"ground": FLAT, "first_height": 10.0, "second_height": 10.0, "frequency": 6e9, "k": 1.0}
    with pytest.raises(ValueError, match=message):
        path_clearance(**{**good, **change})


def test_other_bad_input_is_named():
    with pytest.raises(ValueError, match="temperate"):
        required_fractions("polar")
    with pytest.raises(ValueError, match="not both 0"):
        fresnel_radius(0.0, 0.0, 1e9)
    with pytest.raises(ValueError, match="order"):
        fresnel_radius(1.0, 1.0, 1e9, 0)
