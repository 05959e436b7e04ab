"""Places on grids: which columns, which weights, and when a place is outside."""

from __future__ import annotations

import netCDF4
import numpy as np
import pyproj
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.errors import InputError
from forecast.ingest.points import MAX_DISTANCE, Grid, combine, find_grid
from forecast.ingest.positions import great_circle
from forecast.ingest.recognise import recognise
from forecast.ingest.source import open_source
from tests.ingest.model_files import put

SOUTH_TO_NORTH = np.arange(-90.0, 90.1, 2.5)
AROUND = np.arange(0.0, 360.0, 2.5)


def regular(latitude: np.ndarray, longitude: np.ndarray) -> Grid:
    """A regular grid as `find_grid` makes it."""
    return Grid("m.nc", ("y", "x"), latitude, (longitude + 180.0) % 360.0 - 180.0)


def value_at(grid: Grid, field: np.ndarray, place: tuple[float, float], method: str) -> float:
    sample = grid.at("Harrow Point", *place, method)
    return float(combine(field[sample.rows, sample.columns], sample.weights))


@given(st.floats(-90.0, 90.0), st.floats(-360.0, 360.0))
def test_bilinear_gives_a_linear_field_exactly_all_around_the_globe(latitude, longitude):
    """Linear within each cell; across the seam of longitude the field is written unwrapped."""
    grid = regular(SOUTH_TO_NORTH[::-1], AROUND)
    sample = grid.at("Harrow Point", latitude, longitude, "bilinear")
    lat = grid.latitude[sample.rows]
    lon = grid.longitude[sample.columns]
    turned = longitude + (lon - longitude + 180.0) % 360.0 - 180.0
    assert sample.weights.sum() == pytest.approx(1.0, abs=1e-12)
    assert combine(3.0 * lat - 2.0 * turned, sample.weights) == pytest.approx(
        3.0 * latitude - 2.0 * longitude, abs=1e-6
    )
    assert combine(lat * turned, sample.weights) == pytest.approx(latitude * longitude, abs=1e-4)


@given(st.floats(-90.0, 90.0), st.floats(-180.0, 180.0))
def test_nearest_is_the_nearest_of_the_cell(latitude, longitude):
    grid = regular(SOUTH_TO_NORTH, AROUND)
    sample = grid.at("Harrow Point", latitude, longitude, "nearest")
    assert abs(sample.latitude - latitude) <= 1.25 + 1e-9
    assert abs((sample.longitude - longitude + 180.0) % 360.0 - 180.0) <= 1.25 + 1e-9


def test_direction_of_axes_and_convention_of_longitude_give_the_same_columns():
    field = np.random.default_rng(3).normal(size=(5, 7))
    lat, lon = np.linspace(50.0, 52.0, 5), np.linspace(-1.5, 1.5, 7)
    place = 50.61, 359.77
    expected = value_at(regular(lat, lon), field, place, "bilinear")
    for rows, columns in ((1, 1), (-1, 1), (1, -1), (-1, -1)):
        for turn in (0.0, 360.0):
            grid = regular(lat[::rows], lon[::columns] + turn)
            got = value_at(grid, field[::rows, ::columns], place, "bilinear")
            assert got == expected


def test_grid_across_the_date_line():
    grid = regular(np.array([10.0, 11.0]), np.array([178.0, 179.0, 180.0, 181.0]))
    field = np.tile([178.0, 179.0, 180.0, 181.0], (2, 1))
    assert value_at(grid, field, (10.5, -179.5), "bilinear") == pytest.approx(180.5)
    assert value_at(grid, field, (10.5, 179.5), "bilinear") == pytest.approx(179.5)
    with pytest.raises(InputError, match=r"longitude 178\.00 to -179\.00"):
        grid.at("Far Skerry", 10.5, 0.0, "bilinear")


