"""The Sun must stand where almanacs put it, and the sky be as light as its altitude says."""

from __future__ import annotations

import erfa
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.physics.sun import (
    CIVIL_TWILIGHT,
    SUNRISE,
    direction_angle,
    sun_altitude,
    sun_position,
    twilight_class,
)
from forecast.schema import TWILIGHT_CLASSES

ANGLE = st.floats(0.0, 360.0)
ALTITUDE = st.floats(-90.0, 90.0)


@pytest.mark.parametrize(
    ("time", "latitude", "expected"),
    [
        # Solar noon: 90° − latitude + declination. Solstice declination 23.44°, from memory of
        # any almanac; equation of time −1.8 min on 20 June.
        ("2024-06-20T12:01:50", 50.0, 63.44),
        ("2024-12-21T11:58:00", 50.0, 16.56),
        # Midnight sun: latitude + declination − 90°.
        ("2024-06-20T00:01:40", 80.0, 13.44),
    ],
)
def test_altitude_at_culmination(time, latitude, expected):
    assert sun_altitude(np.datetime64(time), latitude, 0.0) == pytest.approx(expected, abs=0.03)


def test_altitude_at_the_pole_is_the_declination():
    # Meeus, Astronomical Algorithms, 2nd ed., example 25.a (from memory): apparent declination
    # −7.78507° on 1992 October 13, 0 h TD. The minute between TD and UTC is worth 0.0003°.
    at = np.datetime64("1992-10-13T00:00:00")
    assert sun_altitude(at, 90.0, 0.0) == pytest.approx(-7.78507, abs=0.01)


def test_twelve_hours_of_sun_at_the_equinox():
    # Altitude of the centre above −0.833° for 12 h and 2 × 3.3 min on the equator (closed form:
    # 0.833° / 15° per h each side).
    times = np.datetime64("2024-03-20T00:00", "s") + np.arange(0, 86400, 20).astype("m8[s]")
    up = (sun_altitude(times, 0.0, 0.0) > SUNRISE).sum() * 20 / 3600
    assert up == pytest.approx(12.0 + 2 * 0.833 / 15.0, abs=0.02)


def test_agrees_with_the_standards_of_astronomy():
    # Independent: IAU SOFA routines (library ERFA): Earth's ephemeris, aberration, precession and
    # nutation IAU 2006/2000A, Greenwich apparent sidereal time. UT1 = UTC here, under 0.004°.
    rng = np.random.default_rng(5)
    start = np.datetime64("1950-01-01T00:00:00", "s")
    seconds = rng.integers(0, 100 * 365 * 86400, 400)
    time = start + seconds.astype("m8[s]")
    latitude, longitude = rng.uniform(-89.0, 89.0, 400), rng.uniform(-180.0, 180.0, 400)
    day, fraction = 2433282.5, seconds / 86400.0
    terrestrial = fraction + 69.0 / 86400.0
    heliocentric, barycentric = erfa.epv00(day, terrestrial)
    distance = np.linalg.norm(heliocentric["p"], axis=-1)
    speed = barycentric["v"] / 173.144632674  # au per day in units of that of light
    seen = erfa.ab(
        -heliocentric["p"] / distance[:, None],
        speed,
        distance,
        np.sqrt(1.0 - (speed**2).sum(axis=-1)),
    )
    of_date = np.einsum("...ij,...j->...i", erfa.pnm06a(day, terrestrial), seen)
    ascension, declination = erfa.c2s(of_date)
    sidereal = erfa.gst06a(day, fraction, day, terrestrial)
    hour_angle = sidereal + np.radians(longitude) - ascension
    azimuth, altitude = erfa.hd2ae(hour_angle, declination, np.radians(latitude))

    found = sun_position(time, latitude, longitude)

    apart = direction_angle(
        found.azimuth, found.altitude, np.degrees(azimuth), np.degrees(altitude)
    )
    assert np.max(apart) < 0.02


def test_sun_rises_in_the_east_and_culminates_in_the_south():
    # Closed form for the equinox: due east at 6 h, south at noon from the north, north from the
    # south, whatever the latitude. Equation of time −7.5 min on 20 March (from memory).
    noon = np.datetime64("2024-03-20T12:07:30", "s")
    hours = np.array([-6, 0, 6]).astype("m8[h]").astype("m8[s]")
    north, south = (sun_position(noon + hours, lat, 0.0).azimuth for lat in (45.0, -45.0))
    assert north == pytest.approx([90.0, 180.0, 270.0], abs=0.3)
    turned = (south + 180.0) % 360.0 - 180.0  # about north
    assert turned == pytest.approx([90.0, 0.0, -90.0], abs=0.3)


def test_positions_broadcast_over_times_and_places():
    time = np.datetime64("2031-05-01T00:00", "s") + np.arange(3).astype("m8[h]")
    both = sun_position(time[:, None], np.array([10.0, 60.0]), np.array([0.0, 20.0]))
    alone = sun_position(time, 60.0, 20.0)
    assert both.altitude.shape == (3, 2)
    np.testing.assert_allclose(both.altitude[:, 1], alone.altitude, rtol=0, atol=1e-12)
    np.testing.assert_allclose(both.azimuth[:, 1], alone.azimuth, rtol=0, atol=1e-12)


def test_what_is_missing_stays_unknown():
    time = np.array(["2031-05-01T12:00", "NaT", "2031-05-01T12:00"], dtype="datetime64[s]")
    found = sun_position(time, np.array([50.0, 50.0, np.nan]), 0.0)
    assert np.isfinite(found.altitude).tolist() == [True, False, False]
    assert twilight_class(found.altitude).tolist() == [TWILIGHT_CLASSES["day"], -1, -1]


def test_latitude_beyond_the_pole_is_refused():
    with pytest.raises(ValueError, match="sun_position: latitude"):
        sun_position(np.datetime64("2031-05-01T12:00"), 91.0, 0.0)


def test_twilight_classes_end_where_they_are_said_to():
    # −0.833°, −6°, −12°, −18°: common practice.
    for bound, above, below in (
        (SUNRISE, "day", "civil_twilight"),
        (CIVIL_TWILIGHT, "civil_twilight", "nautical_twilight"),
        (-12.0, "nautical_twilight", "astronomical_twilight"),
        (-18.0, "astronomical_twilight", "night"),
    ):
        found = twilight_class([bound + 1e-6, bound, bound - 1e-6])
        names = [TWILIGHT_CLASSES[name] for name in (above, above, below)]
        assert found.tolist() == names


@given(ANGLE, ALTITUDE, ANGLE, ALTITUDE)
def test_angle_between_directions_is_that_of_their_vectors(az, alt, other_az, other_alt):
    def vector(azimuth: float, altitude: float) -> np.ndarray:
        a, h = np.radians(azimuth), np.radians(altitude)
        return np.array([np.cos(h) * np.cos(a), np.cos(h) * np.sin(a), np.sin(h)])

    one, two = vector(az, alt), vector(other_az, other_alt)
    expected = np.degrees(np.arctan2(np.linalg.norm(np.cross(one, two)), one @ two))
    assert direction_angle(az, alt, other_az, other_alt) == pytest.approx(expected, abs=1e-6)
    assert direction_angle(other_az, other_alt, az, alt) == pytest.approx(expected, abs=1e-6)


def test_angle_without_an_azimuth_is_unknown():
    assert np.isnan(direction_angle(np.nan, 0.0, 120.0, 5.0))
