"""A view agrees with the outlook it comes from, and with plane geometry where there is no air."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime

import numpy as np
import pytest

from forecast.outlook import find_windows, make_outlook
from forecast.outlook.line_air import over_water
from forecast.outlook.sightlines import arrival_change
from forecast.outlook.speaking import speaking_profiles
from forecast.outlook.viewing import likeliest_row, nearest_row, view_sightline, window_views
from forecast.physics.transfer_curve import straight_elevation
from forecast.settings import Site
from tests.outlook.build import START, air, line, profiles, settings

HOUR = np.timedelta64(1, "h")
TOWER = line(
    name="tower", wave="optical", observer_height=12.0, target_height=70.0, distance=35e3,
    silhouette=((-20.0, 0.0), (0.0, 70.0), (20.0, 0.0)),
)  # fmt: skip


@pytest.fixture(scope="module")
def night():
    rows = [{"air": air(inversion=40.0)}]
    rows += [
        {"air": air(inversion=40.0 * k), "hours": 6 * k, "kind": "model", "lead": 6 * k}
        for k in (1, 2, 3)
    ]
    chosen = settings(
        sightlines=(TOWER, line()), members=8, sites=(Site("cape", 51.0, -20.0, timezone="UTC"),)
    )
    data = profiles(rows)
    return speaking_profiles(data, chosen), make_outlook(data, chosen), chosen


def test_a_view_says_what_the_outlook_says(night):
    told, outlook, chosen = night
    for row in range(4):
        view = view_sightline(told, outlook, chosen, 0, row)
        assert view.time == outlook["time"].values[row]
        assert view.visible[0, 0] == outlook["visible_bottom"].values[row, 0, 0]
        assert view.horizon["air"] == outlook["horizon_elevation"].values[row, 0]
        assert view.probability[0] == outlook["sightline_probability"].values[row, 0]
        # The lowest lit height of the curve is the hidden height, to the curve's own step.
        lowest = np.nanmin(view.heights["air"])
        hidden = float(outlook["hidden_height"].values[row, 0])
        assert hidden - 1e-6 <= lowest < hidden + 2.0
        assert view.fan_height.shape == (view.fan_elevation.size, view.fan_distance.size)
        assert np.all(view.fan_height[:, 0] == 12.0)
        assert len(view.words) == 2
        assert "nan" not in " ".join(view.words)


def test_straight_rays_are_those_of_the_triangle(night):
    told, outlook, chosen = night
    view = view_sightline(told, outlook, chosen, 0, 0)
    curve = view.heights["straight"]
    lit = np.isfinite(curve)
    expected = straight_elevation(12.0, curve[lit], 35e3, view.radius)
    np.testing.assert_allclose(view.elevation[lit], expected, atol=2e-8)
    # The dip of the horizon in straight rays: cos d = a / (a + h).
    dip = np.arccos(view.radius / (view.radius + 12.0))
    assert view.horizon["straight"] == pytest.approx(-dip, rel=1e-4)
    assert np.array_equal(view.outline, np.array(TOWER.silhouette))


def test_a_tide_is_the_same_as_standing_lower(night):
    low = replace(TOWER, observer_height=10.0, target_height=68.0, silhouette=())
    tide = replace(TOWER, sea_level_offset=2.0, silhouette=())
    assert over_water(tide) == over_water(low)
    data = profiles([{"air": air(inversion=40.0)}])
    outlook = make_outlook(data, settings(sightlines=(low, replace(tide, name="tide")), members=8))
    hidden = outlook["hidden_height"].values[0]
    assert hidden[0] == hidden[1]


def test_the_row_drawn_is_the_nearest_or_the_likeliest_ahead(night):
    outlook = night[1]
    assert nearest_row(outlook, TOWER, START + 7 * HOUR) == 1
    assert nearest_row(outlook, replace(TOWER, site="elsewhere"), START) == -1
    changed = outlook.copy(deep=True)
    for end in ("", "_lower"):
        changed[f"sightline_probability{end}"][:, 0] = [0.9, 0.2, 0.6, 0.4]
    assert likeliest_row(changed, 0) == 2  # row 0 is the latest ascent: past


def test_windows_have_their_views_best_first(night):
    told, outlook, chosen = night
    changed = outlook.copy(deep=True)
    for end in ("", "_lower", "_upper"):
        changed[f"sightline_probability{end}"][:] = 0.0
        changed[f"duct_probability{end}"][:] = 0.9
        changed[f"sightline_probability{end}"][2, 0] = 0.7
        changed[f"sightline_probability{end}"][3, 1] = 0.8
    views = window_views(told, changed, find_windows(changed, chosen), chosen)
    assert [(number, view.line.name) for number, view in views] == [(1, "link"), (0, "tower")]
    assert views[1][1].time == outlook["time"].values[2]


def test_arrival_is_told_against_the_median_of_the_local_day():
    # 20:00 to 05:00 UTC next day is one local day in a zone 9 h ahead (Asia/Tokyo, no summer time).
    hours = np.array([14, 16, 20, 28, 40])
    time = np.datetime64("2031-05-01T00:00") + hours * HOUR
    elevation = np.array([[1.0], [2.0], [4.0], [np.nan], [9.0]])
    site = np.array(["cape"] * 5)
    local = [
        datetime.fromtimestamp(int(t.astype("datetime64[s]").astype(int)), UTC).hour for t in time
    ]
    assert local == [14, 16, 20, 4, 16]
    change = arrival_change(elevation, time, site, {"cape": "Asia/Tokyo"})[:, 0]
    # Local days: [23:00], [01:00, 05:00, 13:00 unseen], [01:00].
    np.testing.assert_allclose(change, [0.0, -1.0, 1.0, np.nan, 0.0])
