"""The ground under a sightline, from a distance–height table or a netCDF elevation grid."""

from __future__ import annotations

import csv
import stat
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from forecast.errors import InputError
from forecast.ingest.source import Source, open_source
from forecast.ingest.units import convert

__all__ = ["Terrain", "read_terrain"]

_LARGEST_TABLE = 5_000_000  # bytes
_MOST_POINTS = 20_000  # on the path; each ray is held against all of them
_MOST_ROWS = 1_000_000
_HEIGHTS = (-500.0, 9000.0)  # m; nothing on land lies outside
_SLACK = 0.01  # share of the distance by which a table's end may miss the target
_ELEVATION_NAMES = ("surface_altitude", "height_above_mean_sea_level")
_AXES = {"latitude": ("latitude", "lat"), "longitude": ("longitude", "lon")}
_DEGREE = 111.3e3  # m of longitude on the equator; of latitude it is less
_STRETCH = 256  # points for which a window of the grid is read at one go
_ROUNDING = 1e-9  # degrees
_WIDEST_STEP = 1.5  # times the grid's usual one: wider is a hole in its axis


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
        with # are comments; two heights at one distance are a cliff), or a netCDF grid of
        elevation by latitude and longitude, read along the WGS-84 geodesic at the grid's own step.
    distance : float
        Distance of the target, m.
    observer, target : tuple of float, optional
        (latitude, longitude), degrees; a grid needs them.

    Returns
    -------
    Terrain
        From the observer, 0, to the target, ``distance``.

    Raises
    ------
    InputError
        If the file cannot be read or understood, has gaps on the path or does not cover it, or
        tells of heights that no land has.
    """
    path = Path(path)
    try:
        if not stat.S_ISREG(path.stat().st_mode):
            raise InputError("is no regular file", source=path.name, remedy="check terrain")
        with path.open("rb") as stream:
            raw = stream.read(_LARGEST_TABLE + 1)
    except (OSError, ValueError) as error:
        raise InputError(
            f"cannot be read: {getattr(error, 'strerror', None) or error}",
            source=path.name, remedy="check terrain",
        ) from None  # fmt: skip
    if raw.startswith((b"CDF", b"\x89HDF")):
        if observer is None or target is None:
            raise InputError(
                "is a grid, which needs to know where the path lies", source=path.name,
                remedy="give the sightline observer and target as [latitude, longitude]",
            )  # fmt: skip
        with open_source(path) as source:
            at, height = _from_grid(source, distance, observer, target)
    else:
        at, height = _from_table(raw, path.name, distance)
    missing = ~np.isfinite(height)
    if missing.any():
        raise InputError(
            f"has no height at {at[missing][0] / 1e3:.2f} km (and {missing.sum() - 1} more of "
            f"{at.size} points); expected one at every point of the path",
            source=path.name, remedy="fill the gaps, or leave terrain out",
        )  # fmt: skip
    low, high = _HEIGHTS
    if height.min() < low or height.max() > high:
        deep = "set heights under the water to 0" if height.max() <= high else "check the unit"
        raise InputError(
            f"has heights from {height.min():g} to {height.max():g} m; expected {low:g} to "
            f"{high:g}",
            source=path.name, remedy=deep,
        )  # fmt: skip
    return Terrain(at, height, path.name)


def _from_table(raw: bytes, source: str, distance: float) -> tuple[np.ndarray, np.ndarray]:
    if len(raw) > _LARGEST_TABLE:
        raise InputError(f"is larger than {_LARGEST_TABLE} bytes", source=source)
    try:
        lines = raw.decode("utf-8-sig").splitlines()
    except UnicodeDecodeError:
        raise InputError(
            "is neither netCDF nor UTF-8 text", source=source,
            remedy="give a CSV with the header distance_km,height_m, or a netCDF grid",
        ) from None  # fmt: skip
    kept = [(i, line) for i, line in enumerate(lines, 1) if line.strip() and line.strip()[0] != "#"]
    if len(kept) > _MOST_ROWS:
        raise InputError(f"has {len(kept)} lines; at most {_MOST_ROWS} are read", source=source)
    try:
        # Each line by itself: a quote left open must not swallow those after it.
        rows = [next(csv.reader([line])) for _, line in kept]
    except csv.Error as error:
        raise InputError(f"is no CSV ({error})", source=source) from None
    header = [cell.strip().lower() for cell in rows[0]] if rows else []
    scale = {"distance_km": 1e3, "distance_m": 1.0}
    along = next((name for name in scale if name in header), None)
    if along is None or "height_m" not in header:
        raise InputError(
            f"has the header {', '.join(header)[:80] or 'of an empty file'!r}; expected "
            "distance_km,height_m or distance_m,height_m",
            source=source,
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
                f"line {number}: found {line.strip()[:60]!r}; expected two numbers", source=source
            ) from None
    if len(points) < 2:
        raise InputError(f"has {len(points)} points; expected 2 or more", source=source)
    at, height = np.array(points).T
    fair = np.isfinite(at)
    fair[1:] &= ~(np.diff(at) < 0.0)
    if not fair.all():
        raise InputError(
            f"line {kept[int(np.argmin(fair)) + 1][0]}: the distance falls or is no number; "
            "expected distances from the observer, rising",
            source=source, variable=along,
        )  # fmt: skip
    slack = _SLACK * distance
    if at[0] > slack or at[-1] < distance - slack:
        raise InputError(
            f"reaches from {at[0] / 1e3:g} to {at[-1] / 1e3:g} km; expected 0 to "
            f"{distance / 1e3:g} km, from the observer to the target",
            source=source, variable=along,
        )  # fmt: skip
    # What lies behind the observer or the target is no part of the path.
    inside = (at > 0.0) & (at < distance)
    if inside.sum() + 2 > _MOST_POINTS:
        raise InputError(
            f"has {inside.sum()} points on the path; at most {_MOST_POINTS - 2} are used",
            source=source, remedy="thin it, keeping the crests",
        )  # fmt: skip
    ends = [_end_height(at, height, 0.0), _end_height(at, height, distance)]
    return (
        np.concatenate([[0.0], at[inside], [distance]]),
        np.concatenate([ends[:1], height[inside], ends[1:]]),
    )


def _end_height(at: np.ndarray, height: np.ndarray, end: float) -> float:
    """Height at an end of the path; that of the nearest point if the table stops just short."""
    here = height[at == end]
    if here.size:
        return float(np.max(here))
    right = int(np.searchsorted(at, end))
    if right in (0, at.size):
        return float(height[min(right, at.size - 1)])
    share = (end - at[right - 1]) / (at[right] - at[right - 1])
    return float(height[right - 1] + share * (height[right] - height[right - 1]))


def _from_grid(
    source: Source, distance: float, observer: tuple[float, float], target: tuple[float, float]
) -> tuple[np.ndarray, np.ndarray]:
    """Heights along the geodesic, bilinear, a point for each of the grid's own steps."""
    from pyproj import Geod

    name, axes = _grid_of(source)
    north, east = (_axis(source, axes[kind]) for kind in ("latitude", "longitude"))
    geod = Geod(ellps="WGS84")
    azimuth, _, whole = geod.inv(observer[1], observer[0], target[1], target[0])
    narrowest = np.cos(np.radians(min(max(abs(observer[0]), abs(target[0])), 89.0)))
    steps = (np.median(np.abs(np.diff(north))), np.median(np.abs(np.diff(east))) * narrowest)
    count = max(int(np.ceil(distance / (float(min(steps)) * _DEGREE))), 1) + 1
    if count > _MOST_POINTS:
        raise InputError(
            f"has {count} points on the path; at most {_MOST_POINTS} are used",
            source=source.name, variable=name, remedy="thin the grid, keeping the crests",
        )  # fmt: skip
    at = np.linspace(0.0, distance, count)
    x, y, _ = geod.fwd(
        np.full(count, observer[1]), np.full(count, observer[0]), np.full(count, azimuth),
        at * (whole / distance),
    )  # fmt: skip
    # Longitudes of path and grid counted from the observer, so that no seam lies near the path.
    x, east = (np.mod(values - observer[1] + 180.0, 360.0) - 180.0 for values in (x, east))
    indices = {"latitude": _rising(north), "longitude": _rising(east)}
    north, east = north[indices["latitude"]], east[indices["longitude"]]
    for kind, axis, wanted, zero in (
        ("latitude", north, y, 0.0), ("longitude", east, x, observer[1]),
    ):  # fmt: skip
        nodes = axis[
            max(int(np.searchsorted(axis, wanted.min(), "right")) - 1, 0) : int(
                np.searchsorted(axis, wanted.max())
            )
            + 1
        ]
        holed = np.diff(nodes).max(initial=0.0) > _WIDEST_STEP * np.median(np.diff(axis))
        if wanted.min() < axis[0] - _ROUNDING or wanted.max() > axis[-1] + _ROUNDING or holed:
            raise InputError(
                f"covers {kind} {axis[0] + zero:g} to {axis[-1] + zero:g}"
                f"{' with a hole' if holed else ''}; the path needs {wanted.min() + zero:g} to "
                f"{wanted.max() + zero:g}",
                source=source.name, variable=name,
            )  # fmt: skip
    across = source.variables[name].dims[0] == axes["longitude"]
    height = np.empty(count)
    for first in range(0, count, _STRETCH):
        part = slice(first, first + _STRETCH)
        rows, u = _window(north, y[part])
        columns, v = _window(east, x[part])
        block = _read_block(
            source, name, indices["latitude"][rows], indices["longitude"][columns], across
        )
        height[part] = _bilinear(block, u, v)
    units = source.variables[name].units or ""
    return at, convert(height, units, "m", source=source.name, variable=name)


