"""Water temperature at a place over time, from a buoy's CSV or a netCDF file, at any valid time.

A CSV has a header: a column of times (ISO 8601, UTC unless it says otherwise), one of water
temperatures whose name carries the unit (``sea_surface_temperature_c``, ``water_temperature
[degC]``) and, if wanted, one of wind speed (``wind_speed [m/s]``, taken at 10 m). Lines that begin
with ``#`` are comments. netCDF is read by standard names, then by common ones. A unit that
contradicts the values is an error, not a guess.
"""

from __future__ import annotations

import csv
import os
import re
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np

from forecast.errors import InputError, printable
from forecast.ingest.source import Source, open_source
from forecast.ingest.units import convert

__all__ = ["TOLERANCE", "WaterSeries", "read_water_series"]

#: How far in time a value may lie and still speak for the water; common sense, no source.
TOLERANCE = np.timedelta64(6 * 3600, "s")

_WIND_SHARE = 6  # wind changes faster: it speaks for a sixth of that time
_LARGEST_FILE = 64_000_000  # bytes of CSV
_MOST_ROWS = 2_000_000
_PLAUSIBLE = (268.15, 313.15)  # K, water at sea
_WINDIEST = 100.0  # m/s

_TIME = ("time", "datetime", "date_time", "timestamp", "valid_time", "date")
_TEMPERATURE = (
    "sea_surface_temperature",
    "sea_surface_skin_temperature",
    "sea_surface_subskin_temperature",
    "sea_water_temperature",
    "water_temperature",
    "sea_temperature",
    "sst",
    "wtmp",
)
_WIND = ("wind_speed", "windspeed", "wspd")
_MISSING = {"", "-", "--", "mm", "na", "n/a", "nan", "none", "null"}
_SUFFIXES = {
    "c": "degC", "degc": "degC", "celsius": "degC", "k": "K", "kelvin": "K", "f": "degF",
    "degf": "degF", "m_s": "m/s", "ms": "m/s", "mps": "m/s", "m_s_1": "m/s", "kt": "knot",
    "kts": "knot", "knots": "knot", "kn": "knot",
}  # fmt: skip
_LABEL = re.compile(r"\s*(?P<name>[^\[\](){}]*?)\s*(?:[\[(](?P<unit>[^\[\]()]*)[\])])?\s*")


@dataclass(frozen=True)
class WaterSeries:
    """Water temperatures of one place.

    ``time`` ascending, datetime64[s], UTC; ``temperature`` K and ``wind`` m/s at 10 m, NaN where
    missing (``wind`` all NaN if there is none); ``refused``: values that no water can have, which
    count as missing.
    """

    time: np.ndarray
    temperature: np.ndarray
    wind: np.ndarray
    refused: int = 0
    source: str = ""

    def at(
        self, times: Any, tolerance: np.timedelta64 = TOLERANCE
    ) -> tuple[np.ndarray, np.ndarray]:
        """Temperature and wind at given times.

        Linear between neighbours no further apart than twice the tolerance, else the nearer one;
        missing values are passed over.

        Parameters
        ----------
        times : array_like of datetime64
            UTC; NaT gives NaN.
        tolerance : timedelta64
            NaN where no temperature is as near as this; for wind a sixth of it.

        Returns
        -------
        tuple of ndarray
            Temperature (K) and wind speed (m/s), of the shape of `times`.
        """
        wanted = np.asarray(times).astype("datetime64[s]")
        return (
            _interpolate(wanted, self.time, self.temperature, tolerance),
            _interpolate(wanted, self.time, self.wind, tolerance / _WIND_SHARE),
        )


def read_water_series(path: str | os.PathLike[str]) -> WaterSeries:
    """Read the water temperatures of one place.

    Parameters
    ----------
    path : path-like
        CSV (at most 64 MB) or netCDF with one value per time.

    Returns
    -------
    WaterSeries
        Sorted by time; of several values for one time the first.

    Raises
    ------
    InputError
        If the file cannot be read, has no column of times or water temperatures, no unit, more
        than one place, values that contradict the unit, or no value at all.
    """
    path = Path(path)
    try:
        with path.open("rb") as stream:
            head = stream.read(4096)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(f"cannot be read ({reason})", source=path.name) from error
    binary = head.startswith((b"CDF", b"\x89HDF")) or b"\x00" in head
    read = _read_netcdf if binary else _read_csv
    time, temperature, wind, refused = read(path)
    good = ~np.isnat(time)
    time, first = np.unique(time[good], return_index=True)
    temperature, wind = temperature[good][first], wind[good][first]
    if not np.isfinite(temperature).any():
        raise InputError(
            "holds no water temperature at all; every value is missing", source=path.name
        )
    return WaterSeries(time, temperature, wind, refused, printable(path.name))


