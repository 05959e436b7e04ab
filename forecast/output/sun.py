"""Where the Sun stands, well enough for day, twilight and night on a chart."""

from __future__ import annotations

from typing import Any

import numpy as np

__all__ = ["CIVIL_TWILIGHT", "sun_altitude"]

#: Sun altitude (degrees) at which civil twilight ends.
CIVIL_TWILIGHT = -6.0

_J2000 = np.datetime64("2000-01-01T12:00:00", "s")


def sun_altitude(time: Any, latitude: float, longitude: float) -> np.ndarray:
    """Geometric altitude of the Sun's centre.

    Parameters
    ----------
    time : array_like of datetime64
        UTC.
    latitude, longitude : float
        Degrees north and east.

    Returns
    -------
    ndarray
        Degrees, good to 0.02° between 1950 and 2050; refraction is not included.

    References
    ----------
    The Astronomical Almanac, section C, low-precision formulas for the Sun (from memory); sidereal
    time: same, section B.
    """
    seconds = (np.asarray(time).astype("datetime64[s]") - _J2000).astype(float)
    days = seconds / 86400.0
    mean = np.radians((280.460 + 0.9856474 * days) % 360.0)
    anomaly = np.radians((357.528 + 0.9856003 * days) % 360.0)
    ecliptic = mean + np.radians(1.915 * np.sin(anomaly) + 0.020 * np.sin(2.0 * anomaly))
    tilt = np.radians(23.439 - 4e-7 * days)
    declination = np.arcsin(np.sin(tilt) * np.sin(ecliptic))
    ascension = np.arctan2(np.cos(tilt) * np.sin(ecliptic), np.cos(ecliptic))
    sidereal = np.radians((280.46061837 + 360.98564736629 * days) % 360.0)
    hour_angle = sidereal + np.radians(longitude) - ascension
    phi = np.radians(latitude)
    sine = np.sin(phi) * np.sin(declination) + np.cos(phi) * np.cos(declination) * np.cos(
        hour_angle
    )
    return np.degrees(np.arcsin(np.clip(sine, -1.0, 1.0)))
