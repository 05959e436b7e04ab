"""Ascents with time as the way up: every measure of humidity, height, wind and place."""

from __future__ import annotations

import netCDF4
import numpy as np
import pytest

from forecast.ingest import open_profiles, read_files
from forecast.ingest.vertical import geopotential_height
from forecast.physics.moisture import (
    specific_humidity_from_relative_humidity,
    vapour_pressure_from_specific_humidity,
)

from .make_files import dew_point, make_air, write_ascent


def write_with(tmp_path, name, numbers, standard, units, leave_out=(), air=None, **options):
    """An ascent with one more variable along the way up."""
    path = write_ascent(tmp_path / "a.nc", air or make_air(), leave_out=leave_out, **options)
    with netCDF4.Dataset(path, "a") as data:
        variable = data.createVariable(name, "f8", ("time",), fill_value=-9999.0)
        variable.setncatts({"standard_name": standard, "units": units})
        variable[:] = np.where(np.isfinite(numbers), numbers, -9999.0)
    return path


def humidity_measures():
    air = make_air()
    q = specific_humidity_from_relative_humidity(air.rh, air.t, air.p)
    td = dew_point(air.t, air.rh, air.p)
    return {
        "specific_humidity": (q * 1e3, "g kg-1"),
        "humidity_mixing_ratio": (q / (1.0 - q), "kg kg-1"),
        "dew_point_temperature": (td - 273.15, "degC"),
        "dew_point_depression": (air.t - td, "degC"),
        "water_vapor_partial_pressure_in_air": (
            vapour_pressure_from_specific_humidity(q, air.p) / 100.0,
            "hPa",
        ),
    }


@pytest.mark.parametrize("standard", list(humidity_measures()))
def test_every_measure_of_humidity(tmp_path, standard):
    air = make_air()
    values, units = humidity_measures()[standard]
    path = write_with(tmp_path, "moist", values, standard, units, leave_out=["rh"])
    read = open_profiles(path).specific_humidity.values[0]
    expected = specific_humidity_from_relative_humidity(air.rh, air.t, air.p)
    np.testing.assert_allclose(read, expected, rtol=1e-9)


def test_of_two_measures_the_one_with_values_is_used(tmp_path):
    """An empty relative humidity beside a full dew point; no level mixes the two."""
    air = make_air()
    td = dew_point(air.t, air.rh, air.p)
    path = write_with(
        tmp_path, "td", td, "dew_point_temperature", "K", values={"rh": np.full(60, np.nan)}
    )
    read = open_profiles(path).specific_humidity.values[0]
    expected = specific_humidity_from_relative_humidity(air.rh, air.t, air.p)
    np.testing.assert_allclose(read, expected, rtol=1e-9)


def test_a_measure_without_unit_gives_way_to_one_that_can_be_used(tmp_path):
    air = make_air()
    td = dew_point(air.t, air.rh, air.p)
    path = write_with(
        tmp_path, "td", td, "dew_point_temperature", "K", attrs={"rh": {"units": None}}
    )
    reading = read_files([path])
    assert reading.profiles.sizes["profile"] == 1
    assert any("rh left out as relative humidity: has no unit" in n for n in reading.notes)


@pytest.mark.parametrize(
    ("standard", "units", "scale"),
    [
        ("geopotential_height", "gpm", 1.0),
        ("geopotential_height", "km", 1e-3),
        ("geopotential", "m2 s-2", 9.80665),
    ],
)
def test_geopotential_becomes_altitude(tmp_path, standard, units, scale):
    """Inverse of the project's own conversion, whose check stands in test_vertical."""
    air = make_air()
    values = scale * geopotential_height(air.z, air.latitude)
    path = write_with(tmp_path, "geo", values, standard, units, leave_out=["alt"])
    np.testing.assert_allclose(open_profiles(path).altitude.values[0], air.z, atol=1e-6)


def test_heights_above_ground(tmp_path):
    air = make_air()
    path = write_with(tmp_path, "h", air.z - 12.0, "height", "m", leave_out=["alt"])
    read = open_profiles(path)
    np.testing.assert_allclose(read.height.values[0], air.z - 12.0)
    np.testing.assert_allclose(read.altitude.values[0], air.z)


def test_without_any_height_the_pressures_give_it(tmp_path):
    """The invented air is hydrostatic and dry; its moisture lifts the top by 0.4 % at most."""
    air = make_air()
    read = open_profiles(write_ascent(tmp_path / "a.nc", air, leave_out=["alt"]))
    height = read.height.values[0]
    assert height[0] == 0.0
    np.testing.assert_allclose(height[1:], (air.z - 12.0)[1:], rtol=8e-3)
    assert (height[1:] > (air.z - 12.0)[1:]).all(), "moist air is lighter"


@pytest.mark.parametrize(
    ("speed", "origin", "u", "v"),
    [(10.0, 270.0, 10.0, 0.0), (10.0, 0.0, 0.0, -10.0), (2.0, 225.0, 2**0.5, 2**0.5)],
)
def test_wind_from_speed_and_direction(tmp_path, speed, origin, u, v):
    """Direction is where the wind comes from: from the west it blows eastward."""
    path = write_ascent(tmp_path / "a.nc", make_air(), leave_out=["ua", "va"])
    with netCDF4.Dataset(path, "a") as data:
        for name, standard, units, value in (
            ("ff", "wind_speed", "m s-1", speed),
            ("dd", "wind_from_direction", "degree", origin),
        ):
            variable = data.createVariable(name, "f8", ("time",))
            variable.setncatts({"standard_name": standard, "units": units})
            variable[:] = value
    read = open_profiles(path)
    np.testing.assert_allclose(read.eastward_wind.values[0], u, atol=1e-12)
    np.testing.assert_allclose(read.northward_wind.values[0], v, atol=1e-12)


