"""Only whole netCDF files are opened, nothing large is read unasked, times are real times."""

from __future__ import annotations

import os

import netCDF4
import numpy as np
import pytest

from forecast.errors import InputError
from forecast.ingest.classic_header import declared_length
from forecast.ingest.source import MAX_VALUES, open_source
from forecast.ingest.times import decode_times

from .make_files import make_air, write_ascent

FORMATS = ("NETCDF4", "NETCDF4_CLASSIC", "NETCDF3_CLASSIC", "NETCDF3_64BIT_OFFSET")


def refusal(path) -> str:
    with pytest.raises(InputError) as caught, open_source(path):
        pass
    text = str(caught.value)
    assert text.startswith(path.name)
    assert str(path.parent) not in text, "a message names the file, not the machine's folders"
    assert "\n" not in text
    return text


def classic(tmp_path, fmt="NETCDF3_CLASSIC", unlimited=False):
    path = tmp_path / "classic.nc"
    with netCDF4.Dataset(path, "w", format=fmt) as data:
        data.title = "a header"
        data.createDimension("time", None if unlimited else 500)
        data.createDimension("three", 3)
        for name, kind, dims in (
            ("a", "f8", ("time",)),
            ("b", "i2", ("time", "three")),
            ("c", "f4", ("three",)),
        ):
            variable = data.createVariable(name, kind, dims)
            shape = [500 if d == "time" else 3 for d in dims]
            variable[:] = np.ones(shape)
    return path


def test_missing_file(tmp_path):
    assert "does not exist" in refusal(tmp_path / "no.nc")


def test_empty_file(tmp_path):
    path = tmp_path / "empty.nc"
    path.touch()
    assert "is empty (0 bytes)" in refusal(path)


def test_text_renamed(tmp_path):
    path = tmp_path / "listing.nc"
    path.write_text("PRES HGHT TEMP\n1000.0 110 21.4\n")
    text = refusal(path)
    assert "is text" in text and "PRES HGHT" in text


@pytest.mark.parametrize("head", [b"\x1f\x8b\x08\x00\x00", b"GRIB\x00\x00\x01\x02", b"\x00" * 64])
def test_other_kinds_of_file(tmp_path, head):
    path = tmp_path / "other.nc"
    path.write_bytes(head * 40)
    assert "not a netCDF file" in refusal(path)


def test_folder_and_pipe_are_not_opened(tmp_path):
    assert "is a folder" in refusal(tmp_path)
    pipe = tmp_path / "pipe.nc"
    os.mkfifo(pipe)
    # Opening a pipe that nobody writes to would wait for ever.
    assert "no regular file" in refusal(pipe)


def test_no_permission(tmp_path, monkeypatch):
    path = write_ascent(tmp_path / "a.nc", make_air())

    def refuse(self, *args, **kwargs):
        raise PermissionError(13, "Permission denied")

    # The suite may run as root, whom no mode bits stop.
    monkeypatch.setattr(type(path), "open", refuse)
    assert "permission denied" in refusal(path)


@pytest.mark.parametrize("keep", [0.02, 0.3, 0.6, 0.95])
@pytest.mark.parametrize("fmt", FORMATS)
def test_truncated_file(tmp_path, fmt, keep):
    """Cut anywhere, in every format: refused on opening or on reading, never read as zeros."""
    whole = write_ascent(tmp_path / "whole.nc", make_air(3000), fmt="NETCDF4") if (
        fmt == "NETCDF4"
    ) else classic(tmp_path, fmt)  # fmt: skip
    data = whole.read_bytes()
    path = tmp_path / "cut.nc"
    path.write_bytes(data[: int(keep * len(data))])
    assert "truncated" in refusal(path)


@pytest.mark.parametrize("unlimited", [False, True])
@pytest.mark.parametrize("fmt", ["NETCDF3_CLASSIC", "NETCDF3_64BIT_OFFSET", "NETCDF3_64BIT_DATA"])
def test_declared_length_is_that_of_the_file(tmp_path, fmt, unlimited):
    """The library itself writes files of the declared length, but for at most three pad bytes."""
    path = classic(tmp_path, fmt, unlimited)
    with path.open("rb") as stream:
        declared = declared_length(stream)
    assert 0 <= path.stat().st_size - declared <= 3
    with open_source(path) as source:
        assert source.read("a").sum() == 500.0


def test_lone_record_variable_is_not_padded(tmp_path):
    """Records of a single two-byte variable follow each other without padding (format spec)."""
    path = tmp_path / "lone.nc"
    with netCDF4.Dataset(path, "w", format="NETCDF3_CLASSIC") as data:
        data.createDimension("time", None)
        data.createVariable("a", "i2", ("time",))[:] = np.arange(301)
    with path.open("rb") as stream:
        assert 0 <= path.stat().st_size - declared_length(stream) <= 3


