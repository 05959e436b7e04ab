"""Which values of a file belong to which profile: CF discrete sampling geometries.

CF-1.11 section 9 and appendix H: ``profile``, ``timeSeriesProfile`` and ``trajectoryProfile`` as
multidimensional arrays (orthogonal: one set of levels for all; incomplete: padded) and as ragged
arrays (contiguous: row sizes, ``sample_dimension``; indexed: a profile number for each value,
``instance_dimension``). An ascent in which time is the way up, and plain two-dimensional files,
are multidimensional arrays with no or one profile dimension.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from forecast.errors import InputError
from forecast.ingest.recognition import Recognition
from forecast.ingest.source import MAX_LEVELS, Source

__all__ = [
    "MAX_PROFILES",
    "Geometry",
    "Multidimensional",
    "check_profile_count",
    "find_geometry",
    "is_ragged",
]

#: Most profiles read from one file; common sense, no source.
MAX_PROFILES = 100_000


class Geometry(Protocol):
    """How values are dealt out to profiles."""

    count: int

    def levels(self, values: np.ndarray, dims: tuple[str, ...]) -> list[np.ndarray]:
        """One array along the vertical for each profile."""

    def scalars(self, values: np.ndarray, dims: tuple[str, ...]) -> np.ndarray:
        """One value for each profile; the first known one where values vary along it."""


@dataclass
class Multidimensional:
    """Values on a grid of profile dimensions and one vertical dimension."""

    source: str
    profile_dims: tuple[str, ...]
    vertical: str
    sizes: dict[str, int]

    def __post_init__(self) -> None:
        self.count = int(np.prod([self.sizes[d] for d in self.profile_dims], dtype=np.int64))

    def _spread(self, values: np.ndarray, dims: tuple[str, ...]) -> np.ndarray:
        """Values as (profile, level); level is 1 where they do not vary along the vertical."""
        order = (*self.profile_dims, self.vertical)
        odd = [d for d in dims if d not in order]
        if any(values.shape[dims.index(d)] != 1 for d in odd):
            raise InputError(
                f"dimension {odd[0]!r} is none of the profiles' dimensions ({', '.join(order)})",
                source=self.source,
            )
        values = values.reshape([n for n, d in zip(values.shape, dims, strict=True) if d in order])
        held = [d for d in dims if d in order]
        ranked = sorted(held, key=order.index)
        values = values.transpose([held.index(d) for d in ranked])
        shape = [self.sizes[d] if d in held else 1 for d in order]
        values = values.reshape(shape)
        full = (*(self.sizes[d] for d in self.profile_dims), shape[-1])
        return np.broadcast_to(values, full).reshape(self.count, shape[-1])

    def levels(self, values: np.ndarray, dims: tuple[str, ...]) -> list[np.ndarray]:
        """See `Geometry.levels`."""
        spread = self._spread(values, dims)
        levels = self.sizes[self.vertical]
        return list(np.broadcast_to(spread, (self.count, levels)))

    def scalars(self, values: np.ndarray, dims: tuple[str, ...]) -> np.ndarray:
        """See `Geometry.scalars`."""
        return _first_known(self._spread(values, dims))


@dataclass
class Ragged:
    """Values of all profiles one after another, or mixed, along one sample dimension."""

    source: str
    profile_dim: str
    sample_dim: str
    rows: list[np.ndarray | slice]
    outer_dim: str | None = None
    outer: np.ndarray | None = None

    def __post_init__(self) -> None:
        self.count = len(self.rows)

    def levels(self, values: np.ndarray, dims: tuple[str, ...]) -> list[np.ndarray]:
        """See `Geometry.levels`."""
        if dims != (self.sample_dim,):
            raise InputError(
                f"values on ({', '.join(dims)}) cannot be dealt out to ragged profiles on "
                f"{self.sample_dim!r}",
                source=self.source,
            )
        return [values[rows] for rows in self.rows]

    def scalars(self, values: np.ndarray, dims: tuple[str, ...]) -> np.ndarray:
        """See `Geometry.scalars`."""
        if dims == (self.profile_dim,):
            return values
        if dims == (self.outer_dim,) and self.outer is not None:
            return values[self.outer]
        if dims == (self.sample_dim,):
            firsts = [_first_known(values[rows][np.newaxis])[0] for rows in self.rows]
            return np.array(firsts, dtype=values.dtype)
        if values.size == 1:
            return np.repeat(values.ravel(), self.count)
        raise InputError(
            f"values on ({', '.join(dims)}) cannot be dealt out to the profiles on "
            f"{self.profile_dim!r}",
            source=self.source,
        )


def find_geometry(source: Source, recognition: Recognition) -> Geometry:
    """How the values of a file are dealt out to profiles.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of that file, with a vertical dimension.

    Returns
    -------
    Geometry

    Raises
    ------
    InputError
        If there are more profiles or levels than are read, or row sizes or indices do not fit.
    """
    vertical = recognition.vertical_dim
    if vertical is None:
        raise InputError("has no vertical dimension", source=source.name)
    ragged = _ragged(source, vertical)
    if ragged is not None:
        return ragged
    dims = recognition.require("air_temperature").dims
    if source.dims[vertical] > MAX_LEVELS:
        raise InputError(
            f"declares {source.dims[vertical]} levels along {vertical!r}; at most {MAX_LEVELS} "
            "are read",
            source=source.name,
            variable=recognition.require("air_temperature").variable,
        )
    profile_dims = tuple(d for d in dims if d != vertical)
    result = Multidimensional(source.name, profile_dims, vertical, source.dims)
    check_profile_count(source, result.count)
    return result


def is_ragged(source: Source, vertical: str) -> bool:
    """Whether a dimension is the sample dimension of ragged arrays."""
    return any(
        v.attrs.get("sample_dimension") == vertical
        or ("instance_dimension" in v.attrs and v.dims == (vertical,))
        for v in source.variables.values()
    )


def _ragged(source: Source, vertical: str) -> Ragged | None:
    held = source.variables.values()
    counts = [v for v in held if v.attrs.get("sample_dimension") == vertical]
    indices = [v for v in held if "instance_dimension" in v.attrs and v.dims == (vertical,)]
    if not counts and not indices:
        return None
    rows: list[np.ndarray | slice]
    if counts:
        variable, profile_dim = counts[0].name, counts[0].dims[0] if counts[0].dims else ""
        sizes = np.atleast_1d(source.read(variable))
        check_profile_count(source, sizes.size)
        sizes = np.where(np.isfinite(sizes), sizes, 0).astype(np.int64)
        ends = np.cumsum(sizes)
        if (sizes < 0).any() or (ends.size and ends[-1] > source.dims[vertical]):
            raise InputError(
                f"row sizes add up to {int(sizes.sum())}, but {vertical!r} holds "
                f"{source.dims[vertical]} values",
                source=source.name,
                variable=variable,
            )
        rows = [slice(int(a), int(b)) for a, b in zip(ends - sizes, ends, strict=True)]
    else:
        variable = indices[0].name
        profile_dim = str(indices[0].attrs["instance_dimension"])
        count = source.dims.get(profile_dim, 0)
        check_profile_count(source, count)
        numbers = source.read(variable)
        outside = np.isfinite(numbers) & ((numbers < 0) | (numbers >= count))
        if outside.any():
            raise InputError(
                f"index {numbers[outside][0]:g} is none of the {count} profiles on {profile_dim!r}",
                source=source.name,
                variable=variable,
            )
        numbers = np.where(np.isfinite(numbers), numbers, -1).astype(np.int64)
        order = np.argsort(numbers, kind="stable")
        bounds = np.searchsorted(numbers[order], np.arange(count + 1))
        rows = [order[a:b] for a, b in itertools.pairwise(bounds)]
        sizes = np.diff(bounds)
    if sizes.size and sizes.max() > MAX_LEVELS:
        raise InputError(
            f"declares a profile of {int(sizes.max())} levels; at most {MAX_LEVELS} are read",
            source=source.name,
            variable=variable,
        )
    result = Ragged(source.name, profile_dim, vertical, rows)
    for v in held:
        if "instance_dimension" in v.attrs and v.dims == (profile_dim,):
            result.outer_dim = str(v.attrs["instance_dimension"])
            numbers = source.read(v.name)
            size = source.dims.get(result.outer_dim, 0)
            if not (np.isfinite(numbers).all() and (numbers >= 0).all() and (numbers < size).all()):
                raise InputError(
                    f"holds an index that is none of the {size} entries of {result.outer_dim!r}",
                    source=source.name,
                    variable=v.name,
                )
            result.outer = numbers.astype(np.int64)
    return result


def check_profile_count(source: Source, count: int) -> None:
    """Raise InputError if a file declares more profiles than are read."""
    if count > MAX_PROFILES:
        raise InputError(
            f"declares {count} profiles; at most {MAX_PROFILES} are read from one file",
            source=source.name,
            remedy="cut the file to the period and area that are needed",
        )


def _first_known(values: np.ndarray) -> np.ndarray:
    """First value along the last axis that is not missing, or the missing value."""
    if values.shape[-1] == 0:
        empty = np.datetime64("NaT") if values.dtype.kind == "M" else np.nan
        return np.full(values.shape[:-1], empty, dtype=values.dtype)
    if values.dtype.kind in "fM":
        known = ~np.isnan(values) if values.dtype.kind == "f" else ~np.isnat(values)
        at = known.argmax(axis=-1)
    else:
        at = np.zeros(values.shape[:-1], dtype=int)
    return np.take_along_axis(values, at[..., np.newaxis], axis=-1)[..., 0]
