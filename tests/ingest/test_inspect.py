"""The report on a file: what is taken for what, resolution, flags, refusals."""

from __future__ import annotations

import json

import numpy as np
import pytest

from forecast.errors import InputError
from forecast.ingest import inspect_files

from .make_files import make_air, write_ascent
from .test_reading import HOSTILE


def even_air():
    """Levels every 20 m from the ground."""
    air = make_air(151)
    fine = make_air(2)
    air.z = 12.0 + 20.0 * np.arange(151.0)
    air.t = 288.0 - 6.0e-3 * (air.z - 12.0)
    air.p = fine.p[0] * (air.t / 288.0) ** (9.80665 / (287.05 * 6.0e-3))
    air.rh = np.linspace(0.8, 0.5, 151)
    air.u, air.v = np.zeros(151), np.zeros(151)
    return air


def test_report_on_an_ascent(tmp_path):
    air = even_air()
    air.rh[3] = 1.2
    (report,) = inspect_files([write_ascent(tmp_path / "a.nc", air)])
    assert report.refused == [] and report.kind == "soundings"
    assert (report.profiles, report.levels) == (1, 151)
    assert report.first_time == report.last_time == "2031-03-04T05:30:00Z"
    assert report.stations == ["Port Ander"]
    # 16 levels from 0 to 300 m.
    assert report.lowest_level == 0.0 and report.near_ground_spacing == pytest.approx(20.0)
    assert report.flags == {"supersaturation": 1}
    rows = {row["role"]: row for row in report.taken}
    assert rows["air_temperature"] == {
        "role": "air_temperature",
        "variable": "temp",
        "how": "CF standard_name air_temperature",
        "units": "degC",
        "units_after": "K",
        "dims": "time",
    }
    assert "humidity is taken from relative humidity" in report.notes


def test_text_for_people(tmp_path):
    (report,) = inspect_files([write_ascent(tmp_path / "a.nc", even_air())])
    text = report.to_text()
    lines = text.splitlines()
    assert lines[0] == "a.nc  (soundings)"
    line = next(line for line in lines if line.split()[:1] == ["air_pressure"])
    assert line.split()[1:4] == ["pres", "hPa", "Pa"]
    assert "first level at 0.0 m, one level per 20.0 m in the lowest 300 m" in text
    assert "quality flags (levels): none" in text


def test_json_round_trip(tmp_path):
    reports = inspect_files([write_ascent(tmp_path / "a.nc", even_air()), tmp_path / "no.nc"])
    for report in reports:
        assert json.loads(json.dumps(report.to_dict(), allow_nan=False)) == report.to_dict()


def test_what_would_be_refused_and_why(tmp_path):
    path = write_ascent(tmp_path / "a.nc", even_air(), attrs={"rh": {"units": None}})
    (report,) = inspect_files([path])
    assert report.profiles == 0
    assert report.refused == [
        "rh: has no unit; '1' or one that converts to it is expected; set it, for example "
        'names.relative_humidity = "rh [1]"'
    ]
    assert report.problems == report.refused
    assert "REFUSED: rh: has no unit" in report.to_text()


def test_the_users_names_are_applied_and_told(tmp_path):
    path = write_ascent(tmp_path / "a.nc", even_air(), attrs={"rh": {"units": None}})
    (report,) = inspect_files([path], names={"relative_humidity": "rh [%]"})
    assert report.refused == [] and report.profiles == 1
    row = next(row for row in report.taken if row["role"] == "relative_humidity")
    assert (row["how"], row["units"]) == ("user, unit set by the user", "%")


def test_faults_in_names_are_raised(tmp_path):
    with pytest.raises(InputError, match="is no role"):
        inspect_files([tmp_path / "a.nc"], names={"humidity": "rh"})


def test_hostile_text_stays_on_its_line(tmp_path):
    air = even_air()
    air.station = HOSTILE
    path = write_ascent(tmp_path / "a.nc", air, attrs={"temp": {"units": HOSTILE}})
    (report,) = inspect_files([path])
    assert all(line.isprintable() for line in report.to_text().splitlines())
    path = write_ascent(tmp_path / "b.nc", air)
    (report,) = inspect_files([path])
    assert all(line.isprintable() for line in report.to_text().splitlines())
    assert report.stations[0].startswith("<script>")
