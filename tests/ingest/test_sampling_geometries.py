"""Profiles stored in every discrete sampling geometry read back to the same values."""

from __future__ import annotations

import netCDF4
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from forecast.errors import InputError
from forecast.ingest import read_files
from forecast.ingest.recognise import recognise
from forecast.ingest.sampling_geometries import find_geometry
from forecast.ingest.source import open_source
from forecast.physics.moisture import specific_humidity_from_relative_humidity

from .make_files import EPOCH, make_air, write_profiles

FORMS = ("orthogonal", "incomplete", "contiguous", "indexed")
FEATURES = ("profile", "timeSeriesProfile", "trajectoryProfile")


def invented(form, feature, counts, seed=0):
    """Profiles of two stations, lengths as wanted (all the same where the form needs it)."""
    airs = []
    for i, count in enumerate(counts):
        second = i >= len(counts) // 2
        fixed = feature != "trajectoryProfile"
        air = make_air(
            counts[0] if form == "orthogonal" else count,
            seed=seed + i,
            station="Port Ander" if not second else "Skerry Light",
            latitude=(48.25 if not second else -12.5) + (0.0 if fixed else 0.01 * i),
            longitude=(-30.5 if not second else 140.25) + (0.0 if fixed else 0.02 * i),
            ground=12.0,
        )
        air.time = air.time + np.timedelta64(i, "h")
        airs.append(air)
    return airs


def assert_same(profiles, airs):
    """Every level of every profile has the values it was written with."""
    order = sorted(range(len(airs)), key=lambda i: (airs[i].station, airs[i].time))
    assert profiles.sizes["profile"] == len(airs)
    for row, i in enumerate(order):
        air, read = airs[i], profiles.isel(profile=row)
        n = air.z.size
        assert read.station == air.station
        assert read.time.values == air.time
        np.testing.assert_allclose(
            [read.latitude, read.longitude, read.surface_altitude],
            [air.latitude, air.longitude, air.ground],
            rtol=0,
            atol=1e-9,
        )
        q = specific_humidity_from_relative_humidity(air.rh, air.t, air.p)
        for name, expected in (
            ("altitude", air.z),
            ("height", air.z - air.ground),
            ("air_pressure", air.p),
            ("air_temperature", air.t),
            ("specific_humidity", q),
            ("eastward_wind", air.u),
            ("northward_wind", air.v),
        ):
            # Written as float64: only the rounding of the unit conversion is left.
            np.testing.assert_allclose(
                read[name].values[:n], expected, rtol=1e-12, atol=1e-9, err_msg=name
            )
            assert np.isnan(read[name].values[n:]).all()
        assert (read.quality.values[n:] == 0).all()


@pytest.mark.parametrize("feature", FEATURES)
@pytest.mark.parametrize("form", FORMS)
def test_every_form_reads_back_the_same(tmp_path, form, feature):
    airs = invented(form, feature, [40, 25, 33, 18])
    path = write_profiles(tmp_path / "p.nc", airs, form, feature)
    reading = read_files([path])
    assert reading.set_aside == []
    assert_same(reading.profiles, airs)


@settings(max_examples=12)
@given(
    form=st.sampled_from(FORMS),
    feature=st.sampled_from(FEATURES),
    counts=st.lists(st.integers(2, 30), min_size=2, max_size=6).filter(lambda c: len(c) % 2 == 0),
    seed=st.integers(0, 1000),
)
def test_any_lengths_read_back_the_same(tmp_path_factory, form, feature, counts, seed):
    airs = invented(form, feature, counts, seed)
    path = write_profiles(tmp_path_factory.mktemp("p") / "p.nc", airs, form, feature)
    assert_same(read_files([path]).profiles, airs)


def test_a_single_profile_without_profile_dimension(tmp_path):
    """CF-1.11 H.3.3: scalar coordinates beside T(z)."""
    air = make_air(30)
    path = tmp_path / "one.nc"
    with netCDF4.Dataset(path, "w") as data:
        data.featureType = "profile"
        data.createDimension("z", 30)
        for name, value, standard, units in (
            ("time", air.seconds, "time", EPOCH),
            ("lat", air.latitude, "latitude", "degrees_north"),
            ("lon", air.longitude, "longitude", "degrees_east"),
        ):
            variable = data.createVariable(name, "f8", ())
            variable.setncatts({"standard_name": standard, "units": units})
            variable[...] = value
        for name, values, standard, units in (
            ("z", air.z, "altitude", "m"),
            ("p", air.p, "air_pressure", "Pa"),
            ("t", air.t, "air_temperature", "K"),
            ("rh", air.rh, "relative_humidity", "1"),
        ):
            variable = data.createVariable(name, "f8", ("z",))
            variable.setncatts({"standard_name": standard, "units": units})
            variable[:] = values
    profiles = read_files([path]).profiles
    np.testing.assert_allclose(profiles.altitude.values[0], air.z)
    # Nothing names the station, so its position does.
    assert profiles.station.item() == "lat 48.2 lon -30.5"
    # No ground is given: it is where the profile begins.
    assert profiles.height.values[0, 0] == 0.0


def test_dimension_order_does_not_matter(tmp_path):
    """T(z, profile) holds the same profiles as T(profile, z)."""
    airs = invented("incomplete", "profile", [20, 12])
    straight = write_profiles(tmp_path / "a.nc", airs, "incomplete", "profile")
    turned = tmp_path / "b.nc"
    with netCDF4.Dataset(straight) as old, netCDF4.Dataset(turned, "w") as new:
        new.featureType = "profile"
        for name, dim in old.dimensions.items():
            new.createDimension(name, dim.size)
        for name, var in old.variables.items():
            dims = var.dimensions[::-1]
            fill = -9999.0 if var.dtype == np.float64 else None
            copy = new.createVariable(name, var.dtype, dims, fill_value=fill)
            copy.setncatts({k: var.getncattr(k) for k in var.ncattrs() if k != "_FillValue"})
            copy[...] = var[...].T
    assert_same(read_files([turned]).profiles, airs)


def test_row_sizes_beyond_the_samples_are_refused(tmp_path):
    path = write_profiles(
        tmp_path / "p.nc", invented("contiguous", "profile", [9, 9]), "contiguous", "profile"
    )
    with netCDF4.Dataset(path, "a") as data:
        data["row_size"][:] = [9, 10]
    reading = read_files([path])
    assert reading.profiles is None
    assert "row_size: row sizes add up to 19, but 'obs' holds 18" in reading.set_aside[0].reason


def test_an_index_outside_the_profiles_is_refused(tmp_path):
    path = write_profiles(
        tmp_path / "p.nc", invented("indexed", "profile", [9, 9]), "indexed", "profile"
    )
    with netCDF4.Dataset(path, "a") as data:
        data["profile_index"][3] = 2
    with open_source(path) as source, pytest.raises(InputError, match="none of the 2 profiles"):
        find_geometry(source, recognise(source))


def test_one_bad_profile_does_not_stop_the_others(tmp_path):
    airs = invented("incomplete", "profile", [20, 20, 20])
    airs[1].rh = np.full(20, np.nan)
    path = write_profiles(tmp_path / "p.nc", airs, "incomplete", "profile")
    reading = read_files([path])
    assert_same(reading.profiles, [airs[0], airs[2]])
    (aside,) = reading.set_aside
    assert aside.reason == "profile 2 of 3: holds no relative humidity value: all 20 are missing"
