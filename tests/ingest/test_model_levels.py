"""Model columns: one atmosphere written in many layouts must give one and the same column."""

from __future__ import annotations

import time
from typing import Any

import netCDF4
import numpy as np
import pytest

from forecast.errors import InputError
from forecast.ingest import read_files, vertical
from forecast.ingest.assemble import LEVEL_NAMES, Column
from forecast.ingest.model_levels import TOP
from forecast.ingest.source import Source
from forecast.physics import moisture
from forecast.schema import QUALITY_FLAGS
from tests.ingest import model_files
from tests.ingest.model_files import PLACE, put, read, write_model


def assert_same(one: list[Column], other: list[Column], rtol: float = 0.0, but: str = "") -> None:
    """Columns equal in every value, bit for bit unless a tolerance is given."""
    assert len(one) == len(other) > 0
    for a, b in zip(one, other, strict=True):
        assert (a.time, a.lead_time, a.station, a.member) == (
            b.time,
            b.lead_time,
            b.station,
            b.member,
        )
        assert (a.latitude, a.longitude) == (b.latitude, b.longitude)
        for name in LEVEL_NAMES:
            if name != but:
                np.testing.assert_allclose(
                    getattr(a, name), getattr(b, name), rtol=rtol, err_msg=name
                )
        assert a.extras == pytest.approx(b.extras, rel=max(rtol, 1e-15))


# --- one atmosphere, many layouts -----------------------------------------------------------------


@pytest.fixture(scope="module")
def usual(tmp_path_factory) -> list[Column]:
    """Columns of the usual file: top first, interface tables, ps, 180-degree longitudes."""
    return read(write_model(tmp_path_factory.mktemp("model") / "usual.nc"))


def test_the_column_holds_the_atmosphere_that_was_written(usual):
    """Bilinear mixing gives linear fields exactly; p = a + b ps; heights are hydrostatic."""
    assert [str(c.time) for c in usual] == [
        "2031-05-20T12:00:00.000000000",
        "2031-05-20T13:00:00.000000000",
    ]
    assert [c.lead_time / np.timedelta64(1, "h") for c in usual] == [3.0, 4.0]
    a, b = model_files.coefficients()
    share = ((np.arange(40) + 0.5) / 40) ** 0.6
    for hour, column in enumerate(usual):
        assert (column.station, column.latitude, column.longitude) == PLACE[0]
        assert column.source_kind == "model" and column.source_file == "usual.nc"
        ps = model_files.surface_pressure(hour, 54.2, -3.1)
        assert column.extras["surface_air_pressure"] == pytest.approx(ps, rel=1e-14)
        assert column.extras["sea_surface_temperature"] == pytest.approx(285.1 + 0.62, rel=1e-14)
        half = (a + b * ps)[::-1]
        t = model_files.temperature(hour, share, 54.2, -3.1)[::-1]
        q = model_files.humidity(share)[::-1]
        n = column.height.size
        np.testing.assert_allclose(column.temperature, t[:n], rtol=1e-14)
        np.testing.assert_allclose(column.specific_humidity, q[:n], rtol=1e-14)
        np.testing.assert_allclose(column.pressure, 0.5 * (half[1:] + half[:-1])[:n], rtol=1e-14)
        np.testing.assert_array_equal(column.u, 3.0)
        # Heights by a sum over layers written out here: level k lies above all layers below it.
        tv = t * (1.0 + (1.0 / moisture.EPSILON - 1.0) * q)
        h = []
        for k in range(40):
            below = sum(tv[j] * np.log(half[j] / half[j + 1]) for j in range(k))
            ratio = half[k + 1] / (half[k] - half[k + 1])
            own = tv[k] * (1.0 - ratio * np.log(half[k] / half[k + 1]))
            h.append((below + own) * 287.05287 / 9.80665)
        expected = vertical.geometric_altitude(np.array(h), 54.2)
        assert n == (expected <= TOP).sum() < 40
        np.testing.assert_allclose(column.height, expected[:n], rtol=1e-12)
        # The ground's altitude is not in the file: it is not made up.
        assert np.isnan(column.surface_altitude) and np.isnan(column.altitude).all()
        assert (column.quality & QUALITY_FLAGS["height_from_hypsometry"]).all()


