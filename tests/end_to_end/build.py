"""A small batch of invented soundings and settings for runs of the whole job."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np

SAMPLES = Path(__file__).parents[2] / "sample_soundings"

SETTINGS = """
[run]
title = "Small coast"
output = "out"
members = 16

[[site]]
name = "Cape"
latitude = 46.52
longitude = -27.90
timezone = "Atlantic/Azores"
inputs = ["in/*.nc"]

[[sightline]]
name = "lamp"
site = "Cape"
observer_height_m = 4.0
target_height_m = 36.0
distance_km = 40.0

[[sightline]]
name = "relay"
site = "Cape"
wave = "radio"
observer_height_m = 15.0
target_height_m = 30.0
target_base_height_m = 30.0
distance_km = 70.0
"""


def lay_out(folder: Path, ascents: slice = slice(32, 38), settings: str = SETTINGS) -> Path:
    """Copy some sample ascents and write settings; returns the settings file."""
    inputs = folder / "in"
    inputs.mkdir(parents=True, exist_ok=True)
    for path in sorted((SAMPLES / "ascents").glob("*.nc"))[ascents]:
        shutil.copyfile(path, inputs / path.name)
    path = folder / "settings.toml"
    path.write_text(settings, encoding="utf-8")
    return path


def write_ascent(path: Path, hour: int = 0, **changes) -> None:
    """Write one plain ascent; `changes` replace a variable (None leaves it out) or an attribute.

    ``units_NAME`` replaces a unit, ``station`` the station's name, ``reverse`` turns the levels
    upside down.
    """
    import netCDF4

    height = np.arange(0.0, 3000.0, 25.0)
    temperature = 288.15 - 0.0065 * height
    values = {
        "alt": (height + 2.0, "m", "altitude"),
        "pres": (1013.25 * (1 - 0.0065 * height / 288.15) ** 5.2559, "hPa", "air_pressure"),
        "temp": (temperature, "K", "air_temperature"),
        "rh": (np.full(height.size, 60.0), "%", "relative_humidity"),
        "lat": (np.full(height.size, 46.52), "degrees_north", "latitude"),
        "lon": (np.full(height.size, -27.90), "degrees_east", "longitude"),
    }
    step = -1 if changes.get("reverse") else 1
    with netCDF4.Dataset(path, "w") as data:
        data.Conventions = "CF-1.11"
        data.featureType = "trajectory"
        data.createDimension("time", height.size)
        time = data.createVariable("time", "f8", ("time",))
        time.units = changes.get("units_time", f"seconds since 2031-05-01 {hour:02d}:00:00")
        time.standard_name = "time"
        if "calendar" in changes:
            time.calendar = changes["calendar"]
        time[:] = 5.0 * np.arange(height.size)
        data.platform_name = changes.get("station", "Cape")
        name = data.createVariable("station_name", str, ())
        name.standard_name = "platform_name"
        name[...] = changes.get("station", "Cape")
        for key, (array, unit, standard) in values.items():
            if key in changes and changes[key] is None:
                continue
            variable = data.createVariable(key, "f8", ("time",), fill_value=np.nan)
            if changes.get(f"units_{key}", unit) is not None:
                variable.units = changes.get(f"units_{key}", unit)
            variable.standard_name = standard
            variable[:] = np.asarray(changes.get(key, array))[::step]
