#!/usr/bin/env python3
"""Make the invented soundings of ``sample_soundings/``: which files, and always the same.

The air is that of `sample_air`. Files: one netCDF per launch (6-hourly, every 2 s, about 5 m/s),
one netCDF of model levels (hourly, hybrid levels, logarithm of surface pressure) and one launch
cut off in the middle, as a broken transfer leaves it. Nothing depends on the clock: the same
libraries give the same bytes.

    python scripts/make_sample_soundings.py [FOLDER]
"""

from __future__ import annotations

import argparse
import sys
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
from sample_air import (
    DECK,
    LATITUDE,
    LONGITUDE,
    START,
    STATION,
    Ascent,
    Scenario,
    dew_point,
    fly,
    hybrid_halves,
    model_column,
)

ROOT = Path(__file__).resolve().parent.parent
ASCENT_DAYS = 20
FORECAST_DAYS = 5
DAMAGED_LAUNCH = 46  # index of the launch whose file is cut off
SOURCE = "invented air, scripts/make_sample_soundings.py"


def write_ascent(ascent: Ascent, path: Path) -> None:
    """One launch as a CF file in which time is the ascent."""
    air = ascent.air
    speed = np.hypot(air.eastward_wind, air.northward_wind)
    bearing = np.degrees(np.arctan2(-air.eastward_wind, -air.northward_wind)) % 360.0
    since = {"calendar": "standard", "units": f"seconds since {ascent.launch:%Y-%m-%d %H:%M:%S}"}
    #: name, values, type, step and offset of the packing, units, CF standard name
    rows: list[tuple[str, Any, str, float | None, float, str | None, str]] = [
        ("time", ascent.seconds, "i2", None, 0.0, None, "time"),
        ("lat", ascent.latitude, "i2", 1e-4, LATITUDE, "degrees_north", "latitude"),
        ("lon", ascent.longitude, "i2", 1e-4, LONGITUDE, "degrees_east", "longitude"),
        ("alt", air.height, "i2", 0.2, 5000.0, "m", "altitude"),
        ("pres", air.pressure / 100.0, "i2", 0.02, 700.0, "hPa", "air_pressure"),
        ("temp", air.temperature - 273.15, "i2", 0.01, 0.0, "degree_Celsius", "air_temperature"),
        ("rh", 100.0 * ascent.relative_humidity, "i2", 0.1, 0.0, "%", "relative_humidity"),
        ("wspd", speed, "i2", 0.01, 0.0, "m s-1", "wind_speed"),
        ("wdir", bearing, "i2", 0.1, 0.0, "degree", "wind_from_direction"),
    ]
    with netCDF4.Dataset(path, "w", format="NETCDF4") as file:
        describe(file, f"Radiosonde ascent from {STATION}, invented", featureType="trajectory")
        file.createDimension("time", ascent.seconds.size)
        file.createDimension("name_length", len(STATION))
        name = file.createVariable("station_name", "S1", ("name_length",))
        name.setncatts({"standard_name": "platform_name", "cf_role": "trajectory_id"})
        name[:] = np.array(list(STATION), dtype="S1")
        put(file, "surface_altitude", (), DECK, "f4", units="m", standard_name="surface_altitude")
        put(
            file,
            "sst",
            (),
            round(air.sea_temperature - 273.15, 1),
            "f4",
            units="degree_Celsius",
            standard_name="sea_surface_temperature",
            comment="bucket at the pier before launch",
        )
        for label, values, kind, step, offset, units, standard in rows:
            attributes = since if units is None else {"units": units}
            if label in ("pres", "temp", "rh", "wspd", "wdir"):
                attributes = attributes | {"coordinates": "lat lon alt station_name"}
            put(
                file,
                label,
                ("time",),
                values,
                kind,
                step,
                offset,
                standard_name=standard,
                **attributes,
            )


def describe(file: netCDF4.Dataset, title: str, **attributes: str) -> None:
    """Global attributes of every file."""
    file.setncatts(
        {
            "Conventions": "CF-1.11",
            "title": title,
            "source": SOURCE,
            "history": "made by scripts/make_sample_soundings.py",
            **attributes,
        }
    )