def _axis(source: Source, name: str) -> np.ndarray:
    values = source.read(name)
    if values.size < 2 or not np.all(np.isfinite(values)):
        raise InputError(
            f"has {values.size} values, {int(np.sum(~np.isfinite(values)))} of them missing; "
            "expected 2 or more and none missing",
            source=source.name, variable=name,
        )  # fmt: skip
    return values


def _rising(axis: np.ndarray) -> np.ndarray:
    """Indices that put an axis in order; a value that comes twice is taken once."""
    return np.unique(axis, return_index=True)[1]


def _window(axis: np.ndarray, wanted: np.ndarray) -> tuple[slice, np.ndarray]:
    """Part of an axis around some positions, and these as fractions of its steps."""
    place = np.interp(wanted, axis, np.arange(axis.size))
    first = min(int(place.min()), axis.size - 2)
    return slice(first, max(int(np.ceil(place.max())), first + 1) + 1), place - first


def _read_block(
    source: Source, name: str, rows: np.ndarray, columns: np.ndarray, across: bool
) -> np.ndarray:
    """Values at grid indices, (row, column), read by runs of neighbours."""
    row_runs, column_runs = (
        np.split(index, np.flatnonzero(np.abs(np.diff(index)) != 1) + 1)
        for index in (rows, columns)
    )
    block = np.empty((rows.size, columns.size))
    top = 0
    for row_run in row_runs:
        left = 0
        for column_run in column_runs:
            index = (_slice(row_run), _slice(column_run))
            part = source.read(name, index[::-1] if across else index)
            part = part.T if across else part
            # Read in the file's own order; an axis that falls is turned round here.
            part = part[:: -1 if row_run[-1] < row_run[0] else 1]
            part = part[:, :: -1 if column_run[-1] < column_run[0] else 1]
            block[top : top + row_run.size, left : left + column_run.size] = part
            left += column_run.size
        top += row_run.size
    return block


