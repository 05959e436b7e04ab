"""Launches with mandatory and significant levels in separate arrays become one profile each."""

from __future__ import annotations

import netCDF4
import numpy as np

from forecast.ingest import inspect_files, open_profiles, read_files
from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.schema import QUALITY_FLAGS

from .make_files import EPOCH, make_air, write_level_groups

MANDATORY = np.array([0, 9, 24, 39])


def two_launches():
    airs = [make_air(40, seed=i) for i in range(2)]
    airs[1].time = airs[1].time + np.timedelta64(12, "h")
    return airs


def test_levels_are_merged_in_order_of_pressure(tmp_path):
    airs = two_launches()
    profiles = open_profiles(write_level_groups(tmp_path / "r.nc", airs, MANDATORY))
    assert profiles.sizes == {"profile": 2, "level": 40}
    for i, air in enumerate(airs):
        row = profiles.isel(profile=i)
        assert row.station == "Port Ander" and row.time.values == air.time
        np.testing.assert_allclose(row.air_pressure, air.p, rtol=1e-12)
        np.testing.assert_allclose(row.air_temperature, air.t, rtol=1e-12)
        q = specific_humidity_from_relative_humidity(air.rh, air.t, air.p)
        np.testing.assert_allclose(row.specific_humidity, q, rtol=1e-9)


def test_heights_between_mandatory_levels_are_hypsometric_and_marked(tmp_path):
    """The air is hydrostatic, so its heights come back between the given ones."""
    airs = two_launches()
    profiles = open_profiles(write_level_groups(tmp_path / "r.nc", airs, MANDATORY))
    marked = (profiles.quality.values & QUALITY_FLAGS["height_from_hypsometry"]) != 0
    expected = np.ones(40, dtype=bool)
    expected[MANDATORY] = False
    for i, air in enumerate(airs):
        np.testing.assert_array_equal(marked[i], expected)
        # Geopotential metres at 48°, 3 km: 0.1 % from gravity, geometric conversion included;
        # between given heights moisture (0.5 % of virtual temperature) is stretched away.
        np.testing.assert_allclose(profiles.altitude.values[i], air.z, rtol=1.5e-3, atol=0.5)
        assert (np.diff(profiles.height.values[i]) > 0.0).all()


def test_unused_places_of_the_arrays_are_not_read(tmp_path):
    """The writer fills unused places with 500, which would pass for a pressure."""
    airs = two_launches()
    profiles = open_profiles(write_level_groups(tmp_path / "r.nc", airs, MANDATORY))
    assert not (profiles.air_pressure == 50000.0).any()


def test_a_pressure_given_twice_is_one_marked_level(tmp_path):
    """850 hPa as mandatory and as significant level: values united, mandatory first."""
    airs = two_launches()[:1]
    path = write_level_groups(tmp_path / "r.nc", airs, MANDATORY)
    with netCDF4.Dataset(path, "a") as data:
        data["prSigT"][0, 3] = data["prMan"][0, 1]
        data["tpSigT"][0, 3] = 250.0
        data["tpMan"][0, 2] = -9999.0  # missing at a mandatory level, given at the same pressure
        data["prSigT"][0, 4] = data["prMan"][0, 2]
        data["tpSigT"][0, 4] = 283.0
    profiles = open_profiles(path)
    pressure = profiles.air_pressure.values[0]
    assert (np.diff(pressure[np.isfinite(pressure)]) < 0.0).all()
    twice = (profiles.quality.values[0] & QUALITY_FLAGS["duplicate_level"]) != 0
    np.testing.assert_allclose(pressure[twice], airs[0].p[[9, 24]])
    np.testing.assert_allclose(profiles.air_temperature.values[0][twice], [airs[0].t[9], 283.0])


def test_a_launch_without_significant_levels(tmp_path):
    airs = two_launches()
    path = write_level_groups(tmp_path / "r.nc", airs, MANDATORY)
    with netCDF4.Dataset(path, "a") as data:
        data["numSigT"][0] = 0
    profiles = open_profiles(path)
    np.testing.assert_allclose(profiles.air_pressure.values[0, :4], airs[0].p[MANDATORY])
    assert np.isnan(profiles.air_pressure.values[0, 4:]).all()


def test_a_missing_unit_of_a_group_is_told(tmp_path):
    path = write_level_groups(tmp_path / "r.nc", two_launches(), MANDATORY)
    with netCDF4.Dataset(path, "a") as data:
        data["tpMan"].delncattr("units")
    (report,) = inspect_files([path])
    assert any("tpMan: has no unit" in text for text in report.problems)
    reading = read_files([path])
    assert reading.profiles is None
    assert all("tpMan: has no unit" in item.reason for item in reading.set_aside)


def test_inspect_lists_both_sets(tmp_path):
    path = write_level_groups(tmp_path / "r.nc", two_launches(), MANDATORY)
    (report,) = inspect_files([path])
    pressures = [row["variable"] for row in report.taken if row["role"] == "air_pressure"]
    assert pressures == ["prMan", "prSigT"]
    assert report.refused == [] and report.profiles == 2


def test_sets_told_by_cf_names_alone(tmp_path):
    """No known layout: each dimension with its own pressure and temperature is a set."""
    air = make_air(40)
    path = tmp_path / "cf.nc"
    others = np.setdiff1d(np.arange(40), MANDATORY)
    with netCDF4.Dataset(path, "w") as data:
        for name, value, standard, units in (
            ("launch", air.seconds, "time", EPOCH),
            ("y", air.latitude, "latitude", "degrees_north"),
            ("x", air.longitude, "longitude", "degrees_east"),
            ("ground", air.ground, "surface_altitude", "m"),
        ):
            variable = data.createVariable(name, "f8", ())
            variable.setncatts({"standard_name": standard, "units": units})
            variable[...] = value
        for dim, at in (("main", MANDATORY), ("extra", others)):
            data.createDimension(dim, at.size)
            for part, standard, units in (
                ("p", "air_pressure", "Pa"),
                ("t", "air_temperature", "K"),
                ("rh", "relative_humidity", "1"),
                ("z", "altitude", "m"),
            ):
                if part == "z" and dim == "extra":
                    continue
                variable = data.createVariable(f"{part}_{dim}", "f8", (dim,))
                variable.setncatts({"standard_name": standard, "units": units})
                variable[:] = getattr(air, part)[at]
    profiles = open_profiles(path)
    np.testing.assert_allclose(profiles.air_pressure.values[0], air.p)
    np.testing.assert_allclose(profiles.air_temperature.values[0], air.t)
    np.testing.assert_allclose(profiles.altitude.values[0][MANDATORY], air.z[MANDATORY])
    (report,) = inspect_files([path])
    assert "CF standard names, levels along extra" in {row["how"] for row in report.taken}
