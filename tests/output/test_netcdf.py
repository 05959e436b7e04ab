"""outlook.nc must be valid CF, hold the outlook's numbers, and be the same bytes every time."""

from __future__ import annotations

import numpy as np
import xarray as xr

from forecast.output.netcdf import write_outlook

STAMP = "2031-05-04T03:02:01Z"


def test_the_numbers_come_back(case, tmp_path):
    outlook, _, _ = case
    write_outlook(outlook, tmp_path / "o.nc", STAMP)
    with xr.open_dataset(tmp_path / "o.nc", decode_timedelta=True) as back:
        for name in outlook.data_vars:
            expected, found = outlook[name].values, back[name].values
            if expected.dtype.kind == "i" and found.dtype.kind == "f":
                # xarray turns the fill value -1 into NaN on reading.
                expected = np.where(expected == -1, np.nan, expected)
            np.testing.assert_array_equal(found, expected, err_msg=str(name))
        np.testing.assert_array_equal(back["time"].values, outlook["time"].values)
        np.testing.assert_array_equal(back["lead_time"].values, outlook["lead_time"].values)
        assert list(back["site"].values) == list(outlook["site"].values)
        assert back.attrs["Conventions"] == "CF-1.11"
        assert "Never point optics near the Sun" in back.attrs["caution"]
        assert back.attrs["history"].startswith(STAMP)


def test_every_variable_says_what_it_is(case, tmp_path):
    outlook, _, _ = case
    write_outlook(outlook, tmp_path / "o.nc", STAMP)
    with xr.open_dataset(tmp_path / "o.nc", decode_cf=False) as raw:
        for name in raw.data_vars:
            assert raw[name].attrs.get("long_name") or name.startswith("sightline_"), name


def test_differences_of_temperature_are_told_from_temperatures(case, tmp_path):
    # CF-1.11 section 3.1.2: 1 K of difference is 1 degC, 1 K on the scale is not.
    outlook, _, _ = case
    write_outlook(outlook, tmp_path / "o.nc", STAMP)
    with xr.open_dataset(tmp_path / "o.nc", decode_cf=False) as raw:
        kinds = {
            name: raw[name].attrs["units_metadata"].removeprefix("temperature: ")
            for name in raw.variables
            if raw[name].attrs.get("units") == "K"
        }
    for name in ("air_temperature", "joined_air_temperature"):
        assert kinds.pop(name) == "on_scale"
    assert set(kinds) == {"near_ground_warming", "air_sea_temperature_difference"}
    assert set(kinds.values()) == {"difference"}


def test_two_writings_are_the_same_bytes_and_only_the_stamp_differs(case, tmp_path):
    outlook, _, _ = case
    write_outlook(outlook, tmp_path / "a.nc", STAMP)
    write_outlook(outlook, tmp_path / "b.nc", STAMP)
    write_outlook(outlook, tmp_path / "c.nc", STAMP.replace("2031", "2032"))
    assert (tmp_path / "a.nc").read_bytes() == (tmp_path / "b.nc").read_bytes()
    with xr.open_dataset(tmp_path / "a.nc") as a, xr.open_dataset(tmp_path / "c.nc") as c:
        stamps = {k for k in a.attrs if a.attrs[k] != c.attrs[k]}
        assert stamps == {"history", "date_created"}
        assert a.drop_attrs(deep=False).identical(c.drop_attrs(deep=False))


def test_it_passes_the_cf_checker(case, tmp_path):
    # Reference: IOOS compliance-checker, CF 1.11 rules.
    from compliance_checker.runner import CheckSuite, ComplianceChecker

    outlook, _, _ = case
    write_outlook(outlook, tmp_path / "o.nc", STAMP)
    CheckSuite.load_all_available_checkers()
    report = tmp_path / "report.json"
    passed, errors = ComplianceChecker.run_checker(
        str(tmp_path / "o.nc"), ["cf:1.11"], 0, "normal", output_filename=str(report),
        output_format="json",
    )  # fmt: skip
    assert not errors
    assert passed, report.read_text()