def _slice(run: np.ndarray) -> slice:
    return slice(int(run.min()), int(run.max()) + 1)


def _bilinear(block: np.ndarray, u: np.ndarray, v: np.ndarray) -> np.ndarray:
    """Values between grid points; one that is missing counts only where it has a share."""
    i, j = (
        np.clip(place.astype(int), 0, size - 2)
        for place, size in zip((u, v), block.shape, strict=True)
    )
    total = np.zeros(u.size)
    for row, row_share in ((i, 1.0 - (u - i)), (i + 1, u - i)):
        for column, column_share in ((j, 1.0 - (v - j)), (j + 1, v - j)):
            share = row_share * column_share
            total += np.where(share > 1e-9, share * block[row, column], 0.0)
    return total


def _grid_of(source: Source) -> tuple[str, dict[str, str]]:
    """The elevation variable, and its axes of latitude and longitude."""
    axes = {}
    for kind in ("latitude", "longitude"):
        found = [
            name
            for name, info in source.variables.items()
            if info.dims == (name,) and (info.standard_name == kind or name.lower() in _AXES[kind])
        ]
        if len(found) != 1:
            raise InputError(
                f"has {len(found)} axes of {kind}; expected one, with standard_name {kind}",
                source=source.name,
            )
        axes[kind] = found[0]
    pair = set(axes.values())
    flat = [
        name
        for name, info in source.variables.items()
        if len(info.dims) == 2 and set(info.dims) == pair
    ]
    told = [name for name in flat if source.variables[name].standard_name in _ELEVATION_NAMES]
    chosen = told or flat
    if len(chosen) != 1:
        raise InputError(
            f"has {len(chosen)} variables by latitude and longitude alone; expected one of "
            f"elevation, with standard_name {' or '.join(_ELEVATION_NAMES)}",
            source=source.name,
        )
    return chosen[0], axes
