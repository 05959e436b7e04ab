"""What air a model column holds: pressure, temperature, humidity, height over ground, wind.

Pressure is given, or follows from hybrid coefficients and the surface pressure, or from heights by
the hydrostatic equation. Heights are given (above ground, altitude, geopotential height or
geopotential), or follow from the hydrostatic equation upwards from the surface pressure. Arrays
are ``(*outer, place, level)`` and ``(*outer, place)`` as `forecast.ingest.model_axes` reads them.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from forecast.errors import InputError
from forecast.ingest import quality, vertical
from forecast.ingest.ascents import specific_humidity
from forecast.ingest.assemble import EXTRAS
from forecast.ingest.levels import HEIGHT_ROLES, LevelSet
from forecast.ingest.model_axes import ModelAxes
from forecast.ingest.model_heights import (
    above_ground,
    geopotential_heights,
    hydrostatic_heights,
    pressure_from_heights,
    split_heights,
)
from forecast.ingest.recognition import Recognition
from forecast.ingest.roles import HUMIDITY_ROLES
from forecast.physics import moisture
from forecast.schema import QUALITY_FLAGS

__all__ = ["ModelFields", "read_fields", "require_humidity"]


@dataclass
class ModelFields:
    """Air at places, SI units, NaN where missing; arrays broadcast to ``(*outer, place, level)``.

    Attributes
    ----------
    height, altitude : ndarray
        m above ground and above mean sea level; NaN under the ground.
    under_ground : ndarray of bool
    quality : ndarray of int32
        Bits of `forecast.schema.QUALITY_FLAGS` set so far.
    surface_altitude : ndarray (*outer, place)
        m, NaN where unknown.
    extras : dict of str to ndarray (*outer, place)
        Values of `forecast.ingest.assemble.EXTRAS`.
    notes : list of str
        What a user may want to know.
    """

    pressure: np.ndarray
    temperature: np.ndarray
    specific_humidity: np.ndarray
    height: np.ndarray
    altitude: np.ndarray
    under_ground: np.ndarray
    u: np.ndarray
    v: np.ndarray
    quality: np.ndarray
    surface_altitude: np.ndarray
    extras: dict[str, np.ndarray]
    notes: list[str] = field(default_factory=list)


def require_humidity(recognition: Recognition) -> list[str]:
    """Measures of humidity that the file has, the one to be used first at the front.

    Raises
    ------
    InputError
        If there is none, or the one there is cannot be used.
    """
    held = [role for role in HUMIDITY_ROLES if role in recognition]
    if held:
        return held
    for role in HUMIDITY_ROLES:
        if role in recognition.problems:
            raise recognition.problems[role]
    refused = [r for r in recognition.rejected if r.role in HUMIDITY_ROLES]
    found = "".join(f"; {r.variable} {r.reason}" for r in refused[:3])
    raise InputError(
        "no humidity on the levels of air temperature: sought specific or relative humidity, dew "
        f"point, mixing ratio, vapour pressure{found}",
        source=recognition.source,
        remedy='set names.specific_humidity = "<variable>" or another measure',
    )


def read_fields(axes: ModelAxes, levels: LevelSet) -> ModelFields:
    """Read and derive what a column needs.

    Parameters
    ----------
    axes : ModelAxes
        Places and dimensions.
    levels : LevelSet
        Levels that `axes` reads.

    Returns
    -------
    ModelFields

    Raises
    ------
    InputError
        If pressure or height cannot be found, or values contradict their unit.
    """
    recognition = axes.recognition
    notes: list[str] = []
    temperature = _required(axes, "air_temperature")
    low, high = quality.TEMPERATURE_RANGE
    with np.errstate(invalid="ignore"):
        wrong = (temperature < low) | (temperature > high)
    temperature = np.where(wrong, np.nan, temperature)
    humidity, given = _humidity(axes)
    latitude = np.array([sample.latitude for sample in axes.samples])
    surface_pressure = _surface_pressure(axes)
    ground = _ground_altitude(axes, latitude)
    role, heights = _given_heights(axes, levels)

    half = None
    if levels.hybrid:
        if surface_pressure is None:
            raise _missing_surface_pressure(recognition, "hybrid levels need")
        pressure, half = levels.pressure(surface_pressure)
    elif "air_pressure" in recognition:
        pressure = _required(axes, "air_pressure")
    else:
        if surface_pressure is None:
            raise _missing_surface_pressure(recognition, "levels of height without pressure need")
        above = _geopotential_above_ground(axes, role, heights, ground, latitude)
        pressure = pressure_from_heights(above, temperature, humidity, given, surface_pressure)
    q = specific_humidity(humidity, given, temperature, pressure)

    if ground is None and role is not None and role != "height":
        if surface_pressure is None:
            notes.append(
                "neither surface pressure nor altitude of the ground is given; heights count from "
                "mean sea level"
            )
        else:
            h = geopotential_heights(role, heights, latitude)
            tv = vertical.virtual_temperature(temperature, q)
            ground = vertical.geometric_altitude(
                vertical.surface_height(pressure, h, tv, surface_pressure), latitude
            )
    unknown = np.full(latitude.shape, np.nan)
    surface_altitude = unknown if ground is None else ground
    if role is None:
        if surface_pressure is None:
            raise _missing_surface_pressure(
                recognition, "levels have neither height nor geopotential; to compute it needs"
            )
        h = hydrostatic_heights(pressure, half, temperature, q, surface_pressure)
        height = above_ground(h, surface_altitude, latitude)
        altitude = height + surface_altitude[..., np.newaxis]
    else:
        height, altitude = split_heights(role, heights, surface_altitude, latitude)
    under = vertical.below_ground(
        pressure,
        altitude,
        unknown if surface_pressure is None else surface_pressure,
        surface_altitude,
    )
    under = under | (height < 0.0)
    flags = np.where(wrong, QUALITY_FLAGS["temperature_out_of_range"], 0)
    if role is None:
        computed = np.where(np.isfinite(height), QUALITY_FLAGS["height_from_hypsometry"], 0)
        flags = flags | computed
    u, v = _wind(axes)
    extras = _extras(axes, surface_pressure, notes)
    return ModelFields(
        pressure=pressure,
        temperature=temperature,
        specific_humidity=q,
        height=height,
        altitude=altitude,
        under_ground=under,
        u=u,
        v=v,
        quality=flags.astype(np.int32),
        surface_altitude=surface_altitude,
        extras=extras,
        notes=notes,
    )


# --- what is read ---------------------------------------------------------------------------------


def _required(axes: ModelAxes, role: str) -> np.ndarray:
    axes.recognition.require(role)
    values = axes.read(role)
    assert values is not None
    return values


def _humidity(axes: ModelAxes) -> tuple[str, np.ndarray]:
    """The first measure of humidity that has values, and they."""
    held = require_humidity(axes.recognition)
    for role in held:
        values = _required(axes, role)
        if np.isfinite(values).any():
            axes.recognition.humidity = role
            return role, values
    raise InputError(
        f"holds no {held[0].replace('_', ' ')} value at the places: all are missing",
        source=axes.source.name,
        variable=axes.recognition.require(held[0]).variable,
    )


def _surface_pressure(axes: ModelAxes) -> np.ndarray | None:
    values = axes.read("surface_air_pressure")
    if values is None:
        # The logarithm is undone before columns are mixed, as the pressure itself would be.
        values = axes.read("log_surface_pressure", np.exp)
    return values


def _missing_surface_pressure(recognition: Recognition, need: str) -> InputError:
    for role in ("surface_air_pressure", "log_surface_pressure"):
        if role in recognition.problems:
            return recognition.problems[role]
    return InputError(
        f"{need} the surface pressure: sought surface_air_pressure and its logarithm (lnsp)",
        source=recognition.source,
        remedy='set names.surface_air_pressure = "<variable>" or names.log_surface_pressure',
    )


def _ground_altitude(axes: ModelAxes, latitude: np.ndarray) -> np.ndarray | None:
    taken = axes.recognition.get("surface_altitude")
    values = axes.read("surface_altitude")
    if values is not None and taken is not None:
        geopotential = taken.units.strip().lower() == "gpm"
        return vertical.geometric_altitude(values, latitude) if geopotential else values
    values = axes.read("surface_geopotential")
    if values is None:
        return None
    return vertical.geometric_altitude(values / vertical.STANDARD_GRAVITY, latitude)


def _given_heights(axes: ModelAxes, levels: LevelSet) -> tuple[str | None, np.ndarray]:
    """Heights as the file gives them, and in which form; none for levels without."""
    for role in HEIGHT_ROLES:
        values = axes.read(role)
        if values is not None:
            return role, values
    for role in HEIGHT_ROLES:
        if role in axes.recognition.problems and not levels.hybrid:
            raise axes.recognition.problems[role]
    return None, np.full(1, np.nan)


def _wind(axes: ModelAxes) -> tuple[np.ndarray, np.ndarray]:
    u, v = axes.read("eastward_wind"), axes.read("northward_wind")
    if u is not None and v is not None:
        return u, v
    speed = axes.read("wind_speed")
    east = axes.read("wind_from_direction", lambda d: -np.sin(np.radians(d)))
    north = axes.read("wind_from_direction", lambda d: -np.cos(np.radians(d)))
    if speed is None or east is None or north is None:
        return np.full(1, np.nan), np.full(1, np.nan)
    return speed * east, speed * north


def _extras(
    axes: ModelAxes, surface_pressure: np.ndarray | None, notes: list[str]
) -> dict[str, np.ndarray]:
    """Values at the ground; one that cannot be read is left out and noted."""
    result = {}

    def read(role: str) -> np.ndarray | None:
        try:
            return axes.read(role)
        except InputError as error:
            what = role.replace("_", " ")
            notes.append(f"{what} left out: {error.variable}: {error.reason}")
            return None

    for name in EXTRAS:
        values = read(name)
        if values is not None:
            result[name] = values
    if surface_pressure is not None:
        result["surface_air_pressure"] = surface_pressure
        if "specific_humidity_2m" not in result:
            dew_point, relative = read("dew_point_temperature_2m"), None
            if dew_point is None:
                relative = read("relative_humidity_2m")
            with np.errstate(all="ignore"):
                if dew_point is not None:
                    result["specific_humidity_2m"] = moisture.specific_humidity_from_dew_point(
                        dew_point, surface_pressure
                    )
                elif relative is not None and "air_temperature_2m" in result:
                    result["specific_humidity_2m"] = (
                        moisture.specific_humidity_from_relative_humidity(
                            relative, result["air_temperature_2m"], surface_pressure
                        )
                    )
    return result


def _geopotential_above_ground(
    axes: ModelAxes,
    role: str | None,
    values: np.ndarray,
    ground: np.ndarray | None,
    latitude: np.ndarray,
) -> np.ndarray:
    """Geopotential height of levels above the ground, NaN below it."""
    if role is None:
        axes.recognition.require("air_pressure")
    if ground is None and role != "height":
        raise InputError(
            f"levels of {str(role).replace('_', ' ')} without pressure need the altitude of the "
            "ground: sought surface_altitude and surface_geopotential",
            source=axes.source.name,
            remedy='set names.surface_altitude = "<variable>"',
        )
    base = np.zeros(latitude.shape) if ground is None else np.nan_to_num(ground)
    under = vertical.geopotential_height(base, latitude)[..., np.newaxis]
    if role == "height":
        altitude = base[..., np.newaxis] + values
        above = vertical.geopotential_height(altitude, latitude[:, np.newaxis]) - under
    else:
        above = geopotential_heights(str(role), values, latitude) - under
    return np.where(above < 0.0, np.nan, above)
