"""Soundings in a file, of whatever sampling geometry, read into columns.

Serves one ascent per file with time as the way up, the CF discrete sampling geometries, plain
two-dimensional files, and launches whose mandatory and significant levels stand in separate
arrays (through `forecast.ingest.level_groups`). The time of a profile is its first known time
(the launch), its position that of its first level with one.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from forecast.errors import InputError
from forecast.ingest.profile_values import per_profile
from forecast.ingest.recognise import read_role
from forecast.ingest.recognition import Recognition
from forecast.ingest.roles import HUMIDITY_ROLES
from forecast.ingest.sampling_geometries import (
    Geometry,
    find_geometry,
    is_ragged,
)
from forecast.ingest.soundings import Sounding
from forecast.ingest.source import MAX_LEVELS, Source
from forecast.ingest.vertical import geometric_altitude
from forecast.physics import moisture

__all__ = [
    "altitudes",
    "check_profiles",
    "read_soundings",
    "specific_humidity",
    "wind",
]

#: Least change of altitude (m), or ratio of pressures, along a way up; a station's altitude and
#: its pressure through one day change less. Common practice, no source.
LEAST_RISE = 50.0
LEAST_PRESSURE_RATIO = 1.02


def check_profiles(source: Source, recognition: Recognition) -> None:
    """Raise InputError if the file holds no vertical profiles at all."""
    if not source.variables:
        raise InputError(
            "holds no variables" + (" outside groups, which are not read" * source.has_groups),
            source=source.name,
        )
    if recognition.groups:
        return
    if recognition.vertical_dim is None:
        near_surface = [role for role in recognition.taken if role.endswith(("_2m", "_10m"))]
        if "air_temperature" in recognition or near_surface or _is_flat(source, recognition):
            raise InputError(
                "no vertical dimension: surface observations or fields, not profiles",
                source=source.name,
            )
        recognition.require("air_temperature")
    taken = recognition.require("air_temperature")
    vertical = recognition.vertical_dim
    assert vertical is not None
    says_so = str(source.attrs.get("featureType", "")).strip().lower().endswith("profile")
    alone = len(taken.dims) <= 2 and not says_so
    if alone and not is_ragged(source, vertical):
        _check_rise(source, recognition, vertical)


def _is_flat(source: Source, recognition: Recognition) -> bool:
    """Whether no air temperature was sought among variables that have a further dimension."""
    rejected = [r for r in recognition.rejected if r.role == "air_temperature"]
    if rejected:
        return all(r.reason == "does not vary along the vertical" for r in rejected)
    return all(sum(n > 1 for n in v.shape) <= 1 or v.is_text for v in source.variables.values())


def _check_rise(source: Source, recognition: Recognition, vertical: str) -> None:
    """Refuse a series at one place: along a way up altitude or pressure must change."""
    if source.dims[vertical] > MAX_LEVELS:
        return
    for role in ("altitude", "height", "geopotential_height", "air_pressure"):
        taken = recognition.get(role)
        if taken is None or vertical not in taken.dims:
            continue
        values = np.moveaxis(
            read_role(source, recognition, role, check=False), taken.dims.index(vertical), -1
        )
        values = values.reshape(-1, values.shape[-1])
        values = values[np.isfinite(values).any(axis=1)]
        if not values.size:
            continue
        low, high = np.nanmin(values, axis=1), np.nanmax(values, axis=1)
        if role == "air_pressure":
            if (high >= LEAST_PRESSURE_RATIO * low).any():
                return
            found = f"pressure varies between {low[0]:.5g} and {high[0]:.5g} Pa only"
        else:
            if (high - low >= LEAST_RISE).any():
                return
            found = f"{role.replace('_', ' ')} varies by {(high - low).max():.3g} m only"
        raise InputError(
            f"no vertical dimension: surface observations, not profiles ({found} along "
            f"{vertical!r})",
            source=source.name,
        )


def read_soundings(source: Source, recognition: Recognition) -> list[Sounding]:
    """All soundings of a file whose levels stand in one set of arrays.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of that file.

    Returns
    -------
    list of Sounding
        In file order, as read.

    Raises
    ------
    InputError
        If the file as a whole cannot be used.
    """
    geometry = find_geometry(source, recognition)
    if geometry.count == 0:
        raise InputError("holds no profiles", source=source.name)
    common = per_profile(source, recognition, geometry)
    levels = _level_reader(source, recognition, geometry)
    recognition.require("air_pressure")
    pressure, temperature = levels("air_pressure"), levels("air_temperature")
    assert pressure is not None and temperature is not None
    latitude = common["latitude"]
    altitude, above_ground = altitudes(recognition, levels, latitude)
    humidity_role, given = _humidity(recognition, levels)
    recognition.humidity = humidity_role
    u, v = _wind_or_none(recognition, levels)

    result = []
    for i in range(geometry.count):
        result.append(
            Sounding(
                time=common["time"][i],
                station=common["station"][i],
                source_file=source.name,
                pressure=pressure[i],
                temperature=temperature[i],
                specific_humidity=specific_humidity(
                    humidity_role, given[i], temperature[i], pressure[i]
                ),
                altitude=None if altitude is None else altitude[i],
                above_ground=above_ground,
                latitude=float(latitude[i]),
                longitude=float(common["longitude"][i]),
                surface_altitude=float(common["surface_altitude"][i]),
                u=None if u is None else u[i],
                v=None if v is None else v[i],
                lead_time=common["lead_time"][i],
                source_kind=common["source_kind"],
                member=common["member"][i],
                extras=common["extras"][i],
                humidity_name=humidity_role.replace("_", " "),
                humidity_given=np.isfinite(given[i]),
            )
        )
    return result


def _level_reader(
    source: Source, recognition: Recognition, geometry: Geometry
) -> Callable[[str], list[np.ndarray] | None]:
    def levels(role: str) -> list[np.ndarray] | None:
        taken = recognition.get(role)
        if taken is None:
            return None
        return geometry.levels(read_role(source, recognition, role), taken.dims)

    return levels


def altitudes(
    recognition: Recognition, levels: Callable[[str], list[np.ndarray] | None], latitude: Any
) -> tuple[list[np.ndarray] | None, bool]:
    """Heights as given: geometric altitude, else geopotential, else above ground; and which."""
    given = levels("altitude")
    if given is not None:
        return given, False
    for role, divisor in (("geopotential_height", 1.0), ("geopotential", 9.80665)):
        given = levels(role)
        if given is not None:
            return [
                geometric_altitude(h / divisor, lat) for h, lat in zip(given, latitude, strict=True)
            ], False
    given = levels("height")
    if given is not None:
        return given, True
    for role in ("altitude", "geopotential_height", "geopotential", "height"):
        if role in recognition.problems:
            raise recognition.problems[role]
    return None, False


def _humidity(
    recognition: Recognition, levels: Callable[[str], list[np.ndarray] | None]
) -> tuple[str, list[np.ndarray]]:
    """The measure of humidity that is used: the first of `HUMIDITY_ROLES` with values."""
    held = [role for role in HUMIDITY_ROLES if role in recognition]
    if not held:
        for role in HUMIDITY_ROLES:
            if role in recognition.problems:
                raise recognition.problems[role]
        raise InputError(
            "no humidity recognised: sought relative humidity, dew point, mixing ratio, specific "
            "humidity, vapour pressure",
            source=recognition.source,
            remedy='set names.relative_humidity = "<variable>" or another measure',
        )
    chosen: tuple[str, list[np.ndarray]] | None = None
    for role in held:
        given = levels(role)
        assert given is not None
        if chosen is None:
            chosen = role, given
        if sum(int(np.isfinite(row).sum()) for row in given) > len(given):
            return role, given
    assert chosen is not None
    return chosen


def specific_humidity(
    role: str, given: np.ndarray, temperature: np.ndarray, pressure: np.ndarray
) -> np.ndarray:
    """Specific humidity (kg/kg) from any measure of humidity in SI.

    Parameters
    ----------
    role : str
        One of `forecast.ingest.roles.HUMIDITY_ROLES`.
    given, temperature, pressure : ndarray
        The measure, K and Pa; relative humidity and dew point are over water.

    Returns
    -------
    ndarray
    """
    with np.errstate(all="ignore"):
        if role == "specific_humidity":
            return given
        if role == "relative_humidity":
            return moisture.specific_humidity_from_relative_humidity(given, temperature, pressure)
        if role == "dew_point_temperature":
            return moisture.specific_humidity_from_dew_point(given, pressure)
        if role == "dew_point_depression":
            return moisture.specific_humidity_from_dew_point(temperature - given, pressure)
        if role == "humidity_mixing_ratio":
            return moisture.specific_humidity_from_mixing_ratio(given)
        return moisture.specific_humidity_from_vapour_pressure(given, pressure)


def wind(
    levels: Callable[[str], list[np.ndarray] | None],
) -> tuple[list[np.ndarray] | None, list[np.ndarray] | None]:
    """Eastward and northward wind (m/s) per profile, from components or speed and direction."""
    u, v = levels("eastward_wind"), levels("northward_wind")
    if u is not None and v is not None:
        return u, v
    speed, origin = levels("wind_speed"), levels("wind_from_direction")
    if speed is None or origin is None:
        return None, None
    return (
        [-s * np.sin(np.radians(d)) for s, d in zip(speed, origin, strict=True)],
        [-s * np.cos(np.radians(d)) for s, d in zip(speed, origin, strict=True)],
    )


def _wind_or_none(
    recognition: Recognition, levels: Callable[[str], list[np.ndarray] | None]
) -> tuple[list[np.ndarray] | None, list[np.ndarray] | None]:
    """Wind, or none with a note when it cannot be used: refraction does not need it."""
    try:
        return wind(levels)
    except InputError as error:
        recognition.notes.append(f"wind left out: {error.variable}: {error.reason}")
        return None, None