@pytest.mark.parametrize(
    "layout",
    [
        {"top_first": False},
        {"longitudes": model_files.LONGITUDES + 360.0},
        {"latitudes": model_files.LATITUDES[::-1]},
        {"longitudes": model_files.LONGITUDES[::-1]},
        {"order": ("lon", "lat", "time", "level")},
        {"order": ("level", "time", "lon", "lat")},
    ],
    ids=["bottom first", "0 to 360", "south first", "east first", "lon first", "level first"],
)
def test_order_of_axes_and_convention_of_longitude_do_not_matter(tmp_path, usual, layout):
    assert_same(read(write_model(tmp_path / "other.nc", **layout)), usual)


def test_logarithm_of_surface_pressure(tmp_path, usual):
    """lnsp is undone before mixing, so it gives what ps gives, to the rounding of exp(log x)."""
    assert_same(read(write_model(tmp_path / "lnsp.nc", surface="lnsp")), usual, rtol=1e-13)


def test_full_level_coefficients(tmp_path, usual):
    """ap, b of full levels: the same pressure; heights by the trapezoidal rule, not by layers.

    Where layers are thin the rules agree: within 0.1 m below 1 km. The topmost layer here spans
    a third of its pressure.
    """
    full = read(write_model(tmp_path / "full.nc", form="full"))
    assert_same(full, usual, rtol=1e-13, but="height")
    for a, b in zip(full, usual, strict=True):
        low = b.height < 1000.0
        np.testing.assert_allclose(a.height[low], b.height[low], atol=0.1)
        np.testing.assert_allclose(a.height, b.height, rtol=3e-3)
    assert_same(read(write_model(tmp_path / "p0.nc", form="p0")), full, rtol=1e-13)


def test_packed_values(tmp_path, usual):
    """scale_factor, add_offset and _FillValue are applied: within half a step of the packing."""
    assert_same(read(write_model(tmp_path / "packed.nc", packed=True)), usual, rtol=1e-9)


def test_interface_tables_without_unit_give_way_to_those_of_levels(tmp_path):
    """A whole, usable pair of coefficients comes before one with a problem."""
    path = write_model(tmp_path / "full.nc", form="full")
    expected = read(path)
    with netCDF4.Dataset(path, "a") as file:
        for name in ("hyai", "hybi"):
            file.createVariable(name, "f8", ("half",))[...] = 0.5
    assert_same(read(path), expected)


def test_lowest_levels_only_with_tables_for_all(tmp_path, usual):
    """Level numbers as coordinate say which coefficients belong to the levels kept."""
    cut = read(write_model(tmp_path / "cut.nc", kept_levels=slice(20, None)))
    for a, b in zip(cut, usual, strict=True):
        np.testing.assert_allclose(a.height, b.height[: a.height.size], rtol=1e-13)
        np.testing.assert_allclose(a.pressure, b.pressure[: a.height.size], rtol=1e-13)


def test_levels_missing_at_the_ground_leave_heights_right(tmp_path, usual):
    """Below the lowest layer kept the air has its temperature: 1 % of the gap at most."""
    cut = read(write_model(tmp_path / "cut.nc", kept_levels=slice(10, 36)))
    for a, b in zip(cut, usual, strict=True):
        np.testing.assert_allclose(a.pressure, b.pressure[4 : 4 + a.height.size], rtol=1e-13)
        np.testing.assert_allclose(
            a.height, b.height[4 : 4 + a.height.size], atol=0.01 * b.height[4]
        )


def test_nearest_takes_one_column_as_it_is(tmp_path):
    path = write_model(tmp_path / "model.nc")
    column = read(path, method="nearest")[0]
    assert (column.latitude, column.longitude) == (54.0, -3.0)
    assert_same(read(path, [("Harrow Point", 54.0, -3.0)])[:1], [column])


def test_without_places_every_column_of_a_small_file_is_a_station(tmp_path):
    columns = read(write_model(tmp_path / "model.nc", hours=1), None)
    assert len(columns) == 12
    assert columns[0].station == "lat 55.00 lon -4.00"
    assert columns[-1].station == "lat 53.50 lon -3.00"


def test_missing_sea_temperature_over_land_is_taken_from_the_sea_around(tmp_path):
    """One corner of four is land: the mean of the others, weighted as before."""
    holes = ((2, 1),)
    [column] = read(
        write_model(tmp_path / "m.nc", hours=1, sea_holes=holes), [("Cove", 54.1, -3.2)]
    )
    corners = {(54.5, -3.5): 0.08, (54.5, -3.0): 0.12, (54.0, -3.0): 0.48}
    expected = sum(
        w * (285.0 + 0.5 * (lat - 54.0) - 0.2 * lon) for (lat, lon), w in corners.items()
    ) / sum(corners.values())
    assert column.extras["sea_surface_temperature"] == pytest.approx(expected, rel=1e-12)
    inland = ((1, 1), (1, 2), (2, 1), (2, 2))
    [column] = read(
        write_model(tmp_path / "n.nc", hours=1, sea_holes=inland), [("Cove", 54.1, -3.2)]
    )
    assert "sea_surface_temperature" not in column.extras


