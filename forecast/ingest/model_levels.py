"""Columns of a weather model or analysis at places: hybrid, pressure or height levels.

One column per place, valid time and ensemble member. Levels under the ground and above `TOP` are
left out. How pressure and heights are found is said in `forecast.ingest.model_fields`, how places
on a grid are served in `forecast.ingest.points`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from forecast.errors import InputError, printable
from forecast.ingest import quality as rules
from forecast.ingest.assemble import Column
from forecast.ingest.levels import find_levels
from forecast.ingest.model_axes import ModelAxes
from forecast.ingest.model_fields import ModelFields, read_fields, require_humidity
from forecast.ingest.points import METHODS, Grid, Sample, find_grid
from forecast.ingest.recognition import Recognition
from forecast.ingest.source import Source
from forecast.schema import QUALITY_FLAGS

__all__ = ["TOP", "read_model_columns"]

#: Levels above this height over ground are left out, m: rays that matter stay far below it.
TOP = 15e3


def read_model_columns(
    source: Source,
    recognition: Recognition,
    points: Sequence[tuple[str, float, float]] | None = None,
    method: str = "bilinear",
    notes: list[str] | None = None,
) -> list[Column | InputError]:
    """Columns of a model file at places, one per valid time and ensemble member.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of that file.
    points : sequence of (name, latitude, longitude), optional
        Places; their names become the stations. Without them every column of the file is taken,
        at most `forecast.ingest.points.MAX_COLUMNS`.
    method : {"bilinear", "nearest"}
        How to take columns from a grid.
    notes : list of str, optional
        What a user may want to know of how the file was read is added to it.

    Returns
    -------
    list of Column or InputError
        Columns by place, time and member; the reason for a place that cannot be served, and for
        times that cannot be used.

    Raises
    ------
    InputError
        If the file as a whole cannot be used: no humidity, no pressure, coefficients that do not
        fit, too many profiles, no place asked for on a large grid.
    ValueError
        If `method` is unknown.
    """
    if method not in METHODS:
        raise ValueError(f"read_model_columns: method is {method!r}; choose {' or '.join(METHODS)}")
    recognition.require("air_temperature")
    levels = find_levels(source, recognition, TOP)
    require_humidity(recognition)
    grid = find_grid(source, recognition)
    samples, refused = _samples(source, recognition, grid, points, method)
    if not samples:
        return list(refused)
    axes = ModelAxes(source, recognition, grid.dims, samples, levels.read, levels.order)
    fields = read_fields(axes, levels)
    columns, unusable, lead_known = _columns(axes, fields)
    if notes is not None:
        notes += fields.notes
        if method == "bilinear" and points is not None and not grid.regular and grid.count > 1:
            notes.append("latitude and longitude make no regular grid, the nearest column is taken")
        if not lead_known:
            notes.append("no start of the forecast given, lead time counts as 0")
    return [*columns, *unusable, *refused]


def _samples(
    source: Source,
    recognition: Recognition,
    grid: Grid,
    points: Sequence[tuple[str, float, float]] | None,
    method: str,
) -> tuple[list[Sample], list[InputError]]:
    """Places that can be served, and the reason for each that cannot."""
    if points is None:
        return grid.all_columns(_station_names(source, recognition, grid)), []
    samples, refused = [], []
    for name, latitude, longitude in points:
        try:
            samples.append(grid.at(name, latitude, longitude, method))
        except InputError as error:
            refused.append(error)
    return samples, refused


def _station_names(source: Source, recognition: Recognition, grid: Grid) -> list[str] | None:
    """Names of a file's own columns, None when it does not name them."""
    taken = recognition.get("station")
    if taken is not None and not taken.attribute:
        names = source.read_text(taken.variable)
        if len(names) == grid.count and len(set(names)) == len(names) and all(names):
            return names
    words = [
        printable(source.attrs[name], 60).strip()
        for name in recognition.station_attributes
        if str(source.attrs.get(name, "")).strip()
    ]
    return [" ".join(words)] if words and grid.count == 1 else None


