"""Ground under a path: what is read is what the file says, and what is wrong is told."""

from __future__ import annotations

import netCDF4
import numpy as np
import pytest
from pyproj import Geod

from forecast.errors import InputError
from forecast.ingest.terrain import read_terrain

OBSERVER, TARGET = (46.0, -27.0), (46.2, -26.6)
DISTANCE = Geod(ellps="WGS84").inv(OBSERVER[1], OBSERVER[0], TARGET[1], TARGET[0])[2]


def table(tmp_path, text):
    path = tmp_path / "ridge.csv"
    path.write_text(text, encoding="utf-8")
    return path


def grid(tmp_path, height=None, *, longitude=None, units="m", standard="surface_altitude"):
    """Elevation by latitude and longitude: a tilted plane unless given."""
    path = tmp_path / "land.nc"
    latitude = np.arange(45.9, 46.31, 0.01)
    longitude = np.arange(-27.1, -26.49, 0.01) if longitude is None else longitude
    if height is None:
        height = 100.0 * (latitude[:, None] - 45.0) + 50.0 * (longitude[None, :] % 360.0 - 332.0)
    with netCDF4.Dataset(path, "w") as data:
        for name, values in (("lat", latitude), ("lon", longitude)):
            data.createDimension(name, values.size)
            axis = data.createVariable(name, "f8", (name,))
            axis.standard_name = {"lat": "latitude", "lon": "longitude"}[name]
            axis[:] = values
        variable = data.createVariable("z", "f8", ("lat", "lon"), fill_value=-9999.0)
        variable.setncatts({"standard_name": standard, "units": units})
        variable[:] = np.ma.masked_invalid(height)
    return path


@pytest.mark.parametrize(
    "text",
    [
        "# a ridge\ndistance_km,height_m\n0,2\n10.5,140\n20,0\n",
        "distance_m, height_m, note\n0, 2, shore\n10500, 140, crest\n20000, 0, quay\n",
    ],
)
def test_a_table_is_read_as_it_stands(tmp_path, text):
    ground = read_terrain(table(tmp_path, text), 20e3)
    np.testing.assert_array_equal(ground.distance, [0.0, 10500.0, 20e3])
    np.testing.assert_array_equal(ground.height, [2.0, 140.0, 0.0])


def test_a_table_that_misses_the_ends_by_little_reaches_them(tmp_path):
    ground = read_terrain(table(tmp_path, "distance_km,height_m\n0.1,5\n19.9,7\n"), 20e3)
    assert (ground.distance[0], ground.distance[-1]) == (0.0, 20e3)


@pytest.mark.parametrize("units", ["m", "km", "ft"])
@pytest.mark.parametrize("shift", [0.0, 360.0])
def test_a_grid_is_sampled_along_the_geodesic(tmp_path, units, shift):
    metres = {"m": 1.0, "km": 1000.0, "ft": 0.3048}[units]
    longitude = np.arange(-27.1, -26.49, 0.01) + shift
    latitude = np.arange(45.9, 46.31, 0.01)
    plane = 100.0 * (latitude[:, None] - 45.0) + 50.0 * (longitude[None, :] % 360.0 - 332.0)
    path = grid(tmp_path, plane / metres, longitude=longitude, units=units)
    ground = read_terrain(path, DISTANCE, OBSERVER, TARGET)
    assert ground.distance[-1] == pytest.approx(DISTANCE)
    # Points as dense as the grid's latitudes.
    assert np.max(np.diff(ground.distance)) <= 0.01 * 111.3e3
    geod = Geod(ellps="WGS84")
    azimuth, _, _ = geod.inv(OBSERVER[1], OBSERVER[0], TARGET[1], TARGET[0])
    for at, height in zip(ground.distance[::7], ground.height[::7], strict=True):
        east, north, _ = geod.fwd(OBSERVER[1], OBSERVER[0], azimuth, at)
        # Bilinear interpolation of a plane is the plane.
        assert height == pytest.approx(100.0 * (north - 45.0) + 50.0 * (east % 360.0 - 332.0))


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("distance,height\n0,1\n20,1\n", "expected distance_km,height_m"),
        ("distance_km,height_m\n0,1\n20,x\n", "line 3: found '20,x'; expected two numbers"),
        ("distance_km,height_m\n0,1\n", "has 1 points"),
        ("distance_km,height_m\n0,1\n12,4\n8,4\n20,1\n", "line 4: the distance falls"),
        ("distance_km,height_m\n0,1\n12,\n20,1\n", "has no height at 12.00 km"),
        ("distance_km,height_m\n0,1\n12,nan\n20,1\n", "has no height at 12.00 km"),
        ("distance_km,height_m\n0,1\n15,1\n", "reaches from 0 to 15 km; expected 0 to 20 km"),
        ("distance_km,height_m\n0,1\n20,12000\n", "heights from 1 to 12000 m"),
        ("", "of an empty file"),
    ],
)
def test_what_is_wrong_with_a_table_is_told(tmp_path, text, words):
    with pytest.raises(InputError) as caught:
        read_terrain(table(tmp_path, text), 20e3)
    assert words in str(caught.value)
    assert "ridge.csv" in str(caught.value)


def test_what_is_wrong_with_a_grid_is_told(tmp_path):
    def reason(path, *places):
        with pytest.raises(InputError) as caught:
            read_terrain(path, DISTANCE, *places)
        return str(caught.value)

    assert "observer and target" in reason(grid(tmp_path))
    far = (46.2, -25.0)
    assert "covers longitude" in reason(grid(tmp_path), OBSERVER, far)
    holed = np.full((42, 62), 20.0)
    holed[25:, 30:] = np.nan
    assert "has no height at" in reason(grid(tmp_path, holed), OBSERVER, TARGET)
    assert "furlong" in reason(grid(tmp_path, units="furlongs per fortnight"), OBSERVER, TARGET)
    assert "cannot be read" in reason(tmp_path / "none.csv")
    broken = tmp_path / "cut.nc"
    broken.write_bytes(grid(tmp_path).read_bytes()[:600])
    assert "damaged or truncated" in reason(broken, OBSERVER, TARGET)
    noise = tmp_path / "noise.csv"
    noise.write_bytes(b"\xff\xfe\x00\x01")
    assert "neither netCDF nor UTF-8" in reason(noise)
