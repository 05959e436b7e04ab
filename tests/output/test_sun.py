"""The day strip must put sunrise where an almanac does."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.output.sun import sun_altitude


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


def test_twelve_hours_of_sun_at_the_equinox():
    # Altitude of the centre above −0.833° for 12 h and 2 × 3.3 min on the equator (closed form:
    # 0.833° / 15° per h each side).
    times = np.datetime64("2024-03-20T00:00", "s") + np.arange(0, 86400, 20).astype("m8[s]")
    up = (sun_altitude(times, 0.0, 0.0) > -0.833).sum() * 20 / 3600
    assert up == pytest.approx(12.0 + 2 * 0.833 / 15.0, abs=0.02)
