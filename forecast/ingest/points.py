"""Where on a grid a place lies: which columns serve it and with what weight.

Serves regular grids (latitude and longitude as coordinates of their own, any order, −180…180 or
0…360, closed around the globe or not), projected grids (two-dimensional latitude and longitude),
lists of points and single columns. Distances are great circles on a sphere of 6371 km.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from forecast.errors import InputError, printable
from forecast.ingest.positions import ROUNDING, bracket, great_circle, unwrap, wrap
from forecast.ingest.recognise import read_role
from forecast.ingest.recognition import Recognition
from forecast.ingest.source import Source

__all__ = ["MAX_COLUMNS", "MAX_DISTANCE", "METHODS", "Grid", "Sample", "combine", "find_grid"]

METHODS = ("bilinear", "nearest")

#: How far (m) a lone column or a listed point may be from the place it is to serve; the radius
#: within which a sounding serves a site by default. Common practice, no source.
MAX_DISTANCE = 50e3

#: Most columns of a file that are taken when no place is asked for.
MAX_COLUMNS = 64

#: Half the diagonal of a square cell is 0.71 of its side; further from the nearest point than
#: this share of the spacing, a place lies outside a projected grid.
_REACH = 0.75


@dataclass(frozen=True)
class Sample:
    """One place and the columns that serve it.

    Attributes
    ----------
    name : str
    latitude, longitude : float
        Degrees, −180…180: the place itself where columns are mixed, else that of the column.
    rows, columns : ndarray of int (corner,)
        Indices along the first and second horizontal dimension of the grid; zeros for a
        dimension that it lacks.
    weights : ndarray (corner,)
        They add up to 1.
    """

    name: str
    latitude: float
    longitude: float
    rows: np.ndarray
    columns: np.ndarray
    weights: np.ndarray


@dataclass(frozen=True)
class Grid:
    """Positions of a file's columns.

    Attributes
    ----------
    source : str
        File name.
    dims : tuple of str
        Horizontal dimensions: two for a grid, one for a list, none for a single column.
    latitude, longitude : ndarray
        Degrees, longitude −180…180. ``(row,)`` and ``(column,)`` of a regular grid, both
        ``(row, column)`` of a projected one, both ``(column,)`` of a list, ``()`` of one column.
    """

    source: str
    dims: tuple[str, ...]
    latitude: np.ndarray
    longitude: np.ndarray

    @property
    def regular(self) -> bool:
        """Whether latitude belongs to the rows and longitude to the columns."""
        return len(self.dims) == 2 and self.latitude.ndim == 1

    @property
    def count(self) -> int:
        """Number of columns."""
        if self.regular:
            return self.latitude.size * self.longitude.size
        return self.latitude.size

    def all_columns(self, names: Sequence[str] | None = None) -> list[Sample]:
        """Every column as a sample of its own.

        Parameters
        ----------
        names : sequence of str, optional
            One per column; by default made from the position.

        Raises
        ------
        InputError
            If there are more than `MAX_COLUMNS`.
        """
        if self.count > MAX_COLUMNS:
            shape = " × ".join(str(n) for n in self._shape())
            raise InputError(
                f"is a grid of {shape} columns, {self._bounds()}; without a place to take them "
                f"at, at most {MAX_COLUMNS} are read",
                source=self.source,
                remedy="give the latitude and longitude of the place",
            )
        rows, columns = np.divmod(np.arange(self.count), self._shape()[1])
        latitude, longitude = self._position(rows, columns)
        known = np.isfinite(latitude) & np.isfinite(longitude)
        labels = list(names) if names is not None else _position_names(latitude, longitude)
        return [
            self._sample(labels[i], latitude[i], longitude[i], rows[[i]], columns[[i]], np.ones(1))
            for i in np.flatnonzero(known)
        ]

    def at(self, name: str, latitude: float, longitude: float, method: str) -> Sample:
        """The columns that serve a place.

        Parameters
        ----------
        name : str
        latitude, longitude : float
            Degrees; any longitude.
        method : {"bilinear", "nearest"}
            Bilinear mixing needs a regular grid; elsewhere the nearest column is taken.

        Returns
        -------
        Sample

        Raises
        ------
        InputError
            If the place lies outside the grid.
        ValueError
            If `method` is none of the two.
        """
        if method not in METHODS:
            raise ValueError(f"Grid.at: method is {method!r}; choose {' or '.join(METHODS)}")
        if not (abs(latitude) <= 90.0 and np.isfinite(longitude)):
            raise InputError(
                f"position of {printable(name, 60)} is latitude {latitude:g}, longitude "
                f"{longitude:g}; expected −90 to 90 and a finite longitude",
                source=self.source,
            )
        longitude = float(wrap(longitude))
        if self.regular:
            return self._on_regular(name, latitude, longitude, method)
        rows, columns = np.divmod(np.arange(self.count), self._shape()[1])
        here = self._position(rows, columns)
        distance = great_circle(latitude, longitude, *here)
        nearest = int(np.nanargmin(distance))
        reach = self._spacing(nearest) * _REACH if len(self.dims) == 2 else MAX_DISTANCE
        if distance[nearest] > reach:
            raise self._outside(name, latitude, longitude, float(distance[nearest]))
        at = slice(nearest, nearest + 1)
        return self._sample(
            name, here[0][nearest], here[1][nearest], rows[at], columns[at], np.ones(1)
        )

    # --- regular grids ------------------------------------------------------------------------

    def _on_regular(self, name: str, latitude: float, longitude: float, method: str) -> Sample:
        y, x = bracket(self.latitude, latitude), bracket(self.longitude, longitude, 360.0)
        if method == "nearest":
            # Half a cell beyond the outermost points still belongs to them.
            inside = max(y.beyond - 0.5 * y.step, x.beyond - 0.5 * x.step) <= ROUNDING
        else:
            inside = max(y.beyond, x.beyond) <= ROUNDING
        if not inside:
            row, column = y.indices[int(y.share > 0.5)], x.indices[int(x.share > 0.5)]
            near = great_circle(latitude, longitude, self.latitude[row], self.longitude[column])
            raise self._outside(name, latitude, longitude, float(near))
        if method == "nearest":
            rows, columns = y.indices[[int(y.share > 0.5)]], x.indices[[int(x.share > 0.5)]]
            there = float(self.latitude[rows[0]]), float(self.longitude[columns[0]])
            return self._sample(name, *there, rows, columns, np.ones(1))
        rows, columns = np.repeat(y.indices, 2), np.tile(x.indices, 2)
        weights = np.outer([1.0 - y.share, y.share], [1.0 - x.share, x.share]).ravel()
        used = weights > 0.0
        return self._sample(name, latitude, longitude, rows[used], columns[used], weights[used])

    # --- helpers ------------------------------------------------------------------------------

    def _shape(self) -> tuple[int, int]:
        if self.regular:
            return self.latitude.size, self.longitude.size
        return self.latitude.shape if self.latitude.ndim == 2 else (1, self.latitude.size)  # type: ignore[return-value]

    def _position(self, rows: np.ndarray, columns: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        if self.regular:
            return self.latitude[rows], self.longitude[columns]
        shape = self._shape()
        at = rows, columns
        return self.latitude.reshape(shape)[at], self.longitude.reshape(shape)[at]

    def _spacing(self, flat: int) -> float:
        """Largest distance (m) from a point of a projected grid to its direct neighbours."""
        rows, columns = self._shape()
        row, column = divmod(flat, columns)
        near = [(row + i, column + j) for i, j in ((-1, 0), (1, 0), (0, -1), (0, 1))]
        near = [(i, j) for i, j in near if 0 <= i < rows and 0 <= j < columns]
        i, j = np.array(near).T
        distance = great_circle(
            self.latitude[row, column],
            self.longitude[row, column],
            self.latitude[i, j],
            self.longitude[i, j],
        )
        return float(np.nanmax(distance)) if np.isfinite(distance).any() else 0.0

    def _sample(
        self,
        name: str,
        latitude: float,
        longitude: float,
        rows: np.ndarray,
        columns: np.ndarray,
        weights: np.ndarray,
    ) -> Sample:
        if len(self.dims) == 1:
            rows, columns = columns, rows
        return Sample(name, float(latitude), float(longitude), rows, columns, weights)

    def _bounds(self) -> str:
        west, east = np.nanmin(self.longitude), np.nanmax(self.longitude)
        if self.regular:
            # A grid across the date line is described in its own direction.
            unwrapped = unwrap(self.longitude)
            west, east = wrap(unwrapped.min()), wrap(unwrapped.max())
        return (
            f"latitude {np.nanmin(self.latitude):.2f} to {np.nanmax(self.latitude):.2f}, "
            f"longitude {west:.2f} to {east:.2f}"
        )

    def _outside(self, name: str, latitude: float, longitude: float, distance: float) -> InputError:
        where = f"{printable(name, 60)} (latitude {latitude:.2f}, longitude {longitude:.2f})"
        if self.count == 1:
            reason = (
                f"its one column at latitude {float(self.latitude.ravel()[0]):.2f}, longitude "
                f"{float(self.longitude.ravel()[0]):.2f} is {distance / 1e3:.0f} km from {where}; "
                f"at most {MAX_DISTANCE / 1e3:.0f} km are bridged"
            )
        elif len(self.dims) == 1:
            reason = (
                f"the nearest of its {self.count} points is {distance / 1e3:.0f} km from {where}; "
                f"at most {MAX_DISTANCE / 1e3:.0f} km are bridged ({self._bounds()})"
            )
        else:
            reason = (
                f"{where} lies outside the grid, {distance / 1e3:.0f} km from its nearest point "
                f"({self._bounds()})"
            )
        return InputError(reason, source=self.source)


def find_grid(source: Source, recognition: Recognition) -> Grid:
    """Positions of a file's columns.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of that file.

    Returns
    -------
    Grid

    Raises
    ------
    InputError
        If positions are missing, impossible, change with time, or do not make a grid.
    """
    latitude, lat_dims = _coordinate(source, recognition, "latitude")
    longitude, lon_dims = _coordinate(source, recognition, "longitude")
    longitude = wrap(longitude)
    time = recognition.get("time")
    if lat_dims and lat_dims == lon_dims and time is not None and set(lat_dims) <= set(time.dims):
        latitude, longitude = _fixed(source, latitude, longitude)
        lat_dims = lon_dims = ()
    if len(lat_dims) == 2 and lon_dims == lat_dims[::-1]:
        longitude, lon_dims = longitude.T, lat_dims
    if lat_dims == lon_dims and len(lat_dims) <= 2:
        if len(lat_dims) == 2 and _separable(latitude, longitude):
            latitude, longitude = latitude[:, 0], longitude[0]
        return Grid(source.name, lat_dims, latitude, longitude)
    if not lat_dims or not lon_dims:
        latitude, longitude = (np.array(x) for x in np.broadcast_arrays(latitude, longitude))
        dims = lat_dims or lon_dims
        if len(dims) == 1:
            return Grid(source.name, dims, latitude, longitude)
    if len(lat_dims) == len(lon_dims) == 1:
        for name, axis in (("latitude", latitude), ("longitude", unwrap(longitude))):
            if not (np.diff(axis) > 0.0).all() and not (np.diff(axis) < 0.0).all():
                raise InputError(
                    f"{name} neither rises nor falls throughout",
                    source=source.name,
                    variable=recognition.require(name).variable,
                )
        return Grid(source.name, (*lat_dims, *lon_dims), latitude, longitude)
    raise InputError(
        f"latitude on ({', '.join(lat_dims)}) and longitude on ({', '.join(lon_dims)}) make no "
        "grid; expected a dimension each, or the same one or two",
        source=source.name,
    )


def combine(values: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Weighted mean over corners of those that have a value.

    Parameters
    ----------
    values : ndarray (corner, ...)
        NaN where missing.
    weights : ndarray (corner,)

    Returns
    -------
    ndarray (...)
        NaN where no corner has a value.
    """
    known = np.isfinite(values)
    spread = weights.reshape(-1, *(1,) * (values.ndim - 1)) * known
    total = spread.sum(axis=0)
    with np.errstate(invalid="ignore"):
        return (spread * np.where(known, values, 0.0)).sum(axis=0) / np.where(
            total > 0.0, total, np.nan
        )


