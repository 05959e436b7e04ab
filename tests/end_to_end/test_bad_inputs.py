"""One bad file never stops the batch: each is named with one clear reason, the rest goes on."""

from __future__ import annotations

import json

import netCDF4
import numpy as np
import pytest
import xarray as xr

from forecast.cli import main
from tests.end_to_end.build import lay_out, write_ascent

HOSTILE = 'Cape <img src=x onerror=alert(1)>/../..\n"; DROP'


def declare_huge(path):
    """A file that declares 10^9 levels without holding them."""
    with netCDF4.Dataset(path, "w") as data:
        data.createDimension("time", 1_000_000_000)
        for name, unit, standard in (
            ("time", "seconds since 2031-05-01", "time"),
            ("alt", "m", "altitude"),
            ("pres", "hPa", "air_pressure"),
            ("temp", "K", "air_temperature"),
            ("rh", "%", "relative_humidity"),
        ):
            variable = data.createVariable(name, "f4", ("time",), chunksizes=(100_000,), zlib=True)
            variable.units = unit
            variable.standard_name = standard


@pytest.fixture(scope="module")
def batch(tmp_path_factory):
    """Good files and every kind of bad one, run once."""
    folder = tmp_path_factory.mktemp("bad")
    settings = lay_out(folder, slice(0, 2))
    inputs = folder / "in"
    whole = sorted(inputs.glob("vellory*.nc"))[0].read_bytes()
    (inputs / "bad_truncated.nc").write_bytes(whole[: len(whole) // 2])
    (inputs / "bad_text.nc").write_text("time,temp\n0,12\n")
    (inputs / "bad_empty.nc").write_bytes(b"")
    write_ascent(inputs / "bad_no_humidity.nc", 1, rh=None)
    write_ascent(inputs / "bad_all_nan.nc", 2, temp=np.full(120, np.nan))
    write_ascent(inputs / "bad_unit.nc", 3, units_temp="hogshead")
    write_ascent(inputs / "bad_no_unit.nc", 4, units_temp=None)
    write_ascent(inputs / "bad_lying_unit.nc", 5, units_temp="degC")
    write_ascent(inputs / "bad_calendar.nc", 6, calendar="moon")
    write_ascent(inputs / "bad_time_unit.nc", 6, units_time="fortnights after easter")
    declare_huge(inputs / "bad_huge.nc")
    write_ascent(inputs / "good_upside_down.nc", 8, reverse=True)
    write_ascent(inputs / "good_hostile.nc", 9, station=HOSTILE)
    write_ascent(inputs / "twin_a.nc", 10)
    write_ascent(inputs / "twin_b.nc", 10)
    code = main(["nightly", str(settings), "-q"])
    return folder, code, json.loads((folder / "out" / "run.json").read_text())


def reason(batch, name):
    found = [item["reason"] for item in batch[2]["set_aside"] if item["file"] == name]
    assert len(found) == 1, f"{name}: one clear message expected, found {found}"
    assert "\n" not in found[0]
    assert "unexpected" not in found[0]
    return found[0]


def test_the_rest_of_the_run_is_complete(batch):
    folder, code, record = batch
    assert code == 3
    with xr.open_dataset(folder / "out" / "outlook.nc") as outlook:
        files = set(outlook["source_file"].values)
    assert {"good_upside_down.nc", "good_hostile.nc"} <= files
    assert len(files) == 5  # two samples, two odd but good ones, one of the twins
    assert not any(name.startswith("bad") for name in files)
    assert len(record["inputs"]) == 17


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("bad_truncated.nc", "truncated"),
        ("bad_text.nc", "is text"),
        ("bad_empty.nc", "empty"),
        ("bad_no_humidity.nc", "humidity"),
        ("bad_all_nan.nc", "temperature"),
        ("bad_unit.nc", "hogshead"),
        ("bad_no_unit.nc", "unit"),
        ("bad_lying_unit.nc", "degC"),
        ("bad_calendar.nc", "moon"),
        ("bad_time_unit.nc", "fortnights after easter"),
        ("bad_huge.nc", "1000000000"),
    ],
)
def test_each_bad_file_has_one_clear_reason(batch, name, words):
    assert words.lower() in reason(batch, name).replace(",", "").lower()


def test_of_two_with_the_same_time_one_is_kept(batch):
    twins = [i for i in batch[2]["set_aside"] if i["file"].startswith("twin")]
    assert len(twins) == 1
    assert "duplicated time" in twins[0]["reason"]


def test_heights_upside_down_are_read_as_they_are_meant(batch):
    folder, _, _ = batch
    with xr.open_dataset(folder / "out" / "outlook.nc") as outlook:
        row = list(outlook["source_file"].values).index("good_upside_down.nc")
        other = list(outlook["source_file"].values).index("good_hostile.nc")
        np.testing.assert_allclose(
            outlook["modified_refractivity"].values[row],
            outlook["modified_refractivity"].values[other],
        )


def test_a_hostile_station_name_stays_text(batch):
    folder, _, _ = batch
    out = folder / "out"
    page = (out / "index.html").read_text()
    assert "<img src=x" not in page
    assert {p.suffix for p in out.iterdir() if p.is_file()} <= {
        ".png", ".svg", ".html", ".nc", ".json", ".csv", ".lock", "",
    }  # fmt: skip
    with xr.open_dataset(out / "outlook.nc") as outlook:
        stations = [str(s) for s in outlook["station"].values]
    assert not any("\n" in s for s in stations)


def test_a_hostile_station_cannot_choose_where_a_chart_lands(tmp_path):
    write_ascent(tmp_path / "a.nc", station="../../etc/<b>")
    out = tmp_path / "charts"
    assert main(["chart", str(tmp_path / "a.nc"), "-o", str(out), "--members", "8", "-q"]) == 0
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.nc", "charts"]
    assert all("/" not in p.name and "<" not in p.name for p in out.iterdir())