def test_without_wind_the_profile_stands(tmp_path):
    read = open_profiles(write_ascent(tmp_path / "a.nc", make_air(), leave_out=["ua", "va"]))
    assert np.isnan(read.eastward_wind).all() and read.sizes["profile"] == 1


def test_wind_in_a_wrong_unit_is_left_out_with_a_note(tmp_path):
    path = write_ascent(tmp_path / "a.nc", make_air(), attrs={"ua": {"units": "K"}})
    reading = read_files([path])
    assert np.isnan(reading.profiles.eastward_wind).all()
    assert any("wind left out: ua: unit 'K' does not convert" in n for n in reading.notes)


def test_a_file_written_from_above(tmp_path):
    air = make_air()
    turned = make_air()
    for name in ("z", "p", "t", "rh", "u", "v"):
        setattr(turned, name, getattr(air, name)[::-1])
    down = open_profiles(write_ascent(tmp_path / "down.nc", turned))
    up = open_profiles(write_ascent(tmp_path / "up.nc", air))
    for name in ("height", "air_pressure", "air_temperature", "specific_humidity", "quality"):
        np.testing.assert_array_equal(down[name], up[name])


def test_position_is_that_of_the_first_level_and_time_that_of_the_launch(tmp_path):
    """The balloon drifts by 0.05 degrees and flies for two minutes."""
    air = make_air()
    read = open_profiles(write_ascent(tmp_path / "a.nc", air))
    assert read.latitude.item() == pytest.approx(air.latitude)
    assert read.longitude.item() == pytest.approx(air.longitude)
    assert read.time.values[0] == air.time


def test_the_ground_from_the_file_else_from_the_first_level(tmp_path):
    air = make_air(ground=12.0)
    with_ground = write_ascent(tmp_path / "a.nc", air, values={"surface_altitude": np.array(2.0)})
    read = open_profiles(with_ground)
    assert read.surface_altitude.item() == 2.0
    assert read.height.values[0, 0] == pytest.approx(10.0)
    without = write_ascent(tmp_path / "b.nc", air, leave_out=["surface_altitude"])
    assert open_profiles(without).surface_altitude.item() == 12.0


def test_a_station_altitude_called_altitude_is_the_ground(tmp_path):
    """An altitude that does not vary along the way up is not that of the balloon."""
    path = write_ascent(tmp_path / "a.nc", make_air(), leave_out=["surface_altitude"])
    with netCDF4.Dataset(path, "a") as data:
        variable = data.createVariable("station_altitude", "f8", ())
        variable.setncatts({"standard_name": "altitude", "units": "m"})
        variable[...] = 7.0
    assert open_profiles(path).surface_altitude.item() == 7.0


def test_station_from_a_global_attribute(tmp_path):
    path = write_ascent(
        tmp_path / "a.nc",
        make_air(),
        leave_out=["station_name"],
        file_attrs={"platform": "RV Skerry\nII"},
    )
    assert open_profiles(path).station.item() == "RV Skerry\\nII"


def test_time_can_be_set_by_the_user(tmp_path):
    """Seconds since launch, of a launch whose date only the user knows."""
    air = make_air()
    path = write_ascent(
        tmp_path / "a.nc",
        air,
        attrs={"time": {"units": "seconds", "standard_name": None}},
        values={"time": 2.0 * np.arange(60)},
    )
    assert read_files([path]).profiles is None
    read = open_profiles(path, {"time": "time [seconds since 2031-03-04 05:30:00]"})
    assert read.time.values[0] == air.time


def test_sea_surface_temperature_comes_along(tmp_path):
    path = write_ascent(tmp_path / "a.nc", make_air())
    with netCDF4.Dataset(path, "a") as data:
        variable = data.createVariable("bucket", "f8", ())
        variable.setncatts({"standard_name": "sea_surface_temperature", "units": "degC"})
        variable[...] = 11.25
    np.testing.assert_allclose(open_profiles(path).sea_surface_temperature.values, [284.4])


def test_an_optional_value_that_contradicts_its_unit_is_left_out_with_a_note(tmp_path):
    path = write_ascent(tmp_path / "a.nc", make_air())
    with netCDF4.Dataset(path, "a") as data:
        variable = data.createVariable("bucket", "f8", ())
        variable.setncatts({"standard_name": "sea_surface_temperature", "units": "K"})
        variable[...] = 11.25
    reading = read_files([path])
    assert "sea_surface_temperature" not in reading.profiles
    assert any("bucket: declared unit 'K' contradicts" in note for note in reading.notes)


def test_variables_in_groups_are_told(tmp_path):
    path = tmp_path / "g.nc"
    with netCDF4.Dataset(path, "w") as data:
        data.createGroup("sounding").createDimension("z", 3)
    (aside,) = read_files([path]).set_aside
    assert aside.reason == "holds no variables outside groups, which are not read"