def _interpolate(
    wanted: np.ndarray, time: np.ndarray, values: np.ndarray, tolerance: np.timedelta64
) -> np.ndarray:
    have = np.isfinite(values)
    result = np.full(wanted.shape, np.nan)
    if not have.any():
        return result
    known, value = time[have].astype(np.int64), values[have]
    reach = tolerance / np.timedelta64(1, "s")
    asked = ~np.isnat(wanted)
    x = wanted[asked].astype(np.int64)
    right = np.minimum(np.searchsorted(known, x), known.size - 1)
    left = np.maximum(right - 1, 0)
    before, after = np.abs(x - known[left]), np.abs(known[right] - x)
    nearest = np.where(before <= after, value[left], value[right])
    between = (known[left] <= x) & (x <= known[right]) & (known[right] - known[left] <= 2 * reach)
    answer = np.where(between, np.interp(x, known, value), nearest)
    result[asked] = np.where(np.minimum(before, after) <= reach, answer, np.nan)
    return result


def _kelvin(values: np.ndarray, unit: str, source: str, name: str) -> tuple[np.ndarray, int]:
    """Values in K with those refused that no water has, and how many those were."""
    kelvin = convert(values, unit, "K", source=source, variable=name)
    low, high = _PLAUSIBLE
    finite = np.isfinite(kelvin)
    good = finite & (kelvin >= low) & (kelvin <= high)
    if finite.any() and good.sum() < 0.5 * finite.sum():
        typical = float(np.median(values[np.isfinite(values)]))
        hint = ""
        for other in ("degC", "K"):
            meant = float(convert(typical, other, "K"))
            if low <= meant <= high:
                hint = f"; they look like {other}"
        raise InputError(
            f"unit {printable(unit, 60)!r} contradicts the values (median {typical:.4g}){hint}; "
            f"water has {low:g} to {high:g} K",
            source=source,
            variable=name,
            remedy="correct the unit in the file or in the column's name",
        )
    return np.where(good, kelvin, np.nan), int((finite & ~good).sum())


def _speeds(values: np.ndarray, unit: str, source: str, name: str) -> np.ndarray:
    speed = convert(values, unit, "m s-1", source=source, variable=name)
    return np.where((speed >= 0.0) & (speed <= _WINDIEST), speed, np.nan)


def _read_netcdf(path: Path) -> tuple[np.ndarray, np.ndarray, np.ndarray, int]:
    with open_source(path) as source:
        name = _variable(source, _TEMPERATURE)
        if name is None:
            raise InputError(
                f"holds no water temperature; expected a variable with standard_name "
                f"{_TEMPERATURE[0]} or {_TEMPERATURE[3]}",
                source=source.name,
            )
        when = _variable(source, _TIME[:1])
        if when is None:
            raise InputError("holds no variable of times", source=source.name)
        time = source.read_times(when).ravel().astype("datetime64[s]")
        raw, unit = _along_time(source, name, time.size)
        temperature, refused = _kelvin(raw, unit, source.name, name)
        wind = np.full(time.size, np.nan)
        blowing = _variable(source, _WIND)
        if blowing is not None:
            speed, unit = _along_time(source, blowing, time.size)
            wind = _speeds(speed, unit, source.name, blowing)
        return time, temperature, wind, refused


def _variable(source: Source, names: tuple[str, ...]) -> str | None:
    """The variable with one of these standard names, else with one of them as its own name."""
    for wanted in names:
        for name, info in source.variables.items():
            if info.standard_name == wanted and not info.is_text:
                return name
    lower = {name.lower(): name for name in source.variables}
    return next((lower[wanted] for wanted in names if wanted in lower), None)


def _along_time(source: Source, name: str, size: int) -> tuple[np.ndarray, str]:
    info = source.variables[name]
    if int(np.prod(info.shape)) != size:
        shape = " x ".join(map(str, info.shape)) or "one value"
        raise InputError(
            f"has {shape}; expected one value for each of {size} times, at one place",
            source=source.name,
            variable=name,
            remedy="cut the series of the place out first",
        )
    if info.units is None:
        raise InputError("has no unit", source=source.name, variable=name)
    return source.read(name).ravel(), info.units