def test_outside_a_regular_grid():
    """Beyond the outermost points bilinear has nothing to mix; nearest still has half a cell."""
    grid = regular(np.array([50.0, 51.0]), np.array([0.0, 1.0]))
    with pytest.raises(InputError, match=r"outside the grid, 56 km .*latitude 50.00 to 51.00"):
        grid.at("Far Skerry", 51.4, 0.5, "bilinear")
    assert grid.at("Far Skerry", 51.4, 0.5, "nearest").latitude == 51.0
    with pytest.raises(InputError, match="outside the grid"):
        grid.at("Far Skerry", 51.6, 0.5, "nearest")
    # Coordinates in float32: an edge is still inside.
    assert grid.at("Edge", 51.00001, 0.5, "bilinear").weights.sum() == pytest.approx(1.0)
    with pytest.raises(InputError, match="expected −90 to 90"):
        grid.at("Nowhere", float("nan"), 0.0, "nearest")
    with pytest.raises(ValueError, match="bilinear or nearest"):
        grid.at("Harrow Point", 50.5, 0.5, "cubic")


@given(st.lists(st.booleans(), min_size=4, max_size=4))
def test_mixing_leaves_out_corners_without_value(known):
    """A constant stays what it is, however many corners are missing."""
    values = np.where(known, 7.0, np.nan)
    mixed = combine(values, np.array([0.1, 0.2, 0.3, 0.4]))
    assert np.isnan(mixed) if not any(known) else mixed == pytest.approx(7.0, rel=1e-15)


def projected(rows: int = 30, columns: int = 40) -> tuple[np.ndarray, np.ndarray]:
    """Latitude and longitude of a conformal conic grid of 10 km."""
    cone = pyproj.Proj(proj="lcc", lat_1=63.3, lat_2=63.3, lat_0=63.3, lon_0=15.0, R=6371000.0)
    x, y = np.meshgrid(np.arange(columns) * 1e4, np.arange(rows) * 1e4)
    lon, lat = cone(x - 2e5, y - 1.5e5, inverse=True)
    return lat, lon


@given(st.integers(0, 29), st.integers(0, 39), st.floats(-0.4, 0.4), st.floats(-0.4, 0.4))
def test_projected_grid_takes_the_nearest_column(row, column, up, right):
    """The nearest by brute force over the geodesic of an independent library."""
    lat, lon = projected()
    grid = Grid("m.nc", ("y", "x"), lat, lon)
    place = lat[row, column] + up * 0.05, lon[row, column] + right * 0.1
    sample = grid.at("Harrow Point", *place, "bilinear")
    geod = pyproj.Geod(a=6371000.0, b=6371000.0)
    _, _, distance = geod.inv(
        np.full(lat.size, place[1]), np.full(lat.size, place[0]), lon.ravel(), lat.ravel()
    )
    assert sample.rows.size == 1
    got = distance.reshape(lat.shape)[sample.rows[0], sample.columns[0]]
    assert got == pytest.approx(distance.min(), abs=1e-3)


def test_outside_a_projected_grid():
    lat, lon = projected()
    grid = Grid("m.nc", ("y", "x"), lat, lon)
    with pytest.raises(InputError, match=r"outside the grid, \d+ km from its nearest point"):
        grid.at("Far Skerry", float(lat.min()) - 0.2, 15.0, "nearest")


def test_lone_column_serves_places_near_it():
    grid = Grid("m.nc", (), np.array(54.2), np.array(-3.1))
    near = grid.at("Harrow Point", 54.4, -3.1, "bilinear")
    assert (near.name, near.latitude, near.longitude) == ("Harrow Point", 54.2, -3.1)
    with pytest.raises(InputError, match=r"is 89 km from Far Skerry .* at most 50 km"):
        grid.at("Far Skerry", 55.0, -3.1, "nearest")
    assert MAX_DISTANCE == 50e3


def test_list_of_points():
    grid = Grid("m.nc", ("station",), np.array([50.0, 54.0, 58.0]), np.array([0.0, 1.0, 2.0]))
    sample = grid.at("Harrow Point", 54.1, 1.0, "bilinear")
    assert sample.rows.tolist() == [1] and sample.weights.tolist() == [1.0]
    with pytest.raises(InputError, match="the nearest of its 3 points is 225 km"):
        grid.at("Far Skerry", 52.0, 0.5, "nearest")
    assert [s.name for s in grid.all_columns()] == [
        "lat 50.00 lon 0.00",
        "lat 54.00 lon 1.00",
        "lat 58.00 lon 2.00",
    ]


def test_large_grid_needs_a_place():
    grid = regular(SOUTH_TO_NORTH, AROUND)
    with pytest.raises(InputError, match=r"grid of 73 × 144 columns.*give the latitude"):
        grid.all_columns()