def _columns(axes: ModelAxes, fields: ModelFields) -> tuple[list[Column], list[InputError], bool]:
    """Columns, reasons for those that cannot be used, and whether lead times are known."""
    time, lead = axes.times()
    member = axes.members()
    count = int(np.prod(axes.outer_shape, dtype=np.int64))
    shape = (*axes.outer_shape, len(axes.samples), axes.order.size)

    def spread(values: np.ndarray) -> np.ndarray:
        return np.broadcast_to(values, shape).reshape(count, *shape[-2:])

    def spread_surface(values: np.ndarray) -> np.ndarray:
        return np.broadcast_to(values, shape[:-1]).reshape(count, shape[-2])

    height, altitude = spread(fields.height), spread(fields.altitude)
    p, t = spread(fields.pressure), spread(fields.temperature)
    q, outside, wet = rules.limit_humidity(spread(fields.specific_humidity), t, p)
    flags = spread(fields.quality)
    flags = flags | _bit("humidity_out_of_range", outside) | _bit("supersaturation", wet)
    with np.errstate(invalid="ignore"):
        keep = ~(spread(fields.under_ground) | (height > TOP))
    height = np.where(keep, height, np.nan)
    stalled = np.isfinite(height) & ~_rising(height)
    height = np.where(stalled, np.nan, height)
    flags = flags | _bit("height_not_monotonic", stalled)
    complete = np.isfinite(height) & np.isfinite(p) & np.isfinite(t) & np.isfinite(q)
    flags = flags | _bit("value_missing", ~complete)
    u, v = spread(fields.u), spread(fields.v)
    surface_altitude = spread_surface(fields.surface_altitude)
    extras = {name: spread_surface(values) for name, values in fields.extras.items()}
    times, zero = time.reshape(count), np.timedelta64(0, "ns")
    leads = np.full(count, zero) if lead is None else lead.reshape(count)
    members = [None] * count if member is None else [int(m) for m in member.reshape(count)]

    columns, reasons = [], []
    usable = complete.sum(axis=-1) >= 2
    for j, sample in enumerate(axes.samples):
        good = usable[:, j] & ~np.isnat(times)
        if not good.all():
            reasons.append(_unusable(axes, sample, good, np.isnat(times), (height, p, t, q), j))
        for i in np.flatnonzero(good):
            at = keep[i, j]
            column = Column(
                time=times[i],
                latitude=sample.latitude,
                longitude=sample.longitude,
                station=printable(sample.name, 100),
                source_file=axes.source.name,
                height=height[i, j, at],
                altitude=altitude[i, j, at],
                pressure=p[i, j, at],
                temperature=t[i, j, at],
                specific_humidity=q[i, j, at],
                u=u[i, j, at],
                v=v[i, j, at],
                quality=flags[i, j, at].astype(np.int32),
                surface_altitude=float(surface_altitude[i, j]),
                lead_time=zero if np.isnat(leads[i]) else leads[i],
                source_kind="model",
                member=members[i],
                extras={
                    name: float(values[i, j])
                    for name, values in extras.items()
                    if np.isfinite(values[i, j])
                },
            )
            gaps = rules.gaps_near_ground(column.height, column.usable)
            column.quality |= _bit("gap_near_ground", gaps)
            columns.append(column)
    return columns, reasons, lead is not None


def _rising(height: np.ndarray) -> np.ndarray:
    """Levels (last axis) that lie above every level before them."""
    known = np.where(np.isfinite(height), height, -np.inf)
    highest = np.maximum.accumulate(known, axis=-1)
    before = np.concatenate([np.full((*known.shape[:-1], 1), -np.inf), highest[..., :-1]], axis=-1)
    return known > before


def _unusable(
    axes: ModelAxes,
    sample: Sample,
    good: np.ndarray,
    untimed: np.ndarray,
    levels: tuple[np.ndarray, ...],
    place: int,
) -> InputError:
    """Why some or all profiles at a place are set aside, in one line."""
    bad = ~good
    where = f"{int(bad.sum())} of {good.size} profiles at {printable(sample.name, 60)}"
    if untimed[bad].all():
        return InputError(f"{where} have no time", source=axes.source.name)
    words = ("height", "pressure", "temperature", "humidity")
    empty = [
        word
        for word, values in zip(words, levels, strict=True)
        if not np.isfinite(values[bad, place]).any()
    ]
    missing = f" ({' and '.join(empty)} missing at all levels)" if empty else ""
    return InputError(f"{where} have fewer than 2 usable levels{missing}", source=axes.source.name)


def _bit(name: str, mask: np.ndarray) -> np.ndarray:
    return np.where(mask, np.int32(QUALITY_FLAGS[name]), np.int32(0))