def test_a_huge_declared_variable_is_refused_before_reading(tmp_path):
    path = tmp_path / "huge.nc"
    with netCDF4.Dataset(path, "w") as data:
        data.createDimension("level", 10**9)
        data.createVariable("t", "f8", ("level",), chunksizes=(1024,))
    assert path.stat().st_size < 100_000
    with open_source(path) as source:
        with pytest.raises(InputError, match=f"declares 1000000000 values; at most {MAX_VALUES}"):
            source.read("t")
        assert source.read("t", (slice(0, 5),)).shape == (5,), "a part can be read"


def test_a_giant_chunk_is_not_unpacked(tmp_path):
    """Ten values in a chunk of 10⁸: reading one would cost the memory of all."""
    path = tmp_path / "chunk.nc"
    with netCDF4.Dataset(path, "w") as data:
        data.createDimension("time", None)
        data.createVariable("a", "f8", ("time",), chunksizes=(10,))[:] = np.ones(10)
        data.createVariable("b", "f8", ("time",), chunksizes=(10**8,))
    with open_source(path) as source:
        assert source.read("a").size == 10
        with pytest.raises(InputError, match="stored in chunks of 100000000 values"):
            source.read("b")


def test_missing_values_are_nan_and_packing_is_undone(tmp_path):
    path = tmp_path / "packed.nc"
    with netCDF4.Dataset(path, "w") as data:
        data.createDimension("x", 4)
        variable = data.createVariable("t", "i2", ("x",), fill_value=-32768)
        variable.setncatts({"scale_factor": 0.5, "add_offset": 10.0, "valid_min": np.int16(-100)})
        variable.set_auto_maskandscale(False)
        variable[:] = [0, 7, -32768, -200]
    with open_source(path) as source:
        np.testing.assert_array_equal(source.read("t"), [10.0, 13.5, np.nan, np.nan])


def test_text_is_made_printable_and_short(tmp_path):
    path = tmp_path / "text.nc"
    with netCDF4.Dataset(path, "w") as data:
        data.createDimension("n", 1)
        data.comment = "x" * 1_000_000
        data.createVariable("s", str, ("n",))[:] = np.array(["a\n\x1b[31m" + "y" * 500], object)
    with open_source(path) as source:
        (text,) = source.read_text("s")
        assert text.isprintable() and len(text) <= 100
        assert len(source.attrs["comment"]) <= 10_000


# --- time -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "units", "calendar", "expected"),
    [
        (0, "seconds since 1970-1-1 0:00:00 0:00", None, "1970-01-01T00:00:00"),
        (1.5, "hours since 2031-03-01", "standard", "2031-03-01T01:30:00"),
        (90, "minutes since 2031-03-01 00:00:00 +02:00", "gregorian", "2031-02-28T23:30:00"),
        (0.25, "days since 2031-03-01", "proleptic_gregorian", "2031-03-01T06:00:00"),
        (1e9, "seconds since 1970-01-01 00:00:00 UTC", None, "2001-09-09T01:46:40"),
        # Days since year 1 count the ten days left out in 1582 only in the mixed calendar:
        # 1 January of year 1 lies two days apart in the two.
        (730485, "days since 0001-01-01", "proleptic_gregorian", "2001-01-01T00:00:00"),
        (730487, "days since 0001-01-01", "standard", "2001-01-01T00:00:00"),
        (500, "milliseconds since 2031-03-01", None, "2031-03-01T00:00:00.5"),
    ],
)
def test_times(value, units, calendar, expected):
    (time,) = decode_times([value], units, calendar)
    assert time == np.datetime64(expected)


def test_times_agree_with_cftime():
    """Independent: cftime's own conversion, one date at a time."""
    import cftime

    units, hours = "hours since 1900-01-01 00:00:00.0", np.arange(1e6, 1.2e6, 12345.75)
    ours = decode_times(hours, units, "standard")
    for time, hour in zip(ours, hours, strict=True):
        assert time == np.datetime64(cftime.num2date(hour, units).isoformat())


def test_missing_time_is_nat():
    assert np.isnat(decode_times([np.nan], "hours since 2031-03-01", None)).all()


@pytest.mark.parametrize(
    ("units", "calendar", "said"),
    [
        ("hours since 2031-03-01", "360_day", "calendar is '360_day'"),
        ("hours since 2031-03-01", "noleap", "real nights"),
        ("hours since 2031-03-01", "moon", "expected one of standard"),
        ("seconds since launchtime", None, "reference date"),
        ("hours", None, "expected 'seconds since <date>'"),
        (None, None, "unit of time is 'None'"),
        ("months since 2031-03-01", None, "expected 'seconds since <date>'"),
        ("hours since 2031-13-41", None, "reference date"),
        ("hours since 99999-01-01", None, "1678 to 2261"),
    ],
)
def test_bad_times_say_what_was_found(units, calendar, said):
    with pytest.raises(InputError) as caught:
        decode_times([1.0], units, calendar, source="a.nc", variable="time")
    assert said in str(caught.value)
    assert str(caught.value).startswith("a.nc: time: ")


def test_times_beyond_nanoseconds_are_refused():
    with pytest.raises(InputError, match="1678 to 2261"):
        decode_times([1e12], "hours since 2031-03-01", None)
