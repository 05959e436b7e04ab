"""A batch with every kind of bad file in it: one clear message each, the rest complete."""

from __future__ import annotations

import time

import netCDF4
import numpy as np
import pytest

import forecast
from forecast import schema
from forecast.errors import InputError
from forecast.ingest import inspect_files, read_files
from forecast.ingest.assemble import Column, assemble, set_aside_duplicates, set_aside_oversize

from .make_files import EPOCH, make_air, write_ascent

HOSTILE = "<script>alert('x')</script>/../../etc\n\x1b[31mred\x00tail"


def write_zero_length(path):
    path.touch()


def write_text(path):
    path.write_text("PRES HGHT TEMP\n1000.0 110 21.4\n")


def write_truncated(path):
    write_ascent(path, make_air(3000))
    path.write_bytes(path.read_bytes()[:20_000])


def write_truncated_classic(path):
    write_ascent(path, make_air(3000), fmt="NETCDF3_CLASSIC", leave_out=["station_name"])
    path.write_bytes(path.read_bytes()[:-10_000])


def write_without_humidity(path):
    write_ascent(path, make_air(), leave_out=["rh"])


def write_all_nan(path):
    write_ascent(path, make_air(), values={"temp": np.full(60, np.nan)})


def write_unknown_units(path):
    write_ascent(path, make_air(), attrs={"pres": {"units": "furlongs"}})


def write_bad_calendar(path):
    write_ascent(path, make_air(), attrs={"time": {"calendar": "360_day"}})


def write_huge(path):
    """10⁹ declared levels in a file of some kilobytes."""
    with netCDF4.Dataset(path, "w") as data:
        data.featureType = "profile"
        data.createDimension("z", 10**9)
        for name, standard, units in (
            ("alt", "altitude", "m"),
            ("p", "air_pressure", "Pa"),
            ("t", "air_temperature", "K"),
            ("rh", "relative_humidity", "1"),
        ):
            variable = data.createVariable(name, "f4", ("z",), chunksizes=(1000,), zlib=True)
            variable.setncatts({"standard_name": standard, "units": units})
        for name, standard, units in (
            ("time", "time", EPOCH),
            ("lat", "latitude", "degrees_north"),
            ("lon", "longitude", "degrees_east"),
        ):
            variable = data.createVariable(name, "f8", ())
            variable.setncatts({"standard_name": standard, "units": units})
            variable[...] = 1.0


def write_huge_ascent(path):
    """The same with time as the way up."""
    with netCDF4.Dataset(path, "w") as data:
        data.createDimension("time", 10**9)
        for name, standard, units in (
            ("time", "time", EPOCH),
            ("alt", "altitude", "m"),
            ("p", "air_pressure", "Pa"),
            ("t", "air_temperature", "K"),
            ("rh", "relative_humidity", "1"),
            ("lat", "latitude", "degrees_north"),
            ("lon", "longitude", "degrees_east"),
        ):
            variable = data.createVariable(name, "f4", ("time",), chunksizes=(1000,))
            variable.setncatts({"standard_name": standard, "units": units})


def write_surface_series(path):
    """A day of a weather station: pressure and temperature in time, nothing rises."""
    air = make_air(288)
    air.z = np.full(288, 15.0)
    air.p = 1.0e5 + 150.0 * np.sin(np.arange(288) / 40.0)
    write_ascent(path, air)


def write_no_time(path):
    write_ascent(path, make_air(), values={"time": np.full(60, np.nan)})


def write_impossible_position(path):
    write_ascent(path, make_air(), values={"lat": np.full(60, np.nan)})


#: File name, writer, and what the one message must say.
BAD = [
    ("zero.nc", write_zero_length, "is empty (0 bytes)"),
    ("text.nc", write_text, "is text: expected netCDF"),
    ("cut.nc", write_truncated, "truncated"),
    ("cut3.nc", write_truncated_classic, "is truncated: "),
    ("dry.nc", write_without_humidity, "no humidity recognised: sought relative humidity"),
    ("nan.nc", write_all_nan, "holds no temperature"),
    ("units.nc", write_unknown_units, "pres: unit 'furlongs' does not convert to 'Pa'"),
    ("calendar.nc", write_bad_calendar, "time: calendar is '360_day'"),
    ("huge.nc", write_huge, "declares 1000000000 levels along 'z'; at most 200000"),
    ("huge2.nc", write_huge_ascent, "declares 1000000000 levels along 'time'; at most 200000"),
    ("series.nc", write_surface_series, "no vertical dimension: surface observations"),
    ("notime.nc", write_no_time, "time of the profile is missing"),
    ("nowhere.nc", write_impossible_position, "position of the profile is missing"),
    ("absent.nc", lambda path: None, "does not exist"),
]