def put(
    file: netCDF4.Dataset,
    name: str,
    dims: tuple[str, ...],
    values: Any,
    kind: str,
    step: float | None = None,
    offset: float = 0.0,
    **attributes: Any,
) -> None:
    """One variable, compressed where large; with `step`, packed in steps around `offset`."""
    values = np.ma.masked_invalid(np.asarray(values, dtype=float))
    fill = netCDF4.default_fillvals[kind] if values.mask.any() else None
    # A compressed variable needs an index of its own, larger than one launch's values.
    large = values.size > 5000
    variable = file.createVariable(
        name,
        kind,
        dims,
        zlib=large,
        complevel=9,
        shuffle=large,
        fill_value=fill,
        contiguous=not large,
        chunksizes=values.shape if large else None,
    )
    variable.set_auto_maskandscale(False)
    if step is not None:
        variable.setncatts({"scale_factor": step, "add_offset": offset})
        values = np.ma.round((values - offset) / step)
        if np.abs(values).max() >= np.iinfo(kind).max:
            raise ValueError(f"{name}: values do not fit {kind} in steps of {step}")
    variable.setncatts(attributes)
    variable[...] = values.filled(0.0 if fill is None else fill).astype(kind)


#: name, units, CF standard name, words, step and offset of the packing
UPPER = (
    ("t", "K", "air_temperature", "air temperature", 0.005, 250.0),
    ("q", "kg kg-1", "specific_humidity", "specific humidity", 5e-7, 0.016),
    ("u", "m s-1", "eastward_wind", "eastward wind", 0.01, 0.0),
    ("v", "m s-1", "northward_wind", "northward wind", 0.01, 0.0),
)
SURFACE = (
    ("sst", "K", "sea_surface_temperature", "sea surface temperature", 0.005, 250.0),
    ("t2m", "K", "air_temperature", "air temperature at 2 m", 0.005, 250.0),
    ("d2m", "K", "dew_point_temperature", "dew point at 2 m", 0.005, 250.0),
    ("u10", "m s-1", "eastward_wind", "eastward wind at 10 m", 0.01, 0.0),
    ("v10", "m s-1", "northward_wind", "northward wind at 10 m", 0.01, 0.0),
    ("blh", "m", "atmosphere_boundary_layer_thickness", "boundary layer height", 0.5, 0.0),
)


