"""The shape of the Earth that rays travel over: radii of curvature on WGS-84.

Source of the ellipsoid: NIMA TR8350.2, a = 6378137 m, 1/f = 298.257223563. Euler's formula
``1/R = cos²A / M + sin²A / N`` gives the radius of the normal section at azimuth A.
"""

from __future__ import annotations

from typing import Any

import numpy as np

__all__ = ["MEAN_EARTH_RADIUS", "euler_radius"]

#: Mean Earth radius used by the ITU-R P-series for reference figures, m.
MEAN_EARTH_RADIUS = 6371000.0

_SEMI_MAJOR_AXIS = 6378137.0
_FLATTENING = 1.0 / 298.257223563


def euler_radius(latitude: Any, azimuth: Any = None) -> Any:
    """Radius of curvature of the ellipsoid along an azimuth.

    Parameters
    ----------
    latitude : array_like
        Geodetic latitude, degrees, −90…90.
    azimuth : array_like, optional
        Azimuth of the path, degrees from north; NaN or None gives the Gaussian mean radius
        ``√(M N)``, for a profile that serves every direction.

    Returns
    -------
    ndarray or float
        Radius, m.

    Raises
    ------
    ValueError
        If a latitude lies outside −90…90.
    """
    lat = np.asarray(latitude, dtype=float)
    if np.any(np.abs(lat) > 90.0):
        raise ValueError("euler_radius: latitude outside -90..90 degrees")
    e2 = _FLATTENING * (2.0 - _FLATTENING)
    w2 = 1.0 - e2 * np.sin(np.radians(lat)) ** 2
    prime_vertical = _SEMI_MAJOR_AXIS / np.sqrt(w2)
    meridian = _SEMI_MAJOR_AXIS * (1.0 - e2) / w2**1.5
    mean = np.sqrt(meridian * prime_vertical)
    if azimuth is None:
        return mean
    az = np.radians(np.asarray(azimuth, dtype=float))
    along = 1.0 / (np.cos(az) ** 2 / meridian + np.sin(az) ** 2 / prime_vertical)
    return np.where(np.isfinite(az), along, mean)