def _coordinate(
    source: Source, recognition: Recognition, role: str
) -> tuple[np.ndarray, tuple[str, ...]]:
    """Values of latitude or longitude and their dimensions, those of length one left out."""
    taken = recognition.require(role)
    values = read_role(source, recognition, role)
    limit = 90.0 if role == "latitude" else 720.0
    if not np.isfinite(values).any() or (np.abs(values) > limit + ROUNDING).any():
        known = values[np.isfinite(values)]
        found = f"{known.min():g} to {known.max():g}" if known.size else "no values"
        raise InputError(
            f"{role} is missing or impossible ({found})",
            source=source.name,
            variable=taken.variable,
        )
    dims = () if taken.attribute else taken.dims
    kept = tuple(d for d in dims if source.dims[d] > 1)
    return values.reshape([source.dims[d] for d in kept]), kept


def _fixed(
    source: Source, latitude: np.ndarray, longitude: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Position of one column that is repeated for each time; it must stay where it is."""
    lat, lon = latitude[np.isfinite(latitude)], longitude[np.isfinite(longitude)]
    moved = great_circle(lat.min(), lon.min(), lat.max(), lon.max())
    if moved > 1e3:
        raise InputError(
            f"the column moves by {moved / 1e3:.0f} km with time; model columns at one place are "
            "expected",
            source=source.name,
        )
    return np.asarray(lat[0]), np.asarray(lon[0])


def _separable(latitude: np.ndarray, longitude: np.ndarray) -> bool:
    """Whether a two-dimensional grid has one latitude per row and one longitude per column."""
    same = np.abs(latitude - latitude[:, :1]).max() <= ROUNDING
    turned = np.abs(wrap(longitude - longitude[:1])).max() <= ROUNDING
    if not (same and turned):
        return False
    return all(
        bool((np.diff(axis) > 0).all() or (np.diff(axis) < 0).all())
        for axis in (latitude[:, 0], unwrap(longitude[0]))
    )


def _position_names(latitude: np.ndarray, longitude: np.ndarray) -> list[str]:
    """Names from positions with as many decimals as keep them apart, at least two."""
    names: list[str] = []
    for decimals in (2, 3, 4, 5):
        names = [
            f"lat {lat:.{decimals}f} lon {lon:.{decimals}f}"
            for lat, lon in zip(latitude, longitude, strict=True)
        ]
        if len(set(names)) == len(names):
            break
    return names
