"""Real soundings are read, and every other real netCDF file is refused for the right reason.

The files are the open data that ``scripts/fetch_open_data.py`` fetches; values are compared with
an independent reading through xarray and arithmetic in the test.
"""

from __future__ import annotations

import time

import numpy as np
import pytest
import xarray as xr

from forecast.ingest import inspect_files, open_profiles, read_files
from forecast.physics.moisture import saturation_vapour_pressure
from forecast.schema import QUALITY_FLAGS
from tests.open_data import open_data

#: Darwin ascents of January 2006 cut short of their values, and which are left.
CUT_SHORT = {
    "twpsondewnpnC3.b1.20060119.050300.custom.cdf": "temperature and relative humidity values are",
    "twpsondewnpnC3.b1.20060119.163300.custom.cdf": "temperature and relative humidity values are",
    "twpsondewnpnC3.b1.20060120.043800.custom.cdf": "relative humidity value is",
    "twpsondewnpnC3.b1.20060120.170800.custom.cdf": "temperature and relative humidity values are",
}


@pytest.fixture(scope="module")
def arm():
    return sorted((open_data("act_atmos") / "act" / "tests" / "data").iterdir())


@pytest.fixture(scope="module")
def sondes(arm):
    found = [path for path in arm if "sondewnpn" in path.name]
    assert len(found) == 25
    return found


@pytest.fixture(scope="module")
def reading(sondes):
    return read_files(sondes)


def test_every_ascent_is_read_or_refused_for_the_right_reason(reading):
    assert reading.profiles.sizes["profile"] == 21
    assert {item.file for item in reading.set_aside} == set(CUT_SHORT)
    for item in reading.set_aside:
        assert item.reason.startswith(f"only the first {CUT_SHORT[item.file]} present of ")


def test_reading_is_quick(sondes):
    """24 ascents of some thousand levels: well under the 4 s allowed for them."""
    start = time.perf_counter()
    read_files(sondes)
    assert time.perf_counter() - start < 4.0


