"""How high levels are and what pressure they have: hybrid levels, hydrostatic integration, gravity.

Arrays have the level as their last axis, the lowest level first; the axes before it are columns,
all treated at once. Half levels (layer interfaces) are one more than full levels, the surface
first.

Sources. Hybrid levels and their hydrostatic integration: Simmons and Burridge 1981, Mon. Wea. Rev.
109, 758–766; ECMWF, IFS Documentation, Part III: Dynamics and Numerical Procedures, section 2.2.1.
Gravity: NIMA TR8350.2 (WGS 84), closed formula of Somigliana and its expansion with height, in the
form of WMO-No. 8, Part I, chapter 12 (conversion of geopotential height).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.physics.moisture import EPSILON

__all__ = [
    "DRY_AIR_GAS_CONSTANT",
    "STANDARD_GRAVITY",
    "below_ground",
    "effective_radius",
    "full_level_pressure",
    "geometric_altitude",
    "geopotential_height",
    "geopotential_on_full_levels",
    "hybrid_pressure",
    "hydrostatic_pressure",
    "hypsometric_height",
    "normal_gravity",
    "surface_height",
    "virtual_temperature",
]

#: Specific gas constant of dry air, J kg-1 K-1; ICAO Doc 7488/3 (1993), also ISO 2533.
DRY_AIR_GAS_CONSTANT = 287.05287

#: Gravity by which geopotential becomes geopotential metres, m s-2; WMO-No. 49, ICAO Doc 7488/3.
STANDARD_GRAVITY = 9.80665

# WGS 84, NIMA TR8350.2 tables 3.1 to 3.4: semi-major axis (m), flattening, first eccentricity
# squared, normal gravity at the equator (m s-2), Somigliana's k, and m = ω²a²b/GM.
_SEMI_MAJOR_AXIS = 6378137.0
_FLATTENING = 1.0 / 298.257223563
_ECCENTRICITY_SQUARED = 6.69437999014e-3
_EQUATORIAL_GRAVITY = 9.7803253359
_SOMIGLIANA_K = 1.931852652410e-3
_CENTRIFUGAL_RATIO = 3.449786506840e-3

#: `alpha` of the topmost layer where its upper interface is at zero pressure, IFS section 2.2.1.
_ALPHA_AT_ZERO_PRESSURE = np.log(2.0)


def hybrid_pressure(a: Any, b: Any, surface_pressure: Any) -> np.ndarray:
    """Pressure of hybrid levels or interfaces, ``p = a + b ps``.

    Parameters
    ----------
    a : array_like (level,)
        Coefficient, Pa; of a file with ``a`` and ``p0`` it is their product.
    b : array_like (level,)
        Coefficient, 1.
    surface_pressure : array_like (...)
        Pressure at the ground, Pa.

    Returns
    -------
    ndarray (..., level)
        Pa.

    References
    ----------
    CF-1.11, appendix D, atmosphere hybrid sigma pressure coordinate.
    """
    ps = np.asarray(surface_pressure, dtype=float)[..., np.newaxis]
    return np.asarray(a, dtype=float) + np.asarray(b, dtype=float) * ps


def full_level_pressure(half_pressure: Any) -> np.ndarray:
    """Pressure of full levels as the mean of their interfaces (IFS Part III, section 2.2.1).

    Parameters
    ----------
    half_pressure : array_like (..., level + 1)
        Pa.

    Returns
    -------
    ndarray (..., level)
        Pa.
    """
    half = np.asarray(half_pressure, dtype=float)
    return 0.5 * (half[..., 1:] + half[..., :-1])


def virtual_temperature(temperature: Any, specific_humidity: Any) -> np.ndarray:
    """Temperature of dry air as dense as the moist air, ``T (1 + (1/ε − 1) q)``, K.

    Parameters
    ----------
    temperature, specific_humidity : array_like
        K and kg/kg; they broadcast.

    Returns
    -------
    ndarray
        K.
    """
    q = np.asarray(specific_humidity, dtype=float)
    return np.asarray(temperature, dtype=float) * (1.0 + (1.0 / EPSILON - 1.0) * q)


def geopotential_on_full_levels(
    temperature: Any, specific_humidity: Any, half_pressure: Any, surface_geopotential: Any = 0.0
) -> np.ndarray:
    """Geopotential of full levels, integrated from the surface as the model itself does.

    Through a layer the virtual temperature is that of its full level:
    ``Φ(k+½) = Φ(k−½) + Rd Tv δ`` and ``Φ(k) = Φ(k−½) + Rd Tv α`` with ``δ = ln(p−/p+)`` and
    ``α = 1 − p+/(p− − p+) δ``; p− and p+ are the pressures of the layer's lower and upper
    interface. A topmost interface at or below zero pressure has α = ln 2.

    Parameters
    ----------
    temperature, specific_humidity : array_like (..., level)
        K and kg/kg. A missing value leaves all levels above it without geopotential.
    half_pressure : array_like (..., level + 1)
        Pa, falling.
    surface_geopotential : array_like (...)
        m2 s-2.

    Returns
    -------
    ndarray (..., level)
        m2 s-2.

    References
    ----------
    Simmons and Burridge 1981; IFS Documentation, Part III, section 2.2.1.
    """
    tv = virtual_temperature(temperature, specific_humidity)
    half = np.asarray(half_pressure, dtype=float)
    lower, upper = half[..., :-1], half[..., 1:]
    with np.errstate(divide="ignore", invalid="ignore"):
        delta = np.log(lower / upper)
        alpha = 1.0 - upper / (lower - upper) * delta
    alpha = np.where(upper <= 0.0, _ALPHA_AT_ZERO_PRESSURE, alpha)
    step = DRY_AIR_GAS_CONSTANT * tv * delta
    below = np.zeros(step.shape)
    below[..., 1:] = np.cumsum(step[..., :-1], axis=-1)
    ground = np.asarray(surface_geopotential, dtype=float)[..., np.newaxis]
    return ground + below + DRY_AIR_GAS_CONSTANT * tv * alpha


def hypsometric_height(
    pressure: Any, temperature: Any, specific_humidity: Any, base_height: Any = 0.0
) -> np.ndarray:
    """Geopotential height of levels above the lowest one, by the hypsometric equation.

    Virtual temperature is linear in ln p between levels, for which the layer mean is exact.
    Levels with a missing value are bridged and have no height.

    Parameters
    ----------
    pressure, temperature, specific_humidity : array_like (..., level)
        Pa, K, kg/kg.
    base_height : array_like (...)
        Geopotential height of the lowest level with values, m.

    Returns
    -------
    ndarray (..., level)
        Geopotential metres; NaN where a value is missing.

    References
    ----------
    WMO-No. 8, Part I, chapter 12 (geopotential thickness of a layer).
    """
    p = np.asarray(pressure, dtype=float)
    tv = virtual_temperature(temperature, specific_humidity)
    p, tv = np.broadcast_arrays(p, tv)
    valid = np.isfinite(p) & np.isfinite(tv) & (p > 0.0)
    before = _valid_before(valid)
    with np.errstate(divide="ignore", invalid="ignore"):
        log_p = np.log(p)
        step = 0.5 * (np.take_along_axis(tv, before, -1) + tv)
        step = step * (np.take_along_axis(log_p, before, -1) - log_p)
    rise = np.cumsum(np.where(valid, step, 0.0), axis=-1)
    base = np.asarray(base_height, dtype=float)[..., np.newaxis]
    return np.where(valid, base + DRY_AIR_GAS_CONSTANT / STANDARD_GRAVITY * rise, np.nan)


def hydrostatic_pressure(
    height: Any, virtual_temperature: Any, surface_pressure: Any
) -> np.ndarray:
    """Pressure of levels at known geopotential heights above the ground.

    The inverse of `hypsometric_height`; below the lowest level with values its virtual
    temperature holds down to the ground.

    Parameters
    ----------
    height : array_like (..., level)
        Geopotential height above the ground, m, rising.
    virtual_temperature : array_like (..., level)
        K.
    surface_pressure : array_like (...)
        Pa.

    Returns
    -------
    ndarray (..., level)
        Pa; NaN where a value is missing.
    """
    h, tv = np.broadcast_arrays(
        np.asarray(height, dtype=float), np.asarray(virtual_temperature, dtype=float)
    )
    valid = np.isfinite(h) & np.isfinite(tv)
    before = _valid_before(valid)
    lowest = before == np.arange(h.shape[-1])
    h_before = np.where(lowest, 0.0, np.take_along_axis(h, before, -1))
    mean = 0.5 * (np.take_along_axis(tv, before, -1) + tv)
    with np.errstate(divide="ignore", invalid="ignore"):
        step = (h - h_before) / mean
    fall = np.cumsum(np.where(valid, step, 0.0), axis=-1)
    ps = np.asarray(surface_pressure, dtype=float)[..., np.newaxis]
    scale = STANDARD_GRAVITY / DRY_AIR_GAS_CONSTANT
    return np.where(valid, ps * np.exp(-scale * fall), np.nan)


def surface_height(
    pressure: Any, height: Any, virtual_temperature: Any, surface_pressure: Any
) -> np.ndarray:
    """Geopotential height at which the pressure is that of the ground.

    Between levels the height is linear in ln p; below the lowest level with values the air has
    that level's virtual temperature.

    Parameters
    ----------
    pressure, height, virtual_temperature : array_like (..., level)
        Pa (falling), geopotential metres, K.
    surface_pressure : array_like (...)
        Pa.

    Returns
    -------
    ndarray (...)
        Geopotential metres; NaN where no level lies above the ground.
    """
    p, h, tv = np.broadcast_arrays(
        *(np.asarray(x, dtype=float) for x in (pressure, height, virtual_temperature))
    )
    ps = np.asarray(surface_pressure, dtype=float)[..., np.newaxis]
    valid = np.isfinite(p) & np.isfinite(h) & np.isfinite(tv)
    above = valid & (p <= ps)
    upper = above.argmax(axis=-1)[..., np.newaxis]
    lower = np.take_along_axis(_valid_before(valid), upper, -1)
    p1, h1, t1 = (np.take_along_axis(x, upper, -1) for x in (p, h, tv))
    p0, h0 = (np.take_along_axis(x, lower, -1) for x in (p, h))
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.log(ps / p1) / np.log(p0 / p1)
        between = h1 + share * (h0 - h1)
        under = h1 - DRY_AIR_GAS_CONSTANT / STANDARD_GRAVITY * t1 * np.log(ps / p1)
    result = np.where(lower == upper, under, between)
    return np.where(above.any(axis=-1, keepdims=True), result, np.nan)[..., 0]


def below_ground(
    pressure: Any, altitude: Any, surface_pressure: Any, surface_altitude: Any
) -> np.ndarray:
    """Levels that lie below the ground by pressure or by altitude, whichever are known.

    Parameters
    ----------
    pressure, altitude : array_like (..., level)
        Pa, m.
    surface_pressure, surface_altitude : array_like (...)
        Pa, m; NaN where unknown.

    Returns
    -------
    ndarray of bool (..., level)
    """
    ps = np.asarray(surface_pressure, dtype=float)[..., np.newaxis]
    zs = np.asarray(surface_altitude, dtype=float)[..., np.newaxis]
    with np.errstate(invalid="ignore"):
        return (np.asarray(pressure) > ps) | (np.asarray(altitude) < zs)


def normal_gravity(latitude: Any) -> np.ndarray:
    """Gravity on the WGS 84 ellipsoid, Somigliana's formula (NIMA TR8350.2, eq. 4-1), m s-2.

    Parameters
    ----------
    latitude : array_like
        Geodetic latitude, degrees.
    """
    s2 = np.sin(np.radians(np.asarray(latitude, dtype=float))) ** 2
    return (
        _EQUATORIAL_GRAVITY * (1.0 + _SOMIGLIANA_K * s2) / np.sqrt(1.0 - _ECCENTRICITY_SQUARED * s2)
    )


def effective_radius(latitude: Any) -> np.ndarray:
    """Radius (m) of the sphere whose gravity falls with height as that of WGS 84 does.

    ``R = a / (1 + f + m − 2 f sin²φ)`` from the linear term of the expansion of normal gravity
    with height (NIMA TR8350.2, eq. 4-3); WMO-No. 8, Part I, chapter 12, prints it with numbers.

    Parameters
    ----------
    latitude : array_like
        Geodetic latitude, degrees.
    """
    s2 = np.sin(np.radians(np.asarray(latitude, dtype=float))) ** 2
    return _SEMI_MAJOR_AXIS / (1.0 + _FLATTENING + _CENTRIFUGAL_RATIO - 2.0 * _FLATTENING * s2)


def geometric_altitude(geopotential_height: Any, latitude: Any) -> np.ndarray:
    """Altitude above mean sea level of a geopotential height.

    ``z = R H / (γ R / g0 − H)`` with gravity γ and radius R of the latitude. Within 20 km it
    agrees with the integral of WGS 84 gravity to 0.1 m.

    Parameters
    ----------
    geopotential_height : array_like
        Geopotential over standard gravity, m.
    latitude : array_like
        Geodetic latitude, degrees; broadcasts.

    Returns
    -------
    ndarray
        m.

    References
    ----------
    WMO-No. 8, Part I, chapter 12.
    """
    h = np.asarray(geopotential_height, dtype=float)
    radius = effective_radius(latitude)
    return radius * h / (normal_gravity(latitude) / STANDARD_GRAVITY * radius - h)


def geopotential_height(altitude: Any, latitude: Any) -> np.ndarray:
    """Geopotential height (m) of an altitude (m), the inverse of `geometric_altitude`."""
    z = np.asarray(altitude, dtype=float)
    radius = effective_radius(latitude)
    return normal_gravity(latitude) / STANDARD_GRAVITY * radius * z / (radius + z)


def _valid_before(valid: np.ndarray) -> np.ndarray:
    """Index of the nearest valid level below each level, its own where there is none."""
    own = np.broadcast_to(np.arange(valid.shape[-1]), valid.shape)
    last = np.maximum.accumulate(np.where(valid, own, -1), axis=-1)
    before = np.concatenate([np.full((*valid.shape[:-1], 1), -1), last[..., :-1]], axis=-1)
    return np.where(before < 0, own, before)