def test_members_become_profiles(tmp_path):
    columns = read(write_model(tmp_path / "ens.nc", members=3, hours=2))
    assert sorted((c.member, int(c.lead_time / np.timedelta64(1, "h"))) for c in columns) == [
        (m, h) for m in range(3) for h in (3, 4)
    ]
    first = {c.member: c for c in columns if c.lead_time == np.timedelta64(3, "h")}
    np.testing.assert_allclose(first[2].temperature - first[0].temperature, 1.0, rtol=1e-12)
    profiles = read_files([tmp_path / "ens.nc"], points=PLACE).profiles
    assert profiles is not None and profiles.member.values.tolist() == [0, 1, 2, 0, 1, 2]


def test_lead_time_unknown_is_noted(tmp_path):
    notes: list[str] = []
    columns = read(write_model(tmp_path / "m.nc", reference=False), notes=notes)
    assert {c.lead_time for c in columns} == {np.timedelta64(0, "ns")}
    assert any("lead time" in note for note in notes)


# --- only what is needed is read ------------------------------------------------------------------


def test_only_the_columns_around_the_place_are_read(tmp_path, monkeypatch):
    sizes: list[int] = []
    whole = Source.read

    def counted(self: Source, name: str, index: Any = ...) -> np.ndarray:
        values = whole(self, name, index)
        sizes.append(values.size)
        return values

    path = write_model(
        tmp_path / "wide.nc",
        latitudes=np.linspace(60.0, 40.0, 81),
        longitudes=np.linspace(-20.0, 10.0, 121),
        hours=1,
    )
    monkeypatch.setattr(Source, "read", counted)
    far = [*PLACE, ("Far Skerry", 41.1, 9.3)]
    assert len(read(path, far)) == 2
    # 2 rows and 2 columns of the grid for each place, read as one box: of 9801 columns 16.
    assert max(sizes) <= max(16 * 40, 121)


def test_five_days_hourly_at_nine_points_take_less_than_two_seconds(tmp_path):
    """The bar of the job: 121 times, 137 levels, 3 × 3 points."""
    path = write_model(
        tmp_path / "big.nc", hours=121, levels=137, latitudes=model_files.LATITUDES[:3]
    )
    begin = time.perf_counter()
    columns = read(path, None)
    seconds = time.perf_counter() - begin
    assert len(columns) == 121 * 9
    assert seconds < 2.0


# --- bad input: one clear reason each -------------------------------------------------------------


@pytest.mark.parametrize(
    ("layout", "reason"),
    [
        ({"leave_out": ("q",)}, "no humidity on the levels"),
        ({"leave_out": ("hybi",)}, "nothing tells where the levels"),
        ({"leave_out": ("hyai", "hybi")}, "nothing tells where the levels"),
        ({"form": "full", "leave_out": ("b",)}, "no hybrid b recognised"),
        ({"surface": "none"}, "hybrid levels need the surface pressure"),
    ],
)
def test_what_is_missing_is_said(tmp_path, layout, reason):
    with pytest.raises(InputError, match=reason):
        read(write_model(tmp_path / "bad.nc", **layout))


def test_coefficients_that_do_not_fit(tmp_path):
    path = write_model(tmp_path / "bad.nc")
    with netCDF4.Dataset(path, "a") as file:
        file.createDimension("short", 12)
        for name, unit in (("s_a", "Pa"), ("s_b", "1")):
            put(file, name, ("short",), np.linspace(0.0, 1.0, 12), units=unit)
    names = {"hybrid_a_half": "s_a", "hybrid_b_half": "s_b"}
    with pytest.raises(InputError, match=r"12 interface coefficients do not fit the 40 levels"):
        read(path, names=names)
    with pytest.raises(InputError, match="holds 12 coefficients, hybi 41"):
        read(path, names={"hybrid_a_half": "s_a"})
    lone = write_model(tmp_path / "lone.nc", leave_out=("hybi",))
    with pytest.raises(InputError, match="no hybrid b half recognised"):
        read(lone, names={"hybrid_a_half": "hyai"})