def _read_csv(path: Path) -> tuple[np.ndarray, np.ndarray, np.ndarray, int]:
    source = printable(path.name)
    if path.stat().st_size > _LARGEST_FILE:
        raise InputError(f"is larger than {_LARGEST_FILE // 10**6} MB", source=source)
    try:
        # Newlines are left to the csv module.
        with path.open(encoding="utf-8-sig", newline="") as stream:
            lines = ((n, line) for n, line in enumerate(stream, 1) if _says_something(line))
            return _table(lines, source)
    except UnicodeDecodeError as error:
        raise InputError("is not UTF-8 text", source=source) from error
    except csv.Error as error:
        raise InputError(f"is no CSV ({error})", source=source) from error


def _says_something(line: str) -> bool:
    return bool(line.strip()) and not line.lstrip().startswith("#")


def _table(
    lines: Iterator[tuple[int, str]], source: str
) -> tuple[np.ndarray, np.ndarray, np.ndarray, int]:
    _, header = next(lines, (0, ""))
    delimiter = max(",;\t", key=header.count)
    labels = next(csv.reader([header], delimiter=delimiter), [])
    when, _ = _column(labels, _TIME, source, "times")
    water, unit = _column(labels, _TEMPERATURE, source, "water temperatures")
    blowing, wind_unit = _column(labels, _WIND, source, None)
    times: list[np.datetime64] = []
    degrees: list[float] = []
    speeds: list[float] = []
    for number, line in lines:
        if len(times) == _MOST_ROWS:
            raise InputError(f"has more than {_MOST_ROWS} rows", source=source)
        cells = next(csv.reader([line], delimiter=delimiter))
        if len(cells) != len(labels):
            raise InputError(
                f"line {number} has {len(cells)} cells; the header has {len(labels)}",
                source=source,
            )
        times.append(_moment(cells[when], number, source))
        degrees.append(_figure(cells[water], number, source))
        speeds.append(np.nan if blowing < 0 else _figure(cells[blowing], number, source))
    name = labels[water].strip()
    temperature, refused = _kelvin(np.array(degrees), unit, source, name)
    wind = np.array(speeds)
    if blowing >= 0:
        wind = _speeds(wind, wind_unit, source, labels[blowing].strip())
    return np.array(times, dtype="datetime64[s]"), temperature, wind, refused


def _column(
    labels: list[str], names: tuple[str, ...], source: str, what: str | None
) -> tuple[int, str]:
    """Place of the column that is one of `names`, and its unit; −1 if it may be missing and is."""
    for wanted in names:
        for place, label in enumerate(labels):
            name, unit = _name_and_unit(label)
            if name != wanted:
                continue
            if not unit and names is not _TIME:
                raise InputError(
                    "has no unit",
                    source=source,
                    variable=label.strip(),
                    remedy=f'put it into the header, as in "{wanted} [degC]"'
                    if names is _TEMPERATURE
                    else f'put it into the header, as in "{wanted} [m/s]"',
                )
            return place, unit
    if what is None:
        return -1, ""
    found = ", ".join(printable(label.strip(), 40) for label in labels[:20])
    raise InputError(
        f"has no column of {what}; the header names {found or 'nothing'}",
        source=source,
        remedy=f'name one "{names[0]}" or {", ".join(names[1:4])}',
    )


def _name_and_unit(label: str) -> tuple[str, str]:
    match = _LABEL.fullmatch(label)
    if match is None:
        return "", ""
    name = re.sub(r"[\s\-]+", "_", match["name"].strip().lower())
    if match["unit"] is not None:
        return name, match["unit"].strip()
    for suffix, unit in _SUFFIXES.items():
        if name.endswith(f"_{suffix}"):
            return name[: -len(suffix) - 1], unit
    return name.removesuffix("_utc"), ""


def _moment(text: str, number: int, source: str) -> np.datetime64:
    text = text.strip()
    if text.lower() in _MISSING:
        return np.datetime64("NaT", "s")
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        raise InputError(
            f"line {number}: {printable(text, 40)!r} is no time; expected ISO 8601, such as "
            "2031-05-01T06:00:00Z",
            source=source,
        ) from None
    if moment.tzinfo is not None:
        moment = moment.astimezone(UTC).replace(tzinfo=None)
    return np.datetime64(moment, "s")


def _figure(text: str, number: int, source: str) -> float:
    text = text.strip()
    if text.lower() in _MISSING:
        return np.nan
    try:
        return float(text)
    except ValueError:
        raise InputError(
            f"line {number}: {printable(text, 40)!r} is no number", source=source
        ) from None
