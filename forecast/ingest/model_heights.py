"""Heights and pressures of model levels from each other, whichever of them a file gives.

Arrays are ``(..., place, level)`` and ``(..., place)``, the lowest level first; `latitude` is that
of each place, degrees; `ground` its altitude, m, NaN where unknown.
"""

from __future__ import annotations

import numpy as np

from forecast.ingest import vertical
from forecast.ingest.ascents import specific_humidity

__all__ = [
    "above_ground",
    "geopotential_heights",
    "hydrostatic_heights",
    "pressure_from_heights",
    "split_heights",
]

#: Passes of pressure against humidity where each needs the other; each gains two digits.
_PASSES = 6


def geopotential_heights(role: str, values: np.ndarray, latitude: np.ndarray) -> np.ndarray:
    """Geopotential height (m) from altitude, geopotential height or geopotential."""
    if role == "altitude":
        return vertical.geopotential_height(values, latitude[:, np.newaxis])
    return values / vertical.STANDARD_GRAVITY if role == "geopotential" else values


def split_heights(
    role: str, values: np.ndarray, ground: np.ndarray, latitude: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Height above ground and altitude from what is given; without ground both are altitude."""
    base = ground[..., np.newaxis]
    if role == "height":
        return values, values + base
    if role == "altitude":
        altitude = values
    else:
        h = geopotential_heights(role, values, latitude)
        altitude = vertical.geometric_altitude(h, latitude[:, np.newaxis])
    return altitude - np.where(np.isfinite(base), base, 0.0), altitude


def pressure_from_heights(
    above: np.ndarray,
    temperature: np.ndarray,
    humidity: str,
    given: np.ndarray,
    surface_pressure: np.ndarray,
) -> np.ndarray:
    """Pressure of levels of height; humidity other than q and mixing ratio needs it in turn."""
    pressure = vertical.hydrostatic_pressure(above, temperature, surface_pressure)
    for _ in range(_PASSES):
        q = specific_humidity(humidity, given, temperature, pressure)
        tv = vertical.virtual_temperature(temperature, q)
        pressure = vertical.hydrostatic_pressure(above, tv, surface_pressure)
    return pressure


def hydrostatic_heights(
    pressure: np.ndarray,
    half: np.ndarray | None,
    temperature: np.ndarray,
    q: np.ndarray,
    surface_pressure: np.ndarray,
) -> np.ndarray:
    """Geopotential height of levels above the ground, NaN below it.

    Between the ground and the lowest level (or the lowest interface, where layers are missing
    below it) the air has that level's virtual temperature.
    """
    tv = vertical.virtual_temperature(temperature, q)
    scale = vertical.DRY_AIR_GAS_CONSTANT / vertical.STANDARD_GRAVITY
    heights = None
    if half is not None:
        phi = vertical.geopotential_on_full_levels(temperature, q, half)
        gap = scale * tv[..., 0] * np.log(surface_pressure / half[..., 0])
        heights = phi / vertical.STANDARD_GRAVITY + gap[..., np.newaxis]
        if np.isfinite(heights).all():
            return heights
    pressure, tv = np.broadcast_arrays(pressure, tv)
    with np.errstate(invalid="ignore"):
        above = np.isfinite(tv) & (pressure <= surface_pressure[..., np.newaxis])
    first = above.argmax(axis=-1)[..., np.newaxis]
    p1, t1 = (np.take_along_axis(x, first, -1)[..., 0] for x in (pressure, tv))
    base = scale * t1 * np.log(surface_pressure / p1)
    bridged = vertical.hypsometric_height(np.where(above, pressure, np.nan), temperature, q, base)
    # Where a value is missing below, the sum over layers has none; the levels bridge the gap.
    return bridged if heights is None else np.where(np.isfinite(heights), heights, bridged)


def above_ground(h: np.ndarray, ground: np.ndarray, latitude: np.ndarray) -> np.ndarray:
    """Height (m) of a geopotential height above the ground; unknown ground counts as sea level."""
    base = np.where(np.isfinite(ground), ground, 0.0)
    under = vertical.geopotential_height(base, latitude)[..., np.newaxis]
    altitude = vertical.geometric_altitude(under + h, latitude[:, np.newaxis])
    return altitude - base[..., np.newaxis]
