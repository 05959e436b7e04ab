"""The ground under a sightline, from a distance–height table or a netCDF elevation grid."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from forecast.errors import InputError
from forecast.ingest.units import convert

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["Terrain", "read_terrain"]

_LARGEST_TABLE = 5_000_000  # bytes
_MOST_POINTS = 20_000
_HEIGHTS = (-500.0, 9000.0)  # m; nothing on land lies outside
_SLACK = 0.01  # share of the distance by which a table's end may miss the target
_ELEVATION_NAMES = ("surface_altitude", "height_above_mean_sea_level")
_AXES = {"latitude": ("latitude", "lat"), "longitude": ("longitude", "lon")}
_DEGREE = 111e3  # m of latitude
_LARGEST_WINDOW = 3e7  # values of a grid that are read


@dataclass(frozen=True)
class Terrain:
    """Ground along a path: rising distance from the observer, height above mean sea level, m."""

    distance: np.ndarray
    height: np.ndarray
    source: str


def read_terrain(
    path: str | Path,
    distance: float,
    observer: tuple[float, float] | None = None,
    target: tuple[float, float] | None = None,
) -> Terrain:
    """Read the ground between observer and target.

    Parameters
    ----------
    path : str or Path
        A CSV with a header ``distance_km,height_m`` or ``distance_m,height_m`` (lines that begin
        with # are comments), or a netCDF grid of elevation by latitude and longitude.
    distance : float
        Distance of the target, m.
    observer, target : tuple of float, optional
        (latitude, longitude), degrees; a grid needs them.

    Returns
    -------
    Terrain
        From the observer to the target.

    Raises
    ------
    InputError
        If the file cannot be read or understood, has gaps on the path or does not cover it, or
        tells of heights that no land has.
    """
    path = Path(path)
    try:
        with path.open("rb") as stream:
            head = stream.read(8)
    except OSError as error:
        raise InputError(
            f"cannot be read: {error.strerror}", source=path.name, remedy="check terrain"
        ) from None
    if head.startswith((b"CDF", b"\x89HDF")):
        if observer is None or target is None:
            raise InputError(
                "is a grid, which needs to know where the path lies", source=path.name,
                remedy="give the sightline observer and target as [latitude, longitude]",
            )  # fmt: skip
        at, height = _from_grid(path, distance, observer, target)
    else:
        at, height = _from_table(path, distance)
    missing = ~np.isfinite(height)
    if missing.any():
        raise InputError(
            f"has no height at {at[missing][0] / 1e3:.2f} km (and {missing.sum() - 1} more of "
            f"{at.size} points); expected one at every point of the path",
            source=path.name, remedy="fill the gaps, or leave terrain out",
        )  # fmt: skip
    low, high = _HEIGHTS
    if height.min() < low or height.max() > high:
        raise InputError(
            f"has heights from {height.min():g} to {height.max():g} m; expected {low:g} to "
            f"{high:g}",
            source=path.name, remedy="check the unit of the heights",
        )  # fmt: skip
    return Terrain(at, height, path.name)


def _from_table(path: Path, distance: float) -> tuple[np.ndarray, np.ndarray]:
    with path.open("rb") as stream:
        raw = stream.read(_LARGEST_TABLE + 1)
    if len(raw) > _LARGEST_TABLE:
        raise InputError(f"is larger than {_LARGEST_TABLE} bytes", source=path.name)
    try:
        lines = raw.decode("utf-8-sig").splitlines()
    except UnicodeDecodeError:
        raise InputError(
            "is neither netCDF nor UTF-8 text", source=path.name,
            remedy="give a CSV with the header distance_km,height_m, or a netCDF grid",
        ) from None  # fmt: skip
    kept = [(i, line) for i, line in enumerate(lines, 1) if line.strip() and line.strip()[0] != "#"]
    rows = list(csv.reader(line for _, line in kept))
    header = [cell.strip().lower() for cell in rows[0]] if rows else []
    scale = {"distance_km": 1e3, "distance_m": 1.0}
    along = next((name for name in scale if name in header), None)
    if along is None or "height_m" not in header:
        raise InputError(
            f"has the header {', '.join(header)[:80] or 'of an empty file'!r}; expected "
            "distance_km,height_m or distance_m,height_m",
            source=path.name,
        )
    x, y = header.index(along), header.index("height_m")
    points = []
    for (number, line), row in zip(kept[1:], rows[1:], strict=True):
        try:
            points.append(
                (scale[along] * float(row[x]), float(row[y]) if row[y].strip() else np.nan)
            )
        except (ValueError, IndexError):
            raise InputError(
                f"line {number}: found {line.strip()[:60]!r}; expected two numbers",
                source=path.name,
            ) from None
    if not 2 <= len(points) <= _MOST_POINTS:
        raise InputError(
            f"has {len(points)} points; expected 2 to {_MOST_POINTS}", source=path.name
        )
    at, height = np.array(points).T
    if not np.all(np.isfinite(at)) or np.any(np.diff(at) < 0.0):
        worst = int(np.argmax(~(np.diff(at) >= 0.0))) + 1
        raise InputError(
            f"line {kept[worst + 1][0]}: the distance falls or is no number; expected distances "
            "from the observer, rising",
            source=path.name, variable=along,
        )  # fmt: skip
    slack = _SLACK * distance
    if at[0] > slack or at[-1] < distance - slack:
        raise InputError(
            f"reaches from {at[0] / 1e3:g} to {at[-1] / 1e3:g} km; expected 0 to "
            f"{distance / 1e3:g} km, from the observer to the target",
            source=path.name, variable=along,
        )  # fmt: skip
    at[0] = min(at[0], 0.0)
    at[-1] = max(at[-1], distance)
    return at, height


def _from_grid(
    path: Path, distance: float, observer: tuple[float, float], target: tuple[float, float]
) -> tuple[np.ndarray, np.ndarray]:
    """Heights along the geodesic, bilinear, a point for each of the grid's own steps."""
    import xarray as xr
    from pyproj import Geod

    try:
        data = xr.open_dataset(path, engine="netcdf4", decode_times=False)
    except (OSError, ValueError) as error:
        raise InputError(f"is damaged or truncated ({error})", source=path.name) from None
    with data:
        grid, latitude, longitude = _grid_of(data, path.name)
        north, east = (np.asarray(grid[axis].values, dtype=float) for axis in (latitude, longitude))
        step = float(np.median(np.abs(np.diff(north)))) * _DEGREE
        count = int(np.clip(np.ceil(distance / max(step, 1.0)) + 1, 2, _MOST_POINTS))
        at = np.linspace(0.0, distance, count)
        geod = Geod(ellps="WGS84")
        azimuth, _, whole = geod.inv(observer[1], observer[0], target[1], target[0])
        x, y, _ = geod.fwd(
            np.full(count, observer[1]), np.full(count, observer[0]), np.full(count, azimuth),
            at * (whole / distance),
        )  # fmt: skip
        # Longitudes as the grid counts them.
        x = east.min() + np.mod(np.asarray(x) - east.min(), 360.0)
        for name, axis, wanted in (("latitude", north, y), ("longitude", east, x)):
            if wanted.min() < axis.min() or wanted.max() > axis.max():
                raise InputError(
                    f"covers {name} {axis.min():g} to {axis.max():g}; the path needs "
                    f"{wanted.min():g} to {wanted.max():g}",
                    source=path.name, variable=str(grid.name),
                )  # fmt: skip
        window = {
            axis: np.flatnonzero(
                (values >= wanted.min() - 2 * step / _DEGREE)
                & (values <= wanted.max() + 2 * abs(np.median(np.diff(values))))
            )
            for axis, values, wanted in ((latitude, north, y), (longitude, east, x))
        }
        if np.prod([float(index.size) for index in window.values()]) > _LARGEST_WINDOW:
            raise InputError(
                "is too fine for a path of this length", source=path.name,
                remedy="thin the grid, or give a distance-height table",
            )  # fmt: skip
        block = grid.isel(window).load()
        heights = block.interp(
            {latitude: ("point", np.asarray(y)), longitude: ("point", x)}, method="linear"
        )
        values = convert(
            np.asarray(heights.values, dtype=float), str(grid.attrs.get("units", "")), "m",
            source=path.name, variable=str(grid.name),
        )  # fmt: skip
    return at, values


def _grid_of(data: xr.Dataset, source: str) -> tuple[xr.DataArray, str, str]:
    """The elevation variable, and its axes of latitude and longitude."""
    axes = {}
    for kind in ("latitude", "longitude"):
        found = [
            str(name)
            for name, coordinate in data.coords.items()
            if coordinate.dims == (name,)
            and (coordinate.attrs.get("standard_name") == kind or str(name).lower() in _AXES[kind])
        ]
        if len(found) != 1:
            raise InputError(
                f"has {len(found)} axes of {kind}; expected one, with standard_name {kind}",
                source=source,
            )
        axes[kind] = found[0]
    pair = set(axes.values())
    flat = [name for name, variable in data.data_vars.items() if set(variable.dims) == pair]
    told = [name for name in flat if data[name].attrs.get("standard_name") in _ELEVATION_NAMES]
    chosen = told or flat
    if len(chosen) != 1:
        raise InputError(
            f"has {len(chosen)} variables by latitude and longitude alone; expected one of "
            f"elevation, with standard_name {' or '.join(_ELEVATION_NAMES)}",
            source=source,
        )
    return data[chosen[0]], axes["latitude"], axes["longitude"]