def test_values_equal_an_independent_reading(sondes, reading):
    profiles = reading.profiles
    for path in sondes:
        if path.name in CUT_SHORT:
            continue
        row = profiles.isel(profile=list(profiles.source_file.values).index(path.name))
        with xr.open_dataset(path, decode_times=True) as raw:
            start = raw.time.values[0]
            t, p, rh, z = (raw[n].values.astype(float) for n in ("tdry", "pres", "rh", "alt"))
            lat, lon = float(raw.lat[0]), float(raw.lon[0])
        assert row.time.values == start
        np.testing.assert_allclose([row.latitude, row.longitude], [lat, lon], atol=1e-6)
        assert row.station.item().startswith(path.name[:3])
        assert row.surface_altitude == pytest.approx(z[0])
        ascent = slice(0, int(np.nanargmax(z)) + 1)
        n = ascent.stop
        np.testing.assert_allclose(row.air_pressure.values[:n], 100.0 * p[ascent], rtol=1e-6)
        for i in (0, 1, 17, n // 2, n - 1):
            flags = int(row.quality.values[i])
            if flags & (QUALITY_FLAGS["value_missing"] | QUALITY_FLAGS["spike"]):
                continue
            assert row.air_temperature.values[i] == pytest.approx(t[i] + 273.15, abs=1e-4)
            # Own arithmetic: e = RH es, q = ε e / (p − (1 − ε) e), ε = 0.62198.
            e = 0.01 * rh[i] * saturation_vapour_pressure(t[i] + 273.15, 100.0 * p[i])
            q = 0.62198 * e / (100.0 * p[i] - 0.37802 * e)
            assert row.specific_humidity.values[i] == pytest.approx(q, rel=1e-4, abs=1e-12)


def test_heights_rise_although_some_stall_in_the_files(reading):
    """20060123.1117 and 20060124.1717 hold 120 and 147 steps that do not rise."""
    profiles = reading.profiles
    for row in profiles.height.values:
        known = row[np.isfinite(row)]
        assert (np.diff(known) > 0.0).all() and known.size > 500
    stalled = {}
    bits = QUALITY_FLAGS["duplicate_level"] | QUALITY_FLAGS["height_not_monotonic"]
    for name, quality in zip(profiles.source_file.values, profiles.quality.values, strict=True):
        stalled[name] = int(np.count_nonzero(quality & bits))
    # The last steps of a file may lie after its highest level and are then left out.
    assert 100 <= stalled["twpsondewnpnC3.b1.20060123.111700.custom.cdf"] <= 120
    assert 100 <= stalled["twpsondewnpnC3.b1.20060124.171700.custom.cdf"] <= 147
    assert stalled["twpsondewnpnC3.b1.20060119.112000.custom.cdf"] == 0


def test_missing_temperatures_stay_as_levels_with_a_mark(reading):
    """20060122.1718: 82 of 1934 temperatures are missing."""
    profiles = reading.profiles
    names = list(profiles.source_file.values)
    row = profiles.isel(profile=names.index("twpsondewnpnC3.b1.20060122.171800.custom.cdf"))
    marked = (row.quality.values & QUALITY_FLAGS["value_missing"]) != 0
    assert marked.sum() == 82
    assert np.isnan(row.air_temperature.values[marked]).all()
    assert np.isfinite(row.height.values[marked]).all()


def test_pressure_temperature_and_height_agree_in_real_ascents(reading):
    """The hydrostatic check is loose enough for sound ascents: under 1 % of levels marked."""
    quality = reading.profiles.quality.values
    height = reading.profiles.height.values
    marked = (quality & QUALITY_FLAGS["hydrostatic_mismatch"]) != 0
    assert marked.sum() < 0.01 * np.isfinite(height).sum()


def test_every_other_file_is_refused_as_no_profile(arm):
    others = [p for p in arm if "sondewnpn" not in p.name and p.suffix in (".nc", ".cdf")]
    assert len(others) >= 45
    reading = read_files(others)
    assert reading.profiles is None
    reasons = {item.file: item.reason for item in reading.set_aside}
    assert set(reasons) == {path.name for path in others}
    for name, reason in reasons.items():
        assert "unexpected" not in reason, name
        assert reason.startswith(("no vertical dimension: surface", "no air temperature recog")), (
            f"{name}: {reason}"
        )
    for series in (
        "maraosmetM1.a1.20180201.000000.nc",
        "sgpmetE13.b1.20190101.000000.cdf",
        "marirtsstM1.b1.20190320.000000.nc",
        "marnavM1.a1.20180201.000000.nc",
    ):
        assert reasons[series].startswith("no vertical dimension: surface")


def test_trade_wind_ascent_as_trajectory():
    """Dims (trajectory=1, levels=5783); the launch time itself is missing, an attribute has it."""
    path = open_data("eurec4a_snd") / "eurec4a_snd" / "examples" / "data" / "example_mw41.nc"
    row = open_profiles(path).isel(profile=0)
    with xr.open_dataset(path, decode_times=False) as raw:
        raw = raw.isel(trajectory=0).load()
    # Attributes date_YYYYMMDD 20190218 and time_of_launch_HHmmss 204124.
    assert row.time.values == np.datetime64("2019-02-18T20:41:24")
    assert row.station == "Barbados Cloud Observatory (BCO)"
    assert row.surface_altitude == 20.0, "attribute surface_altitude = '20 m'"
    assert row.height.values[0] == pytest.approx(float(raw.altitude[0]) - 20.0)
    assert row.longitude == pytest.approx(float(raw.longitude[0]), abs=1e-5)
    for i in (0, 100, 2500, 5700):
        assert row.air_pressure.values[i] == pytest.approx(100.0 * float(raw.pressure[i]), rel=1e-6)
        assert row.air_temperature.values[i] == pytest.approx(
            float(raw.temperature[i]) + 273.15, abs=1e-4
        )
        # The file's own mixing ratio, of the instrument's maker: 1 % of it.
        w = 1e-3 * float(raw.mixingRatio[i])
        if w > 1e-3:
            assert row.specific_humidity.values[i] == pytest.approx(w / (1.0 + w), rel=0.01)


def test_files_of_other_packages_are_read_or_refused():
    """Model columns are read (their tests stand elsewhere); fields without profiles are not."""
    expected = {
        "20260901000000_kumpula_meps_ml.nc": None,
        "20260101_kumpula_gdas1.nc": None,
        "20260901000000_kumpula_meps_sfc.nc": "no vertical dimension",
        "era5_r360x180.nc": "no vertical dimension",
        "era5_2t_1.nc": "no vertical dimension",
        "era5_2t_2.nc": "no vertical dimension",
        "test_single.nc": "no vertical dimension",
        "test.nc": "no vertical dimension",
        "cordex.nc": "no air temperature recognised",
        "hovexp_vert_area.nc": "t has a further dimension time",
        "test4.nc": "humidity",
        "test6.nc": "humidity",
        "tuv_pl.nc": "humidity",
    }
    paths = [
        path
        for name in ("model_munger", "airseafluxcode", "earthkit-data")
        for path in sorted(open_data(name).rglob("*.nc"))
    ]
    assert {path.name for path in paths} == set(expected)
    for path, report in zip(paths, inspect_files(paths), strict=True):
        said = expected[path.name]
        if said is None:
            assert report.refused == [] and report.profiles > 0, path.name
        else:
            (reason,) = report.refused
            assert said in reason and "unexpected" not in reason, f"{path.name}: {reason}"
