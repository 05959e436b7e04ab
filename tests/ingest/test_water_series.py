"""Series of water temperature: gaps stay gaps, units are believed only where the values agree."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.errors import InputError
from forecast.ingest.water_series import WaterSeries, read_water_series

START = np.datetime64("2031-05-01T00:00:00", "s")
HOUR = np.timedelta64(3600, "s")

CSV = """# buoy of the cape, invented
time,sea_surface_temperature_c,wind_speed [m/s]
2031-05-01T00:00:00Z,11.0,4.0
2031-05-01T02:00:00+02:00,99.0,9.0
2031-05-01T02:00:00Z,12.0,MM

2031-05-01T01:00:00,,5.0
2031-05-01T20:00:00Z,14.0,6.0
2031-05-01T21:00:00Z,2000,7.0
"""


def write(tmp_path, text, name="series.csv"):
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return path


def series(hours, kelvin, wind=None):
    values = np.asarray(kelvin, dtype=float)
    blowing = np.full(values.shape, np.nan) if wind is None else np.asarray(wind, dtype=float)
    return WaterSeries(START + np.asarray(hours) * HOUR, values, blowing)


def test_a_csv_is_sorted_converted_and_its_faults_counted(tmp_path):
    # 02:00+02:00 is midnight UTC again (the first stays); no water has 99 or 2000 degC.
    water = read_water_series(write(tmp_path, CSV))
    assert water.time.tolist() == (START + np.array([0, 1, 2, 20, 21]) * HOUR).tolist()
    np.testing.assert_allclose(water.temperature, [284.15, np.nan, 285.15, 287.15, np.nan])
    np.testing.assert_allclose(water.wind, [4.0, 5.0, np.nan, 6.0, 7.0])
    assert water.refused == 2


def test_linear_in_time_and_nothing_beyond_the_tolerance():
    water = series([0, 2, 30], [284.0, 286.0, 290.0], [4.0, 6.0, 8.0])
    hours = np.array([-7, -6, 0, 1, 2, 8, 9, 23, 24, 30, 36, 37])
    temperature, wind = water.at(START + hours * HOUR)
    expected = [np.nan, 284, 284, 285, 286, 286, np.nan, np.nan, 290, 290, 290, np.nan]
    np.testing.assert_allclose(temperature, expected)
    # Wind speaks for an hour only.
    np.testing.assert_allclose(wind[[1, 3, 5, 9]], [np.nan, 5.0, np.nan, 8.0])
    temperature, _ = water.at(START + hours * HOUR, 15 * HOUR)
    assert np.isfinite(temperature).all()


def test_missing_values_and_times_are_passed_over():
    water = series([0, 1, 2], [284.0, np.nan, 286.0])
    when = np.array([START + HOUR, np.datetime64("NaT", "s")])
    temperature, wind = water.at(when)
    np.testing.assert_allclose(temperature, [285.0, np.nan])
    assert np.isnan(wind).all()


@given(
    st.lists(st.integers(0, 2000), min_size=1, max_size=30, unique=True).map(sorted),
    st.integers(-500, 2500),
    st.integers(0, 400),
)
def test_an_answer_lies_between_its_neighbours_and_only_near_one(minutes, asked, reach):
    minute = np.timedelta64(60, "s")
    values = 280.0 + np.random.default_rng(len(minutes)).uniform(0.0, 10.0, len(minutes))
    water = WaterSeries(START + np.array(minutes) * minute, values, values * np.nan)
    answer, _ = water.at(START + asked * minute, reach * minute)
    distance = np.abs(np.array(minutes) - asked)
    assert np.isfinite(answer) == (distance.min() <= reach)
    if np.isfinite(answer):
        left, right = np.searchsorted(minutes, asked, "right") - 1, np.searchsorted(minutes, asked)
        near = values[[max(left, 0), min(right, len(minutes) - 1)]]
        assert near.min() - 1e-9 <= answer <= near.max() + 1e-9


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("time,sst_k\n2031-05-01,11.2\n2031-05-02,11.9\n", "contradicts.*look like degC"),
        ("time,sst [degC]\n2031-05-01,284.2\n", "contradicts.*look like K"),
        ("time,sst\n2031-05-01,11.2\n", "has no unit"),
        ("time,sst_c,wind_speed\n2031-05-01,11.2,3\n", "wind_speed: has no unit"),
        ("time,sst [parsec]\n2031-05-01,11.2\n", "unit"),
        ("when,sst_c\n2031-05-01,11.2\n", "no column of times; the header names when, sst_c"),
        ("time,air_c\n2031-05-01,11.2\n", "no column of water temperatures"),
        ("time,sst_c\nyesterday,11.2\n", "line 2: 'yesterday' is no time"),
        ("time,sst_c\n2031-05-01,warm\n", "line 2: 'warm' is no number"),
        ("time,sst_c\n2031-05-01,11,2\n", "line 2 has 3 cells; the header has 2"),
        ("time,sst_c\n2031-05-01,MM\n", "every value is missing"),
        ("time,sst_c\n", "every value is missing"),
        ("", "no column of times; the header names nothing"),
    ],
)
def test_a_wrong_csv_is_a_clear_error(tmp_path, text, words):
    with pytest.raises(InputError, match=words) as caught:
        read_water_series(write(tmp_path, text))
    assert caught.value.source == "series.csv"


def test_a_file_that_is_not_there_or_no_text(tmp_path):
    with pytest.raises(InputError, match="cannot be read"):
        read_water_series(tmp_path / "none.csv")
    (tmp_path / "b.csv").write_bytes(b"time,sst_c\n2031-05-01,\xff11\n")
    with pytest.raises(InputError, match="UTF-8"):
        read_water_series(tmp_path / "b.csv")


def netcdf(tmp_path, values, unit, dims=("time",), **attrs):
    import netCDF4

    path = tmp_path / "buoy.nc"
    with netCDF4.Dataset(path, "w") as file:
        values = np.asarray(values, dtype=float)
        for name, size in zip(dims, values.shape, strict=True):
            file.createDimension(name, size)
        time = file.createVariable("time", "f8", ("time",))
        time.units = "hours since 2031-05-01 00:00:00"
        time[:] = np.arange(values.shape[0])
        water = file.createVariable(attrs.pop("name", "t0"), "f8", dims, fill_value=-999.0)
        if unit:
            water.units = unit
        for key, value in attrs.items():
            water.setncattr(key, value)
        water[:] = np.ma.masked_invalid(values)
        wind = file.createVariable("wind", "f4", ("time",))
        wind.standard_name, wind.units = "wind_speed", "knots"
        wind[:] = 10.0
    return path


@pytest.mark.parametrize("unit", ["K", "degree_Celsius"])
def test_netcdf_is_found_by_standard_name(tmp_path, unit):
    kelvin = np.array([[284.0], [np.nan], [286.0]])
    values = kelvin if unit == "K" else kelvin - 273.15
    path = netcdf(
        tmp_path, values, unit, ("time", "station"), standard_name="sea_water_temperature"
    )
    water = read_water_series(path)
    np.testing.assert_allclose(water.temperature, kelvin[:, 0])
    np.testing.assert_allclose(water.wind, 10.0 * 1852.0 / 3600.0)
    assert water.time[2] == START + 2 * HOUR


@pytest.mark.parametrize(
    ("values", "unit", "dims", "name", "words"),
    [
        ([11.0, 12.0], "K", ("time",), "sst", "contradicts.*look like degC"),
        ([285.0, 286.0], "degC", ("time",), "sst", "contradicts.*look like K"),
        ([11.0, 12.0], "", ("time",), "sst", "has no unit"),
        ([[11.0, 12.0]] * 2, "degC", ("time", "x"), "sst", "2 x 2; expected one value for each"),
        ([11.0, 12.0], "degC", ("time",), "air", "holds no water temperature"),
    ],
)
def test_a_wrong_netcdf_is_a_clear_error(tmp_path, values, unit, dims, name, words):
    with pytest.raises(InputError, match=words):
        read_water_series(netcdf(tmp_path, values, unit, dims, name=name))


def buoy_text(name):
    """Text of a recorded reply of a buoy service among the tests of siphon 0.11.0 (PyPI)."""
    import base64
    import re

    from tests.open_data import open_data

    text = (open_data("siphon") / "tests" / "fixtures" / name).read_text(encoding="utf-8")
    (body,) = re.findall(r"string: !!binary \|\n((?: {8}\S+\n)+)", text)
    return base64.b64decode(body).decode("ascii")


def test_a_real_buoy_series_goes_through(tmp_path):
    # 45 days of buoy 41002, every ten minutes, latest first, "MM" for missing.
    header, _, *rows = (line.split() for line in buoy_text("ndbc_realtime_txt").splitlines())
    water, wind = header.index("WTMP"), header.index("WSPD")
    lines = ["time,water_temperature [degC],wind_speed [m/s]"] + [
        f"{r[0]}-{r[1]}-{r[2]}T{r[3]}:{r[4]}:00Z,{r[water]},{r[wind]}" for r in rows
    ]
    read = read_water_series(write(tmp_path, "\n".join(lines)))
    given_ = np.array([np.nan if r[water] == "MM" else float(r[water]) for r in rows])
    assert len(rows) > 6000 and np.isnan(given_).sum() > 100
    assert read.time.size == len(rows) and (np.diff(read.time) > np.timedelta64(0, "s")).all()
    np.testing.assert_allclose(read.temperature, given_[::-1] + 273.15)
    assert read.refused == 0
    temperature, blowing = read.at(read.time)
    assert np.isfinite(temperature).all()
    assert np.isfinite(blowing).mean() > 0.9
