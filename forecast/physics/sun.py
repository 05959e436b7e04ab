"""Where the Sun stands, well enough for daylight, twilight and glare along a sightline.

The Astronomical Almanac, section C, low-precision formulas for the Sun, and section B, sidereal
time (both from memory). Altitude and azimuth are geometric, for the Sun's centre: refraction lifts
it by some 34′ on the horizon.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.schema import TWILIGHT_CLASSES

__all__ = [
    "CIVIL_TWILIGHT",
    "SUNRISE",
    "SunPosition",
    "direction_angle",
    "sun_altitude",
    "sun_position",
    "twilight_class",
]

#: Altitude (degrees) of the Sun's centre at sunrise and sunset: 34′ refraction, 16′ radius.
SUNRISE = -0.833

#: Sun altitude (degrees) at which civil twilight ends.
CIVIL_TWILIGHT = -6.0

# Lower bounds of the classes but the last (Explanatory Supplement to the Astronomical Almanac,
# 1992, sect. 9.3, from memory; common practice).
_BOUNDS = np.array([SUNRISE, CIVIL_TWILIGHT, -12.0, -18.0])
_J2000 = np.datetime64("2000-01-01T12:00:00", "s")


class SunPosition(NamedTuple):
    """Altitude and azimuth of the Sun's centre, degrees; azimuth clockwise from north, 0…360."""

    altitude: np.ndarray
    azimuth: np.ndarray


def sun_position(time: Any, latitude: Any, longitude: Any) -> SunPosition:
    """Geometric altitude and azimuth of the Sun's centre.

    Parameters
    ----------
    time : array_like of datetime64
        UTC.
    latitude, longitude : array_like
        Degrees north and east; broadcast against `time`.

    Returns
    -------
    SunPosition
        Good to 0.02° between 1950 and 2050; NaN where time or place is missing. The azimuth has no
        meaning with the Sun in the zenith or the place at a pole.

    Raises
    ------
    ValueError
        If a latitude lies outside −90…90.
    """
    at = np.asarray(time).astype("datetime64[s]")
    if np.any(np.abs(np.asarray(latitude, dtype=float)) > 90.0):
        raise ValueError("sun_position: latitude outside -90..90 degrees")
    days = np.where(np.isnat(at), np.nan, (at - _J2000).astype(float)) / 86400.0
    mean = np.radians((280.460 + 0.9856474 * days) % 360.0)
    anomaly = np.radians((357.528 + 0.9856003 * days) % 360.0)
    ecliptic = mean + np.radians(1.915 * np.sin(anomaly) + 0.020 * np.sin(2.0 * anomaly))
    tilt = np.radians(23.439 - 4e-7 * days)
    declination = np.arcsin(np.sin(tilt) * np.sin(ecliptic))
    ascension = np.arctan2(np.cos(tilt) * np.sin(ecliptic), np.cos(ecliptic))
    sidereal = np.radians((280.46061837 + 360.98564736629 * days) % 360.0)
    hour_angle = sidereal + np.radians(longitude) - ascension
    phi = np.radians(latitude)
    # Direction to the Sun in the local frame: up, north, east.
    equatorial = np.cos(declination) * np.cos(hour_angle)
    up = np.sin(phi) * np.sin(declination) + np.cos(phi) * equatorial
    north = np.cos(phi) * np.sin(declination) - np.sin(phi) * equatorial
    east = -np.cos(declination) * np.sin(hour_angle)
    return SunPosition(
        np.degrees(np.arcsin(np.clip(up, -1.0, 1.0))),
        np.degrees(np.arctan2(east, north)) % 360.0,
    )


def sun_altitude(time: Any, latitude: Any, longitude: Any) -> np.ndarray:
    """Geometric altitude of the Sun's centre, degrees; parameters of `sun_position`."""
    return sun_position(time, latitude, longitude).altitude


def twilight_class(altitude: Any) -> np.ndarray:
    """Class of daylight from the Sun's geometric altitude.

    Parameters
    ----------
    altitude : array_like
        Degrees.

    Returns
    -------
    ndarray of int8
        Codes of `forecast.schema.TWILIGHT_CLASSES`; −1 where the altitude is not known. A bound
        itself belongs to the brighter class.
    """
    alt = np.asarray(altitude, dtype=float)
    codes = np.array(list(TWILIGHT_CLASSES.values()), dtype=np.int8)
    darker = (alt[..., None] < _BOUNDS).sum(axis=-1)
    return np.where(np.isfinite(alt), codes[darker], np.int8(-1)).astype(np.int8)


def direction_angle(azimuth: Any, altitude: Any, other_azimuth: Any, other_altitude: Any) -> Any:
    """Angle between two directions in the sky, degrees.

    Parameters
    ----------
    azimuth, altitude, other_azimuth, other_altitude : array_like
        Degrees; broadcast against each other.

    Returns
    -------
    ndarray or float
        0…180, precise at both ends (half-angle form); NaN where a part is not known.
    """
    a, b = np.radians(altitude), np.radians(other_altitude)
    turn = np.radians(np.asarray(other_azimuth, dtype=float) - azimuth)
    square = np.sin(0.5 * (a - b)) ** 2 + np.cos(a) * np.cos(b) * np.sin(0.5 * turn) ** 2
    return np.degrees(2.0 * np.arctan2(np.sqrt(square), np.sqrt(np.maximum(1.0 - square, 0.0))))
