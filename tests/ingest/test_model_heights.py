"""Model columns on pressure levels and on levels of height, against closed forms."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import pytest

from forecast.errors import InputError
from forecast.ingest import vertical
from forecast.physics import moisture
from forecast.schema import QUALITY_FLAGS
from tests.ingest.model_files import put, read

PRESSURES = np.array([1000.0, 900.0, 700.0, 500.0])
SCALE = 287.05287 / 9.80665 * 280.0 * (1.0 + (1.0 / moisture.EPSILON - 1.0) * 0.004)


def put_pressure_levels(
    file: netCDF4.Dataset,
    dims: tuple[str, ...] = ("time", "p"),
    *,
    heights: str = "geopotential",
    ps: float | None = 950.0,
    ground: float | None = None,
) -> None:
    """Isothermal moist air at 280 K on pressure levels; 1013.25 hPa is sea level."""
    shape = tuple(len(file.dimensions[d]) for d in dims)
    put(file, "p", ("p",), PRESSURES, units="hPa", standard_name="air_pressure", positive="down")
    put(file, "latitude", (), 54.2, units="degrees_north")
    put(file, "longitude", (), 356.9, units="degrees_east")
    put(file, "t", dims, np.full(shape, 280.0), units="K", standard_name="air_temperature")
    put(file, "q", dims, np.full(shape, 4.0), units="g kg-1", standard_name="specific_humidity")
    h = np.broadcast_to(SCALE * np.log(1013.25 / PRESSURES), shape)
    forms = {
        "geopotential": (h * 9.80665, "m2 s-2"),
        "geopotential_height": (h, "gpm"),
        "altitude": (vertical.geometric_altitude(h, 54.2), "m"),
    }
    if heights:
        values, units = forms[heights]
        put(file, "z", dims, values, units=units, standard_name=heights)
    if ps is not None:
        put(
            file,
            "sp",
            dims[:1],
            np.full(shape[0], ps),
            units="hPa",
            standard_name="surface_air_pressure",
        )
    if ground is not None:
        put(file, "zs", (), ground, units="m", standard_name="surface_altitude")


def pressure_file(path: Path, **options: Any) -> Path:
    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("time", 2)
        file.createDimension("p", 4)
        put(file, "time", ("time",), [0, 6], units="hours since 2031-05-20", standard_name="time")
        put_pressure_levels(file, **options)
    return path


@pytest.mark.parametrize("heights", ["geopotential", "geopotential_height", "altitude"])
def test_pressure_levels_above_ground_found_from_surface_pressure(tmp_path, heights):
    """Closed form, isothermal air: the ground lies where p = ps, levels under it are left out."""
    for column in read(pressure_file(tmp_path / "p.nc", heights=heights), None):
        ground = vertical.geometric_altitude(SCALE * np.log(1013.25 / 950.0), 54.2)
        altitude = vertical.geometric_altitude(SCALE * np.log(1013.25 / PRESSURES[1:] * 1.0), 54.2)
        assert column.surface_altitude == pytest.approx(float(ground), abs=1e-6)
        np.testing.assert_allclose(column.altitude, altitude, rtol=1e-12)
        np.testing.assert_allclose(column.height, altitude - ground, atol=1e-6)
        np.testing.assert_array_equal(column.pressure, 100.0 * PRESSURES[1:])
        assert column.quality[0] & QUALITY_FLAGS["gap_near_ground"]
        assert column.longitude == -3.1


def test_pressure_levels_with_orography(tmp_path):
    """Ground at 1000 m: the 900 hPa level at 975 m is under it, whatever the surface pressure."""
    options = {"ps": None, "ground": 1000.0}
    column = read(pressure_file(tmp_path / "p.nc", **options), None)[0]
    assert column.pressure.tolist() == [7.0e4, 5.0e4]
    np.testing.assert_allclose(column.altitude - column.height, 1000.0)
    assert column.surface_altitude == 1000.0


def test_pressure_levels_without_any_ground_are_noted(tmp_path):
    notes: list[str] = []
    column = read(pressure_file(tmp_path / "p.nc", ps=None), None, notes=notes)[0]
    assert column.height.size == 4 and np.isnan(column.surface_altitude)
    np.testing.assert_array_equal(column.height, column.altitude)
    assert any("count from mean sea level" in note for note in notes)


def test_pressure_levels_without_heights(tmp_path):
    """Closed form: H = Rd Tv / g0 ln(ps/p) over the ground."""
    column = read(pressure_file(tmp_path / "p.nc", heights=""), None)[0]
    expected = vertical.geometric_altitude(SCALE * np.log(950.0 / PRESSURES[1:]), 54.2)
    np.testing.assert_allclose(column.height, expected, rtol=1e-12)
    assert (column.quality & QUALITY_FLAGS["height_from_hypsometry"]).all()
    with pytest.raises(InputError, match="needs the surface pressure"):
        read(pressure_file(tmp_path / "n.nc", heights="", ps=None), None)


HUMIDITY_FORMS = {
    "specific_humidity": "kg kg-1",
    "relative_humidity": "1",
    "dew_point_temperature": "K",
    "humidity_mixing_ratio": "kg kg-1",
    "water_vapor_partial_pressure_in_air": "Pa",
}


def height_file(path: Path, form: str = "specific_humidity", kind: str = "height") -> Path:
    """Levels of height without pressure, isothermal, q = 4 g/kg, ground at 200 m, 980 hPa."""
    z = np.array([10.0, 100.0, 1000.0, 4000.0])
    above = z if kind == "height" else z - 200.0
    h = vertical.geopotential_height(200.0 + above, 54.2) - vertical.geopotential_height(
        200.0, 54.2
    )
    p = 9.8e4 * np.exp(-h / SCALE)
    q = 0.004
    e = moisture.vapour_pressure_from_specific_humidity(q, p)
    low, high = np.full(4, 200.0), np.full(4, 300.0)
    for _ in range(60):
        middle = 0.5 * (low + high)
        wet = moisture.specific_humidity_from_dew_point(middle, p) > q
        low, high = np.where(wet, low, middle), np.where(wet, middle, high)
    values = {
        "specific_humidity": np.full(4, q),
        "relative_humidity": moisture.relative_humidity(q, 280.0, p),
        "dew_point_temperature": low,
        "humidity_mixing_ratio": np.full(4, q / (1.0 - q)),
        "water_vapor_partial_pressure_in_air": e,
    }[form]
    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("time", 1)
        file.createDimension("z", 4)
        put(file, "time", ("time",), [0], units="hours since 2031-05-20", standard_name="time")
        put(file, "z", ("z",), z, units="m", standard_name=kind, positive="up", axis="Z")
        put(file, "latitude", (), 54.2, units="degrees_north")
        put(file, "longitude", (), -3.1, units="degrees_east")
        put(
            file,
            "t",
            ("time", "z"),
            np.full((1, 4), 280.0),
            units="K",
            standard_name="air_temperature",
        )
        put(file, "m", ("time", "z"), values[None], units=HUMIDITY_FORMS[form], standard_name=form)
        put(file, "sp", ("time",), [980.0], units="hPa", standard_name="surface_air_pressure")
        put(file, "zs", (), 200.0, units="m", standard_name="surface_altitude")
    return path


@pytest.mark.parametrize("form", HUMIDITY_FORMS)
def test_levels_of_height_without_pressure(tmp_path, form):
    """Closed form, isothermal: p = ps exp(−H/scale); humidity in any measure gives the same."""
    [column] = read(height_file(tmp_path / "z.nc", form), None)
    h = vertical.geopotential_height(200.0 + column.height, 54.2)
    h -= vertical.geopotential_height(200.0, 54.2)
    np.testing.assert_array_equal(column.height, [10.0, 100.0, 1000.0, 4000.0])
    np.testing.assert_array_equal(column.altitude, column.height + 200.0)
    np.testing.assert_allclose(column.pressure, 9.8e4 * np.exp(-h / SCALE), rtol=1e-10)
    np.testing.assert_allclose(column.specific_humidity, 0.004, rtol=1e-8)


def test_levels_of_altitude_without_pressure(tmp_path):
    [column] = read(height_file(tmp_path / "z.nc", kind="altitude"), None)
    np.testing.assert_allclose(column.height, [800.0, 3800.0])
    np.testing.assert_allclose(column.altitude, [1000.0, 4000.0])
    expected = read(height_file(tmp_path / "h.nc"), None)[0]
    assert column.pressure[0] == pytest.approx(
        np.exp(np.interp(800.0, expected.height, np.log(expected.pressure))), rel=1e-4
    )


# --- dimensions ---------------------------------------------------------------------------------


@pytest.mark.parametrize("with_reference", [True, False])
def test_start_and_step_as_two_dimensions(tmp_path, with_reference):
    """Runs × steps: valid time is the sum, lead time the step."""
    path = tmp_path / "runs.nc"
    with netCDF4.Dataset(path, "w") as file:
        for name, size in (("run", 2), ("step", 3), ("p", 4)):
            file.createDimension(name, size)
        name = "forecast_reference_time" if with_reference else "time"
        put(file, "run", ("run",), [0, 12], units="hours since 2031-05-20", standard_name=name)
        put(file, "step", ("step",), [0, 90, 180], units="minutes", standard_name="forecast_period")
        put_pressure_levels(file, ("run", "step", "p"))
    columns = read(path, None)
    got = [(str(c.time)[:16], int(c.lead_time / np.timedelta64(1, "m"))) for c in columns]
    assert got == [
        (f"2031-05-20T{run + minutes // 60:02d}:{minutes % 60:02d}", minutes)
        for run in (0, 12)
        for minutes in (0, 90, 180)
    ]


def test_start_and_step_of_one_value_beside_a_valid_time(tmp_path):
    """Where the file says which time is valid, the other one is the start of the run."""
    path = tmp_path / "step.nc"
    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("p", 4)
        since = {"units": "hours since 2031-05-20", "standard_name": "time"}
        put(file, "time", (), 0, **since)
        put(file, "valid_time", (), 9, **since)
        put(file, "step", (), 9, units="hours", standard_name="forecast_period")
        put_pressure_levels(file, ("p",), ps=None)
    [column] = read(path, None)
    assert str(column.time)[:16] == "2031-05-20T09:00"
    assert column.lead_time == np.timedelta64(9, "h")


def test_further_dimension_is_named(tmp_path):
    path = tmp_path / "bad.nc"
    with netCDF4.Dataset(path, "w") as file:
        for name, size in (("time", 1), ("tile", 3), ("p", 4)):
            file.createDimension(name, size)
        put(file, "time", ("time",), [0], units="hours since 2031-05-20", standard_name="time")
        put_pressure_levels(file, ("time", "tile", "p"))
    with pytest.raises(InputError, match="t has a further dimension tile"):
        read(path, None)