def test_names_from_positions_tell_close_points_apart():
    grid = Grid("m.nc", ("n",), np.array([54.0001, 54.0002]), np.array([-3.0, -3.0]))
    assert [s.name for s in grid.all_columns()] == [
        "lat 54.0001 lon -3.0000",
        "lat 54.0002 lon -3.0000",
    ]


@given(st.floats(-90, 90), st.floats(-180, 180), st.floats(-90, 90), st.floats(-180, 180))
def test_great_circle_agrees_with_an_independent_library(lat, lon, lat2, lon2):
    geod = pyproj.Geod(a=6371000.0, b=6371000.0)
    _, _, expected = geod.inv(lon, lat, lon2, lat2)
    assert great_circle(lat, lon, lat2, lon2) == pytest.approx(expected, abs=1.0)


# --- positions in files ---------------------------------------------------------------------------


def grid_of(path, latitude, longitude, dims, lon_dims=None) -> Grid:
    """Grid of a file that holds these positions."""
    latitude, longitude = np.asarray(latitude), np.asarray(longitude)
    lon_dims = dims if lon_dims is None else lon_dims
    with netCDF4.Dataset(path, "w") as file:
        sizes = dict(zip((*dims, *lon_dims), (*latitude.shape, *longitude.shape), strict=True))
        for name, size in sizes.items():
            file.createDimension(name, size)
        put(file, "latitude", dims, latitude, units="degrees_north", standard_name="latitude")
        put(file, "longitude", lon_dims, longitude, units="degrees_east", standard_name="longitude")
        if "time" in dims:
            put(file, "time", ("time",), np.arange(latitude.size), units="hours since 2031-05-20")
    with open_source(path) as source:
        return find_grid(source, recognise(source))


def test_two_dimensional_coordinates_of_a_regular_grid_allow_mixing(tmp_path):
    lon, lat = np.meshgrid(np.arange(350.0, 360.0), np.arange(5.0))
    grid = grid_of(tmp_path / "m.nc", lat, lon, ("y", "x"))
    assert grid.regular
    assert grid.at("Harrow Point", 1.5, -5.5, "bilinear").weights.size == 4
    assert not grid_of(tmp_path / "p.nc", *projected(), ("y", "x")).regular


def test_dimensions_of_length_one_make_a_lone_column_or_a_row(tmp_path):
    assert grid_of(tmp_path / "a.nc", [54.2], [356.9], ("y",), ("x",)).dims == ()
    row = grid_of(tmp_path / "b.nc", [54.2], [356.0, 357.0], ("y",), ("x",))
    assert row.dims == ("x",) and row.latitude.tolist() == [54.2, 54.2]
    sample = row.at("Harrow Point", 54.3, -3.1, "bilinear")
    assert sample.rows.tolist() == [1] and sample.longitude == -3.0


def test_column_whose_position_is_repeated_for_each_time(tmp_path):
    grid = grid_of(tmp_path / "a.nc", np.full(5, 54.2), np.full(5, -3.1), ("time",))
    assert grid.dims == () and float(grid.latitude) == 54.2
    with pytest.raises(InputError, match="the column moves by 222 km with time"):
        grid_of(tmp_path / "b.nc", np.linspace(54.0, 56.0, 5), np.full(5, -3.1), ("time",))


@pytest.mark.parametrize(
    ("latitude", "longitude", "dims", "lon_dims", "reason"),
    [
        ([50.0, 52.0, 51.0], [0.0, 1.0], ("y",), ("x",), "latitude neither rises nor falls"),
        ([50.0, 51.0], [0.0, 2.0, 1.0], ("y",), ("x",), "longitude neither rises nor falls"),
        ([np.nan, np.nan], [0.0, 1.0], ("y",), ("x",), "latitude is missing or impossible"),
        ([91.0, 95.0], [0.0, 1.0], ("y",), ("x",), "contradicts the values|impossible"),
        (np.zeros((2, 3)), [0.0, 1.0, 2.0], ("y", "x"), ("x",), "make no grid"),
    ],
)
def test_positions_that_make_no_grid(tmp_path, latitude, longitude, dims, lon_dims, reason):
    with pytest.raises(InputError, match=reason):
        grid_of(tmp_path / "bad.nc", latitude, longitude, dims, lon_dims)
