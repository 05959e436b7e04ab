"""Radii of curvature against WGS-84 figures and pyproj's geodesics."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.physics.earth import euler_radius
from tests.reference import records


@pytest.mark.parametrize("row", records("wgs84_radii_"), ids=lambda r: r["id"])
def test_radii_of_wgs84(row):
    # Analytic: a = 6378137 m, 1/f = 298.257223563, Euler's formula.
    latitude, expected = row["inputs"]["lat_deg"], row["expected"]
    for azimuth in (0, 45, 90):
        found = euler_radius(latitude, float(azimuth))
        assert found == pytest.approx(expected[f"Euler_az{azimuth}"], abs=1.0)
    assert euler_radius(latitude) == pytest.approx(expected["Gauss_mean"], abs=1.0)


@pytest.mark.parametrize("latitude", [-70.0, 0.0, 35.0, 60.0])
@pytest.mark.parametrize("azimuth", [0.0, 30.0, 90.0])
def test_radius_turns_the_direction_of_a_geodesic(latitude, azimuth):
    """The direction of the vertical turns by s/R over a short geodesic of length s.

    pyproj's geodesic (Karney 2013) and geocentric coordinates; 500 m either way, so the radius
    is that of the middle to second order.
    """
    from pyproj import Geod

    geod = Geod(ellps="WGS84")
    normals = []
    for turn in (0.0, 180.0):
        lon, lat, _ = geod.fwd(0.0, latitude, azimuth + turn, 500.0)
        lat, lon = np.radians(lat), np.radians(lon)
        normals.append([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])
    a, b = np.array(normals)
    # Only the part of the turn in the plane of the path counts: the rest is twist.
    here = np.radians(latitude)
    north = np.array([-np.sin(here), 0.0, np.cos(here)])
    ahead = np.cos(np.radians(azimuth)) * north + np.sin(np.radians(azimuth)) * np.array([0, 1, 0])
    assert 1000.0 / np.dot(a - b, ahead) == pytest.approx(euler_radius(latitude, azimuth), rel=1e-6)


@given(st.floats(-90.0, 90.0), st.floats(-360.0, 360.0))
def test_radius_is_symmetric_and_between_the_extremes(latitude, azimuth):
    radius = euler_radius(latitude, azimuth)
    assert radius == pytest.approx(euler_radius(-latitude, azimuth), rel=1e-12)
    assert radius == pytest.approx(euler_radius(latitude, azimuth + 180.0), rel=1e-12)
    low, high = euler_radius(latitude, 0.0), euler_radius(latitude, 90.0)
    assert low * (1 - 1e-12) <= radius <= high * (1 + 1e-12)


def test_missing_azimuth_gives_the_mean_radius():
    mixed = euler_radius(np.array([50.0, 50.0]), np.array([np.nan, 0.0]))
    assert mixed[0] == euler_radius(50.0)
    assert mixed[1] == euler_radius(50.0, 0.0)


@pytest.mark.parametrize("latitude", [90.1, -91.0, np.array([0.0, 400.0])])
def test_impossible_latitudes_are_refused(latitude):
    with pytest.raises(ValueError, match="latitude"):
        euler_radius(latitude)
