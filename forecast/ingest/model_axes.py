"""Reads model fields at places: any order of dimensions becomes (…, place, level).

Only the columns and levels that are needed are read.
The outer dimensions of a file (times, start of the run and step, ensemble members) are kept in the
file's order; horizontal dimensions become places, mixed from a place's columns; dimensions of
length one that mean nothing here are dropped.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from forecast.errors import InputError
from forecast.ingest.points import Sample, combine
from forecast.ingest.recognise import read_role
from forecast.ingest.recognition import Recognition
from forecast.ingest.source import Source

__all__ = ["MAX_PROFILES", "ModelAxes"]

#: Most profiles read from one file; common sense, no source.
MAX_PROFILES = 100_000

#: Places are read in one box while it has at most this many columns for each of them.
_COLUMNS_PER_PLACE = 16


@dataclass
class ModelAxes:
    """The dimensions of a model file and the places asked for.

    Attributes
    ----------
    source, recognition
        The open file and what was recognised in it.
    horizontal : tuple of str
        Horizontal dimensions.
    samples : list of Sample
        Places.
    levels : slice
        Levels read, in file order.
    order : ndarray of int
        Puts the levels read into the order of rising height.
    outer : tuple of str
        Outer dimensions.
    """

    source: Source
    recognition: Recognition
    horizontal: tuple[str, ...]
    samples: list[Sample]
    levels: slice = field(default_factory=lambda: slice(None))
    order: np.ndarray = field(default_factory=lambda: np.arange(0))
    outer: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        self.vertical = self.recognition.vertical_dim
        temperature = self.recognition.require("air_temperature")
        self.outer = tuple(
            d
            for d in temperature.dims
            if d != self.vertical and d not in self.horizontal and self.source.dims[d] > 1
        )
        known = {
            d
            for role in ("time", "forecast_reference_time", "forecast_period", "member")
            if (taken := self.recognition.get(role)) is not None
            for d in taken.dims
        }
        odd = [d for d in self.outer if d not in known]
        if odd:
            raise InputError(
                f"has a further dimension {odd[0]!r} ({self.source.dims[odd[0]]} values) that is "
                "neither time, ensemble member, latitude, longitude nor the vertical",
                source=self.source.name,
                variable=temperature.variable,
                remedy=f"cut the file to one value of {odd[0]}",
            )
        self.outer_shape = tuple(self.source.dims[d] for d in self.outer)
        count = int(np.prod(self.outer_shape, dtype=np.int64)) * len(self.samples)
        if count > MAX_PROFILES:
            raise InputError(
                f"declares {count} profiles at {len(self.samples)} places; at most "
                f"{MAX_PROFILES} are read from one file",
                source=self.source.name,
                remedy="cut the file to the period that is needed",
            )

    def read(
        self, role: str, change: Callable[[np.ndarray], np.ndarray] | None = None
    ) -> np.ndarray | None:
        """Values of a role at the places, None when the role is not filled.

        Parameters
        ----------
        role : str
            A level or surface role.
        change : callable, optional
            Applied before columns are mixed.

        Returns
        -------
        ndarray (*outer, place[, level]) or None
            Level last for what varies along the vertical, the lowest first. A dimension along
            which the values do not vary has length 1.
        """
        taken = self.recognition.get(role)
        if taken is None:
            return None
        dims = () if taken.attribute else taken.dims
        if not set(self.horizontal) & set(dims):
            # The same everywhere: one read, one place.
            return self._read_box(role, dims, self.samples[:1], change)
        parts = [self._read_box(role, dims, group, change) for group in self._groups()]
        axis = len(self.outer)
        return parts[0] if len(parts) == 1 else np.concatenate(parts, axis=axis)

    def spread(self, values: np.ndarray, dims: tuple[str, ...]) -> np.ndarray:
        """Values on any of the outer dimensions, broadcast to all of them."""
        kept = [d for d in dims if self.source.dims[d] > 1]
        odd = [d for d in kept if d not in self.outer]
        if odd:
            raise InputError(
                f"time varies along {odd[0]!r}, air temperature does not", source=self.source.name
            )
        values = values.reshape([self.source.dims[d] for d in kept])
        present = [d for d in self.outer if d in kept]
        values = values.transpose([kept.index(d) for d in present])
        shape = [self.source.dims[d] if d in kept else 1 for d in self.outer]
        return np.broadcast_to(values.reshape(shape), self.outer_shape)

    def times(self) -> tuple[np.ndarray, np.ndarray | None]:
        """Valid times and lead times on the outer dimensions; None where no lead time is given.

        A time that lacks the dimension of the forecast period is that of the run's start; so is
        a time beside which the file has a ``valid_time``.
        """
        recognition = self.recognition
        reference = self._time("forecast_reference_time")
        taken = recognition.get("forecast_period")
        period = None
        if taken is not None:
            seconds = read_role(self.source, recognition, "forecast_period").ravel()
            known = np.where(np.isfinite(seconds), seconds, 0.0)
            whole = (known * 1e9).astype(np.int64).astype("timedelta64[ns]")
            whole = np.where(np.isfinite(seconds), whole, np.timedelta64("NaT", "ns"))
            period = self.spread(whole, () if taken.attribute else taken.dims)
        if "time" not in recognition and reference is not None and period is not None:
            return reference + period, period
        time = self._time("time")
        valid = self._explicit_valid_time()
        if valid is not None:
            start = time if reference is None else reference
            return valid, period if period is not None or start is None else valid - start
        if time is None:
            recognition.require("time")
            raise AssertionError("unreachable: require raises")
        if taken is not None and period is not None:
            own = recognition.require("time").dims
            if any(d in self.outer and d not in own for d in taken.dims):
                return (time if reference is None else reference) + period, period
        if reference is not None:
            return time, time - reference
        return time, period

    def members(self) -> np.ndarray | None:
        """Ensemble member of each profile on the outer dimensions, None without members."""
        taken = self.recognition.get("member")
        if taken is None or taken.attribute or self.source.variables[taken.variable].is_text:
            return None
        numbers = read_role(self.source, self.recognition, "member").ravel()
        if not (np.isfinite(numbers).all() and (np.abs(numbers) < 2**31).all()):
            numbers = np.arange(numbers.size)
        return self.spread(np.round(numbers).astype(np.int64), taken.dims)

    # --- helpers ------------------------------------------------------------------------------

    def _explicit_valid_time(self) -> np.ndarray | None:
        """Variable ``valid_time`` where another one was taken for time, None without it."""
        info, taken = self.source.variables.get("valid_time"), self.recognition.get("time")
        if info is None or taken is None or taken.variable == info.name or taken.how == "user":
            return None
        fits = all(d in self.outer or self.source.dims[d] == 1 for d in info.dims)
        if not fits or info.is_text or " since " not in (info.units or ""):
            return None
        return self.spread(self.source.read_times(info.name), info.dims)

    def _time(self, role: str) -> np.ndarray | None:
        taken = self.recognition.get(role)
        if taken is None or taken.attribute:
            return None
        values = self.source.read_times(taken.variable, units=taken.units)
        return self.spread(values, taken.dims)

    def _groups(self) -> list[list[Sample]]:
        """Places that are read together: all of them unless they lie far apart."""
        rows = np.unique(np.concatenate([s.rows for s in self.samples]))
        columns = np.unique(np.concatenate([s.columns for s in self.samples]))
        if rows.size * columns.size <= _COLUMNS_PER_PLACE * len(self.samples):
            return [self.samples]
        return [[sample] for sample in self.samples]

    def _read_box(
        self,
        role: str,
        dims: tuple[str, ...],
        samples: list[Sample],
        change: Callable[[np.ndarray], np.ndarray] | None,
    ) -> np.ndarray:
        """One role at some places, read as the box of rows and columns that they need."""
        rows = np.unique(np.concatenate([s.rows for s in samples]))
        columns = np.unique(np.concatenate([s.columns for s in samples]))
        wanted = dict(zip(self.horizontal, (rows, columns), strict=False))
        index: list[Any] = []
        for d in dims:
            if d == self.vertical:
                index.append(self.levels)
            elif d in wanted:
                index.append(_compact(wanted[d]))
            elif d in self.outer or self.source.dims[d] == 1:
                index.append(slice(None))
            else:
                raise InputError(
                    f"has a further dimension {d!r} that air temperature does not have",
                    source=self.source.name,
                    variable=self.recognition.require(role).variable,
                )
        values = read_role(self.source, self.recognition, role, tuple(index) if index else ...)
        if change is not None:
            values = change(values)
        order = (
            *self.outer,
            *self.horizontal,
            *((self.vertical,) if self.vertical in dims else ()),
        )
        sizes = dict(zip(dims, values.shape, strict=True)) if dims else {}
        kept = [d for d in dims if d in order]
        values = values.reshape([sizes[d] for d in kept])
        present = [d for d in order if d in kept]
        values = values.transpose([kept.index(d) for d in present])
        values = values.reshape([sizes.get(d, 1) for d in order])
        if self.vertical in dims:
            values = values[..., self.order]
        return self._mix(values, samples, rows, columns, dims)

    def _mix(
        self,
        values: np.ndarray,
        samples: list[Sample],
        rows: np.ndarray,
        columns: np.ndarray,
        dims: tuple[str, ...],
    ) -> np.ndarray:
        """Horizontal dimensions replaced by places."""
        outer, width = len(self.outer), len(self.horizontal)
        if width == 0:
            return np.expand_dims(values, outer)
        values = np.moveaxis(values, range(outer, outer + width), range(width))
        if not set(self.horizontal) & set(dims):
            return np.expand_dims(values[(0,) * width], outer)
        mixed = []
        for sample in samples:
            places = np.searchsorted(rows, sample.rows), np.searchsorted(columns, sample.columns)
            at = tuple(
                place if d in dims else np.zeros_like(place)
                for d, place in zip(self.horizontal, places, strict=False)
            )
            mixed.append(combine(values[at], sample.weights))
        return np.stack(mixed, axis=outer)


def _compact(indices: np.ndarray) -> Any:
    """Sorted indices as a slice where they have no gap."""
    if indices.size and indices[-1] - indices[0] + 1 == indices.size:
        return slice(int(indices[0]), int(indices[-1]) + 1)
    return indices
