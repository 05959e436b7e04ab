"""Ground under a path: what is read is what the file says, and what is wrong is told."""

from __future__ import annotations

import netCDF4
import numpy as np
import pytest
from pyproj import Geod

from forecast.errors import InputError
from forecast.ingest.source import Source
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


def test_what_lies_behind_observer_and_target_is_no_part_of_the_path(tmp_path):
    text = "distance_km,height_m\n-2,7\n2,11\n19,40\n21,60\n30,\n40,30000\n"
    ground = read_terrain(table(tmp_path, text), 20e3)
    # Linear between the points on both sides of each end.
    np.testing.assert_allclose(ground.distance, [0.0, 2e3, 19e3, 20e3])
    np.testing.assert_allclose(ground.height, [9.0, 11.0, 40.0, 50.0])


def test_a_table_that_stops_just_short_goes_on_level_and_moves_no_crest(tmp_path):
    ground = read_terrain(table(tmp_path, "distance_m,height_m\n150,90\n300,2\n19900,7\n"), 20e3)
    np.testing.assert_array_equal(ground.distance, [0.0, 150.0, 300.0, 19900.0, 20e3])
    np.testing.assert_array_equal(ground.height, [90.0, 90.0, 2.0, 7.0, 7.0])


def test_a_cliff_is_two_heights_at_one_distance(tmp_path):
    ground = read_terrain(table(tmp_path, "distance_km,height_m\n0,2\n9,2\n9,80\n20,0\n"), 20e3)
    np.testing.assert_array_equal(ground.distance, [0.0, 9e3, 9e3, 20e3])


def plane(latitude, longitude):
    """A tilted plane, which bilinear interpolation gives back as it is; longitudes near 0."""
    return 100.0 * (latitude - 45.0) + 50.0 * longitude


@pytest.mark.parametrize(
    "fold", ["0..360", "-180..180", "both ends", "falling latitude", "lon first"]
)
def test_a_path_over_the_prime_meridian_finds_its_way_in_any_grid(tmp_path, fold):
    """The seam of a grid that counts 0 to 360 lies right under the path."""
    latitude = np.arange(45.8, 46.41, 0.05)
    longitude = np.arange(-180.0, 180.0, 0.25)
    if fold == "0..360":
        longitude = np.arange(0.0, 360.0, 0.25)
    elif fold == "both ends":
        longitude = np.arange(0.0, 360.01, 0.25)
    elif fold == "falling latitude":
        latitude = latitude[::-1]
    signed = np.mod(longitude + 180.0, 360.0) - 180.0
    # Far off the path nothing may matter: heights there are no land's.
    height = np.where(np.abs(signed) < 2.0, plane(latitude[:, None], signed), 3e4)
    path = tmp_path / "world.nc"
    with netCDF4.Dataset(path, "w") as data:
        for name, values in (("lat", latitude), ("lon", longitude)):
            data.createDimension(name, values.size)
            data.createVariable(name, "f8", (name,))[:] = values
        dims = ("lon", "lat") if fold == "lon first" else ("lat", "lon")
        variable = data.createVariable("z", "f4", dims)
        variable.units = "m"
        variable[:] = height.T if fold == "lon first" else height
    west, east = (46.0, -0.6), (46.2, 0.7)
    geod = Geod(ellps="WGS84")
    azimuth, _, distance = geod.inv(west[1], west[0], east[1], east[0])
    ground = read_terrain(path, distance, west, east)
    places = [geod.fwd(west[1], west[0], azimuth, at)[:2] for at in ground.distance]
    expected = [plane(north, along) for along, north in places]
    np.testing.assert_allclose(ground.height, expected, atol=1e-3)
    # The step of the finer axis, here that of latitude: 0.05° are 5.6 km.
    assert 4.5e3 < np.max(np.diff(ground.distance)) <= 0.05 * 111.3e3


def test_long_paths_read_only_what_lies_along_them(tmp_path):
    """A fine grid of 3001 × 3001 is read in windows; the plane comes out all the same."""
    side = np.linspace(0.0, 1.0, 3001)
    path = tmp_path / "fine.nc"
    with netCDF4.Dataset(path, "w") as data:
        for name, values in (("lat", 45.0 + side), ("lon", side)):
            data.createDimension(name, values.size)
            data.createVariable(name, "f8", (name,))[:] = values
        variable = data.createVariable("z", "f4", ("lat", "lon"))
        variable.units = "m"
        variable[:] = plane(45.0 + side[:, None], side)
    ends = (45.02, 0.03), (45.98, 0.97)
    geod = Geod(ellps="WGS84")
    azimuth, _, distance = geod.inv(ends[0][1], ends[0][0], ends[1][1], ends[1][0])
    taken = []
    read = Source.read

    def counted(self, name, index=...):
        values = read(self, name, index)
        taken.append(values.size)
        return values

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(Source, "read", counted)
        ground = read_terrain(path, distance, *ends)
    assert ground.distance.size > 3001
    assert sum(taken) < 0.2 * 3001**2
    for k in (0, 777, 2048, -1):
        along, north, _ = geod.fwd(ends[0][1], ends[0][0], azimuth, ground.distance[k])
        assert ground.height[k] == pytest.approx(plane(north, along), abs=1e-3)


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
        ("distance_km,height_m\n0,1\n12,-2100\n20,1\n", "set heights under the water to 0"),
        ('distance_km,height_m\n0,1\n"12,3\n20,1\n', "line 3: found"),
        ("distance_km,height_m\n0,1\ninf,3\n20,1\n", "line 3: the distance falls or is no number"),
        (
            "distance_km,height_m\n" + "".join(f"{k / 1500:.4f},1\n" for k in range(30_001)),
            "has 29999 points on the path; at most 19998",
        ),
        ("distance_km,height_m\n" + "0.0001,0.0001\n" * 360_000, "is larger than 5000000 bytes"),
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
    away = np.concatenate([np.arange(-28.0, -26.9, 0.1), np.arange(-26.7, -25.0, 0.1)])
    split = grid(tmp_path, np.zeros((42, away.size)), longitude=away)
    assert "with a hole" in reason(split, OBSERVER, TARGET)
    alone = grid(tmp_path, np.zeros((42, 1)), longitude=np.array([-27.0]))
    assert "has 1 values" in reason(alone, OBSERVER, TARGET)
    fine = grid(tmp_path, np.zeros((42, 9)), longitude=np.linspace(-27.0, -26.99999, 9))
    assert "thin the grid" in reason(fine, OBSERVER, TARGET)
    assert "no regular file" in reason(tmp_path)
    noise = tmp_path / "noise.csv"
    noise.write_bytes(b"\xff\xfe\x00\x01")
    assert "neither netCDF nor UTF-8" in reason(noise)