def write_forecast(scenario: Scenario, path: Path) -> None:
    """The model-level forecast: hourly, 3 by 3 points around the station, top level first."""
    a, b = hybrid_halves()
    hours = np.arange(24 * FORECAST_DAYS + 1)
    latitude, longitude = np.array([46.75, 46.5, 46.25]), np.array([-28.15, -27.9, -27.65])
    upper = {row[0]: np.empty((hours.size, a.size - 1, 3, 3)) for row in UPPER}
    surface = {name: np.empty((hours.size, 3, 3)) for name in [r[0] for r in SURFACE] + ["lnsp"]}
    for k, j, i in np.ndindex(hours.size, 3, 3):
        day = ASCENT_DAYS + hours[k] / 24.0
        place = longitude[i] - LONGITUDE, latitude[j] - LATITUDE
        air, pressure = model_column(scenario, day, *place, a, b)
        low = scenario.column(day, np.array([0.0, 2.0, 10.0, 20.0]), *place)
        for name, values in (
            ("t", air.temperature),
            ("q", air.specific_humidity),
            ("u", air.eastward_wind),
            ("v", air.northward_wind),
        ):
            upper[name][k, :, j, i] = values
        for name, value in (
            ("lnsp", np.log(pressure)),
            ("sst", low.sea_temperature),
            ("t2m", low.temperature[1]),
            ("d2m", dew_point(low.specific_humidity[1], low.pressure[1])),
            ("u10", low.eastward_wind[2]),
            ("v10", low.northward_wind[2]),
            ("blh", scenario.mixed_depth(day)),
        ):
            surface[name][k, j, i] = value

    begin = START + timedelta(days=ASCENT_DAYS)
    clock = {"units": f"hours since {begin:%Y-%m-%d %H:%M:%S}", "calendar": "standard"}
    with netCDF4.Dataset(path, "w", format="NETCDF4") as file:
        describe(file, "Model-level forecast for the Bay of Ferrow, invented")
        sizes = {"time": hours.size, "level": a.size - 1, "half_level": a.size}
        for name, size in {**sizes, "latitude": 3, "longitude": 3}.items():
            file.createDimension(name, size)
        put(file, "time", ("time",), hours, "i4", standard_name="time", axis="T", **clock)
        put(
            file,
            "forecast_reference_time",
            (),
            0,
            "i4",
            standard_name="forecast_reference_time",
            **clock,
        )
        put(
            file,
            "latitude",
            ("latitude",),
            latitude,
            "f8",
            standard_name="latitude",
            axis="Y",
            units="degrees_north",
        )
        put(
            file,
            "longitude",
            ("longitude",),
            longitude,
            "f8",
            standard_name="longitude",
            units="degrees_east",
            axis="X",
        )
        put(
            file,
            "level",
            ("level",),
            np.arange(1, a.size),
            "i4",
            units="1",
            axis="Z",
            positive="down",
            long_name="model level number, 1 at the top",
        )
        put(
            file,
            "hyai",
            ("half_level",),
            a,
            "f8",
            units="Pa",
            long_name="hybrid coefficient a at layer interfaces",
        )
        put(
            file,
            "hybi",
            ("half_level",),
            b,
            "f8",
            units="1",
            long_name="hybrid coefficient b at layer interfaces",
        )
        flat = ("time", "latitude", "longitude")
        put(
            file,
            "lnsp",
            flat,
            surface["lnsp"],
            "f4",
            units="1",
            long_name="natural logarithm of surface air pressure in Pa",
        )
        for name, units, standard, words, step, offset in UPPER:
            put(
                file,
                name,
                ("time", "level", *flat[1:]),
                upper[name],
                "i2",
                step,
                offset,
                standard_name=standard,
                units=units,
                long_name=words,
            )
        for name, units, standard, words, step, offset in SURFACE:
            put(
                file,
                name,
                flat,
                surface[name],
                "i2",
                step,
                offset,
                standard_name=standard,
                units=units,
                long_name=words,
            )


def ascent_name(launch: datetime) -> str:
    """File name of a launch."""
    return f"vellory_sonde_{launch:%Y%m%d_%H%M}.nc"


def make_ascents(folder: Path, indices: range | list[int]) -> list[Path]:
    """Write the launches with these indices; the damaged one is cut off."""
    scenario = Scenario()
    folder.mkdir(parents=True, exist_ok=True)
    paths = []
    for index in indices:
        ascent = fly(scenario, index)
        path = folder / ascent_name(ascent.launch)
        write_ascent(ascent, path)
        if index == DAMAGED_LAUNCH:
            whole = path.read_bytes()
            path.write_bytes(whole[: int(0.55 * len(whole))])
        paths.append(path)
    return paths


def make_forecast(folder: Path) -> Path:
    """Write the model-level file."""
    folder.mkdir(parents=True, exist_ok=True)
    begin = START + timedelta(days=ASCENT_DAYS)
    path = folder / f"ferrow_model_{begin:%Y%m%d_%H}.nc"
    write_forecast(Scenario(), path)
    return path


def main(arguments: list[str] | None = None) -> int:
    """Write all files below the folder named on the command line."""
    parser = argparse.ArgumentParser(description="Make the invented soundings of the demo.")
    parser.add_argument("folder", nargs="?", type=Path, default=ROOT / "sample_soundings")
    folder = parser.parse_args(arguments).folder
    ascents = make_ascents(folder / "ascents", range(4 * ASCENT_DAYS))
    model = make_forecast(folder / "model")
    total = sum(path.stat().st_size for path in [*ascents, model])
    print(f"{len(ascents)} ascents and {model.name} in {folder}, {total / 1e6:.2f} MB")
    return 0


if __name__ == "__main__":
    sys.exit(main())