@pytest.fixture(scope="module")
def batch(tmp_path_factory):
    folder = tmp_path_factory.mktemp("batch")
    good = []
    for i in range(4):
        air = make_air(50 + i, seed=i)
        air.time = air.time + np.timedelta64(6 * i, "h")
        good.append(write_ascent(folder / f"good{i}.nc", air))
    for name, write, _ in BAD:
        write(folder / name)
    return [*good, *(folder / name for name, _, _ in BAD)]


@pytest.fixture(scope="module")
def reading(batch):
    start = time.perf_counter()
    result = read_files(batch)
    assert time.perf_counter() - start < 20.0, "no bad file may hang the batch"
    return result


@pytest.mark.parametrize(("name", "said"), [(name, said) for name, _, said in BAD])
def test_each_bad_file_has_one_clear_message(reading, name, said):
    (aside,) = [item for item in reading.set_aside if item.file == name]
    assert said in aside.reason
    assert "unexpected" not in aside.reason, "bad input is foreseen, not caught by chance"
    assert aside.reason.isprintable() and len(aside.reason) < 700


def test_the_rest_of_the_batch_is_complete(reading):
    assert list(reading.profiles.source_file.values) == [f"good{i}.nc" for i in range(4)]
    assert len(reading.set_aside) == len(BAD)


def test_the_order_of_files_does_not_matter(batch, reading):
    again = read_files(batch[::-1])
    assert again.profiles.identical(reading.profiles)
    assert again.set_aside == reading.set_aside and again.notes == reading.notes


def test_inspect_tells_the_same(batch, reading):
    reports = inspect_files(batch)
    refused = {r.file: r.refused for r in reports if r.refused}
    assert refused == {item.file: [item.reason] for item in reading.set_aside}


def test_progress_is_told_for_each_file(batch):
    seen = []
    read_files(batch[:3], progress=lambda *told: seen.append(told))
    assert seen == [(0, 3, "good0.nc"), (1, 3, "good1.nc"), (2, 3, "good2.nc"), (3, 3, "")]


def test_a_readers_own_fault_does_not_stop_the_batch(batch, monkeypatch):
    from forecast.ingest import dispatch

    true = dispatch.read_columns

    def faulty(source, *rest):
        if source.name == "good1.nc":
            raise KeyError("tdry")
        return true(source, *rest)

    monkeypatch.setattr(dispatch, "read_columns", faulty)
    reading = read_files(batch[:3])
    assert [item.reason for item in reading.set_aside] == ["unexpected: KeyError: 'tdry'"]
    assert reading.profiles.sizes["profile"] == 2


def test_open_profiles_warns_of_what_is_set_aside(batch):
    with pytest.warns(UserWarning, match="set aside zero.nc: is empty"):
        profiles = forecast.open_profiles([batch[0], batch[4]])
    assert profiles.sizes["profile"] == 1


def test_open_profiles_raises_when_nothing_is_usable(batch):
    with pytest.raises(InputError, match=r"^zero.nc: is empty \(0 bytes\)"):
        forecast.open_profiles(batch[4])
    with pytest.raises(InputError, match=r"no profile can be used: text\.nc: is text.*zero\.nc"):
        forecast.open_profiles(batch[4:6])
    with pytest.raises(InputError, match="no files given"):
        forecast.open_profiles([])


def test_dataset_follows_the_schema(reading):
    profiles = reading.profiles
    assert profiles.height.dims == ("profile", "level")
    for name in profiles.variables:
        assert profiles[name].attrs == schema.attributes(str(name))
    assert profiles.time.dtype == "datetime64[ns]" and profiles.lead_time.dtype == "timedelta64[ns]"
    assert profiles.quality.dtype == np.int32
    assert (profiles.lead_time == np.timedelta64(0)).all()
    assert (profiles.source_kind == "ascent").all()
    assert "member" not in profiles.coords and "visibility" not in profiles