def test_pressure_in_a_wrong_unit(tmp_path):
    """a in hPa declared as Pa cannot be told from the unit; the levels give it away."""
    path = write_model(tmp_path / "bad.nc", form="full", levels=8)
    with netCDF4.Dataset(path, "a") as file:
        file["ap"][:] = file["ap"][:] / 100.0
        file["b"][:] = file["b"][:] / 100.0
    with pytest.raises(InputError, match="levels have more than 90 hPa"):
        read(path)


def test_levels_without_end_are_refused_before_anything_is_read(tmp_path):
    path = tmp_path / "huge.nc"
    with netCDF4.Dataset(path, "w") as file:
        for name, size in (("time", 2), ("p", 10**9)):
            file.createDimension(name, size)
        put(file, "time", ("time",), [0, 6], units="hours since 2031-05-20", standard_name="time")
        for name, unit, standard in (
            ("t", "K", "air_temperature"),
            ("q", "kg kg-1", "specific_humidity"),
        ):
            variable = file.createVariable(
                name, "f4", ("time", "p"), chunksizes=(1, 1000), zlib=True
            )
            variable.setncatts({"units": unit, "standard_name": standard})
        variable = file.createVariable("p", "f4", ("p",), chunksizes=(1000,), zlib=True)
        variable.setncatts({"units": "Pa", "standard_name": "air_pressure"})
        put(file, "latitude", (), 54.2, units="degrees_north")
        put(file, "longitude", (), -3.1, units="degrees_east")
    begin = time.perf_counter()
    with pytest.raises(InputError, match=r"declares 1000000000 levels"):
        read(path, None)
    assert time.perf_counter() - begin < 5.0


def test_missing_values_are_told_by_place(tmp_path):
    """A column without humidity is refused with the reason, the other times are kept."""
    path = write_model(tmp_path / "holes.nc")
    with netCDF4.Dataset(path, "a") as file:
        file["q"][0] = np.nan
    columns = read(path)
    reasons = [item for item in columns if isinstance(item, InputError)]
    assert len(columns) == 2 and len(reasons) == 1
    assert "1 of 2 profiles at Harrow Point" in str(reasons[0])
    assert "humidity" in str(reasons[0])
    with netCDF4.Dataset(path, "a") as file:
        file["q"][...] = np.nan
    with pytest.raises(InputError, match="holds no specific humidity value"):
        read(path)


def test_doubtful_values_are_marked(tmp_path):
    """Negative humidity (spectral models ring) becomes dry air, absurd temperature is missing."""
    path = write_model(tmp_path / "odd.nc", hours=1)
    with netCDF4.Dataset(path, "a") as file:
        file["q"][:, -1] = -1.0e-6
        file["t"][:, -2] = 400.0
    [column] = read(path)
    assert column.specific_humidity[0] == 0.0
    assert column.quality[0] & QUALITY_FLAGS["humidity_out_of_range"]
    assert np.isnan(column.temperature[1])
    assert column.quality[1] & QUALITY_FLAGS["temperature_out_of_range"]
    assert column.quality[1] & QUALITY_FLAGS["value_missing"]


def test_place_outside_the_grid_is_refused_and_the_others_are_read(tmp_path):
    path = write_model(tmp_path / "model.nc")
    found = read(path, [*PLACE, ("Elsewhere", 10.0, 100.0)])
    assert [isinstance(item, InputError) for item in found] == [False, False, True]
    assert "Elsewhere" in str(found[2]) and "outside the grid" in str(found[2])
    reading = read_files([path], points=[("Elsewhere", 10.0, 100.0)])
    assert reading.profiles is None
    assert "latitude 53.50 to 55.00, longitude -4.00 to -3.00" in reading.set_aside[0].reason
    with pytest.raises(ValueError, match="bilinear or nearest"):
        read(path, method="cubic")


def test_optional_value_in_a_wrong_unit_is_left_out_and_noted(tmp_path):
    """Celsius declared as kelvin: the column is kept without it."""
    path = write_model(tmp_path / "model.nc")
    with netCDF4.Dataset(path, "a") as file:
        file["sst"][...] = 12.0
    reading = read_files([path], points=PLACE)
    assert reading.profiles is not None and "sea_surface_temperature" not in reading.profiles
    [note] = [note for note in reading.notes if "left out" in note]
    assert note.startswith("model.nc: sea surface temperature left out: sst: declared unit 'K'")