def test_levels_rise_and_the_rest_is_padding(reading):
    height = reading.profiles.height.values
    for row, levels in zip(height, (50, 51, 52, 53), strict=True):
        assert (np.diff(row[:levels]) > 0.0).all()
        assert np.isnan(row[levels:]).all()


def test_hostile_station_names_are_kept_as_printable_text(tmp_path):
    air = make_air(station=HOSTILE)
    profiles = forecast.open_profiles(write_ascent(tmp_path / "a.nc", air))
    name = profiles.station.item()
    assert name.startswith("<script>alert('x')</script>/../../etc\\n\\x1b[31mred")
    assert name.isprintable()


def test_longitudes_of_either_kind(tmp_path):
    """0 to 360 and −180 to 180 are the same places; the dataset has the latter."""
    paths = []
    for i, longitude in enumerate((329.5, -30.5, 180.0)):
        air = make_air(longitude=longitude, station=f"s{i}")
        paths.append(write_ascent(tmp_path / f"{i}.nc", air))
    np.testing.assert_allclose(
        read_files(paths).profiles.longitude.values, [-30.5, -30.5, -180.0], atol=1e-9
    )


def test_of_duplicated_times_the_fullest_is_kept(tmp_path):
    full, thin = make_air(60), make_air(25)
    a = write_ascent(tmp_path / "a.nc", thin)
    b = write_ascent(tmp_path / "b.nc", full)
    other = write_ascent(tmp_path / "c.nc", make_air(25, station="Skerry Light"))
    reading = read_files([a, b, other])
    assert list(reading.profiles.source_file.values) == ["b.nc", "c.nc"]
    (aside,) = reading.set_aside
    assert aside.file == "a.nc"
    assert aside.reason == (
        "duplicated time 2031-03-04T05:30:00Z at station Port Ander: the profile in b.nc with 60 "
        "usable levels is kept, one with 25 is not"
    )


def test_no_files_give_no_profiles():
    reading = read_files([])
    assert reading.profiles is None and reading.set_aside == []


def column(levels=3, **changes):
    height = np.linspace(0.0, 100.0, levels)
    full = np.full(levels, 1.0)
    base = {
        "time": np.datetime64("2031-03-04", "ns"),
        "latitude": 1.0,
        "longitude": 2.0,
        "station": "s",
        "source_file": "f.nc",
        "height": height,
        "altitude": height,
        "pressure": 1e5 * full,
        "temperature": 280.0 * full,
        "specific_humidity": 0.01 * full,
        "u": full,
        "v": full,
        "quality": np.zeros(levels, np.int32),
    }
    return Column(**{**base, **changes})


def test_assemble_orders_rows_and_keeps_members_and_extras():
    late = column(station="a", time=np.datetime64("2031-03-05", "ns"), member=2)
    early = column(station="a", extras={"visibility": 8000.0}, levels=5)
    profiles = assemble([column(station="b"), late, early])
    assert list(profiles.station.values) == ["a", "a", "b"]
    assert list(profiles.time.values.astype("datetime64[D]").astype(str)) == [
        "2031-03-04",
        "2031-03-05",
        "2031-03-04",
    ]
    assert list(profiles.member.values) == [-1, 2, -1]
    np.testing.assert_array_equal(profiles.visibility.values, [8000.0, np.nan, np.nan])
    assert profiles.sizes == {"profile": 3, "level": 5}


def test_members_and_lead_times_are_no_duplicates():
    columns = [
        column(member=0),
        column(member=1),
        column(member=0, lead_time=np.timedelta64(6, "h")),
        column(member=0, source_kind="model"),
    ]
    kept, dropped = set_aside_duplicates(columns)
    assert len(kept) == 4 and dropped == []


def test_a_giant_profile_does_not_blow_up_the_padding(monkeypatch):
    monkeypatch.setattr("forecast.ingest.assemble.MAX_PADDED_VALUES", 100)
    columns = [column(3), column(90, source_file="giant.nc"), column(4)]
    kept, dropped = set_aside_oversize(columns)
    assert [c.height.size for c in kept] == [3, 4]
    assert dropped[0][0] == "giant.nc" and "90 levels" in dropped[0][1]
