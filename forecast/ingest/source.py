"""Opens a netCDF file safely: whether it is one, and what it declares to hold.

Files come from outside: nothing is opened before its kind is known, nothing is read before its
size is known, and text is escaped before it is shown. The netCDF library is used directly, since
opening many small files through a labelled dataset costs tens of times more.
"""

from __future__ import annotations

import os
import stat
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np

from forecast.errors import InputError, printable
from forecast.ingest.classic_header import declared_length

__all__ = ["MAX_LEVELS", "MAX_VALUES", "Source", "VariableInfo", "decode_times", "open_source"]

#: Most values read from a variable at once (160 MB as float64); common sense, no source.
MAX_VALUES = 20_000_000

#: Most levels of one profile: 55 hours at one per second; common sense, no source.
MAX_LEVELS = 200_000

#: Most variables and most characters of an attribute that are looked at.
MAX_VARIABLES = 5_000
MAX_ATTRIBUTE = 10_000

#: Calendars whose dates are those of real nights (CF section 4.4.1).
REAL_CALENDARS = ("standard", "gregorian", "proleptic_gregorian")

#: Seconds per unit of time; longer units have no fixed length and are refused.
_SECONDS = {
    **dict.fromkeys(("microsecond", "microseconds", "us", "microsec", "microsecs"), 1e-6),
    **dict.fromkeys(("millisecond", "milliseconds", "ms", "msec", "msecs", "millisec"), 1e-3),
    **dict.fromkeys(("second", "seconds", "s", "sec", "secs"), 1.0),
    **dict.fromkeys(("minute", "minutes", "min", "mins"), 60.0),
    **dict.fromkeys(("hour", "hours", "h", "hr", "hrs"), 3600.0),
    **dict.fromkeys(("day", "days", "d"), 86400.0),
}

_HDF5 = b"\x89HDF\r\n\x1a\n"
_CLASSIC = (b"CDF\x01", b"CDF\x02", b"CDF\x05")


@dataclass(frozen=True)
class VariableInfo:
    """What a file declares about one variable."""

    name: str
    dims: tuple[str, ...]
    shape: tuple[int, ...]
    dtype: Any
    attrs: dict[str, Any] = field(repr=False)

    @cached_property
    def units(self) -> str | None:
        """Declared unit, None when the attribute is absent or blank."""
        text = self.attrs.get("units")
        return text.strip() if isinstance(text, str) and text.strip() else None

    @cached_property
    def standard_name(self) -> str | None:
        """CF standard name, None when absent."""
        text = self.attrs.get("standard_name")
        return text.strip() if isinstance(text, str) and text.strip() else None

    @property
    def is_text(self) -> bool:
        """Whether the variable holds characters or strings."""
        return self.dtype is str or getattr(self.dtype, "kind", "") in "SUO"


class Source:
    """An open netCDF file: declared variables, bounded reading.

    Attributes
    ----------
    name : str
        Base name, printable.
    variables : dict of str to VariableInfo
        What the file declares.
    dims : dict of str to int
        Dimension sizes.
    attrs : dict
        Global attributes; text is bounded.
    has_groups : bool
        Whether there are groups, which are not read.
    """

    def __init__(self, path: Path, dataset: Any):
        self.path = path
        self.name = printable(path.name)
        self._dataset = dataset
        if len(dataset.variables) > MAX_VARIABLES:
            raise InputError(
                f"holds {len(dataset.variables)} variables; at most {MAX_VARIABLES} are read",
                source=self.name,
            )
        self.has_groups = bool(dataset.groups)
        self.dims = {name: len(dim) for name, dim in dataset.dimensions.items()}
        try:
            self.attrs = _attributes(dataset)
            self.variables = {
                name: VariableInfo(
                    name, tuple(v.dimensions), tuple(v.shape), v.dtype, _attributes(v)
                )
                for name, v in dataset.variables.items()
            }
        except (UnicodeError, RuntimeError) as error:
            raise InputError(
                f"is damaged: its attributes cannot be read ({error})",
                source=self.name,
                remedy="fetch it again",
            ) from error

    def read(self, name: str, index: Any = ...) -> np.ndarray:
        """Values of a numeric variable, unpacked, NaN where missing.

        Parameters
        ----------
        name : str
            Variable.
        index : tuple of int or slice, optional
            Part to read, one entry per dimension; by default the whole variable.

        Returns
        -------
        ndarray of float64

        Raises
        ------
        InputError
            If the part is larger than `MAX_VALUES`, is not numeric, or the file is damaged there.
        """
        info = self.variables[name]
        if info.is_text:
            raise InputError("holds text; numbers are expected", source=self.name, variable=name)
        size = _selected_size(info.shape, index)
        if size > MAX_VALUES:
            raise InputError(
                f"declares {size} values; at most {MAX_VALUES} are read at once",
                source=self.name,
                variable=name,
                remedy="cut the file to the period and area that are needed",
            )
        values = self._get(name, index)
        try:
            numbers = np.ma.asarray(values).astype(np.float64, copy=False)
        except (TypeError, ValueError) as error:
            raise InputError(
                f"holds {printable(info.dtype, 60)} values; numbers are expected",
                source=self.name,
                variable=name,
            ) from error
        return np.asarray(np.ma.filled(numbers, np.nan), dtype=np.float64)

    def read_text(self, name: str) -> list[str]:
        """Strings of a text variable (character array or strings), printable and bounded."""
        info = self.variables[name]
        if not info.is_text:
            numbers = np.atleast_1d(self.read(name)).ravel()
            return [f"{x:.12g}" if np.isfinite(x) else "" for x in numbers]
        if _selected_size(info.shape, ...) > MAX_VALUES:
            raise InputError("declares too much text", source=self.name, variable=name)
        values = np.ma.filled(np.ma.asarray(self._get(name, ...)), "")
        if values.dtype.kind == "S" and values.ndim and values.dtype.itemsize == 1:
            rows = values.reshape(-1, values.shape[-1]) if values.size else values.reshape(0, 0)
            texts = [b"".join(row).decode("utf-8", "replace") for row in rows]
        else:
            texts = [
                t.decode("utf-8", "replace") if isinstance(t, bytes) else str(t)
                for t in np.atleast_1d(values).ravel()
            ]
        return [printable(t.split("\x00", 1)[0].strip(), 100) for t in texts]

    def read_times(self, name: str, index: Any = ..., units: str | None = None) -> np.ndarray:
        """Values of a time variable as datetime64[ns] (UTC), NaT where missing."""
        info = self.variables[name]
        return decode_times(
            self.read(name, index),
            units or info.units,
            info.attrs.get("calendar"),
            source=self.name,
            variable=name,
        )

    def _get(self, name: str, index: Any) -> Any:
        try:
            with warnings.catch_warnings():
                # The library warns of attributes it cannot apply; the values are checked later.
                warnings.simplefilter("ignore")
                return self._dataset.variables[name][index]
        except (RuntimeError, OSError, ValueError, TypeError, IndexError) as error:
            raise InputError(
                f"cannot be read: damaged or truncated ({error})", source=self.name, variable=name
            ) from error


@contextmanager
def open_source(path: str | os.PathLike[str]) -> Iterator[Source]:
    """Open a netCDF file, or say why it is none.

    Parameters
    ----------
    path : path-like
        A local file.

    Yields
    ------
    Source

    Raises
    ------
    InputError
        If the file is missing, no regular file, not readable, empty, text, another kind of file,
        truncated or damaged.
    """
    import netCDF4

    path = Path(path)
    _check_kind(path)
    try:
        dataset = netCDF4.Dataset(os.fspath(path), "r")
    except (OSError, RuntimeError, UnicodeError) as error:
        raise InputError(
            f"is damaged or truncated: it begins like netCDF but cannot be opened "
            f"({getattr(error, 'strerror', None) or error})",
            source=path.name,
            remedy="fetch it again",
        ) from error
    try:
        yield Source(path, dataset)
    finally:
        dataset.close()


def decode_times(
    values: Any, units: str | None, calendar: Any, *, source: str = "", variable: str = ""
) -> np.ndarray:
    """Times from numbers, a unit like ``hours since 2024-05-24`` and a calendar.

    Parameters
    ----------
    values : array_like
        Numbers; NaN becomes NaT.
    units : str or None
        CF unit of time.
    calendar : str or None
        CF calendar; None is ``standard``.
    source, variable : str
        Named in the error.

    Returns
    -------
    ndarray of datetime64[ns]

    Raises
    ------
    InputError
        If the unit or calendar cannot be used, or a time lies outside the years 1678–2261.
    """
    where = {"source": source, "variable": variable}
    name = "standard" if calendar is None else str(calendar).strip().lower()
    if name not in REAL_CALENDARS:
        raise InputError(
            f"calendar is {printable(calendar, 60)!r}, whose dates cannot be matched to real "
            f"nights; expected one of {', '.join(REAL_CALENDARS)}",
            **where,
        )
    word, _, epoch_text = (units or "").partition(" since ")
    seconds = _SECONDS.get(word.strip().lower())
    if seconds is None or not epoch_text.strip():
        raise InputError(
            f"unit of time is {printable(units, 60)!r}; expected 'seconds since <date>', also "
            "minutes, hours or days",
            **where,
            remedy=f'set names.time = "{variable} [seconds since <date>]"',
        )
    numbers = np.asarray(values, dtype=np.float64)
    epoch = _epoch(epoch_text.strip(), name, where)
    offsets = numbers * seconds
    with np.errstate(invalid="ignore"):
        total = offsets + epoch.astype("datetime64[s]").astype(np.int64)
        bad = np.isfinite(total) & ((total < -9.2e9) | (total > 9.2e9))
    if bad.any():
        raise InputError(
            f"holds times outside the years 1678 to 2261 (first such value "
            f"{numbers[bad].flat[0]:g} {printable(units, 60)})",
            **where,
        )
    whole = np.floor(np.nan_to_num(offsets))
    rest = np.round((np.nan_to_num(offsets) - whole) * 1e9)
    result = (
        epoch.astype("datetime64[ns]")
        + whole.astype("timedelta64[s]").astype("timedelta64[ns]")
        + rest.astype("timedelta64[ns]")
    )
    return np.where(np.isfinite(numbers), result, np.datetime64("NaT", "ns"))


def _epoch(text: str, calendar: str, where: dict[str, str]) -> np.datetime64:
    """Reference date as datetime64[us] of the proleptic Gregorian calendar."""
    import cftime

    try:
        date = cftime.num2date(0, f"seconds since {text}", calendar="standard")
    except (ValueError, OverflowError, TypeError) as error:
        raise InputError(
            f"reference date of the time unit is {printable(text, 60)!r} ({error})", **where
        ) from error
    if date.year < 1583:
        if calendar == "proleptic_gregorian":
            date = cftime.num2date(0, f"seconds since {text}", calendar=calendar)
        else:
            # Days since a Julian date: count them to a date both calendars share.
            shared = cftime.num2date(0, "seconds since 2000-01-01", calendar="standard")
            return np.datetime64("2000-01-01", "us") - np.timedelta64(
                round((shared - date).total_seconds() * 1e6), "us"
            )
    return np.datetime64(date.isoformat(), "us")


def _check_kind(path: Path) -> None:
    """Raise InputError unless the file is regular, readable and begins like netCDF."""
    try:
        status = path.stat()
        head = b""
        if stat.S_ISREG(status.st_mode):
            with path.open("rb") as stream:
                head = stream.read(4096)
    except FileNotFoundError as error:
        raise InputError("does not exist", source=path.name) from error
    except PermissionError as error:
        raise InputError(
            "may not be read (permission denied)",
            source=path.name,
            remedy="give the account that runs bendcast read access",
        ) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise InputError(f"cannot be opened ({reason})", source=path.name) from error
    if not stat.S_ISREG(status.st_mode):
        kind = "a folder" if stat.S_ISDIR(status.st_mode) else "no regular file"
        raise InputError(f"is {kind}; expected a netCDF file", source=path.name)
    if not head:
        raise InputError("is empty (0 bytes)", source=path.name, remedy="fetch it again")
    if head.startswith(_CLASSIC):
        _check_classic_size(path, status.st_size)
    elif not _is_hdf5(head):
        kind = "text" if _looks_like_text(head) else "not a netCDF file"
        raise InputError(
            f"is {kind}: expected netCDF (classic or HDF5), found {_describe(head)}",
            source=path.name,
        )


def _is_hdf5(head: bytes) -> bool:
    """Whether an HDF5 signature stands at the start or after a user block of 512·2ⁿ bytes."""
    if head.startswith(_HDF5):
        return True
    return any(head[at : at + 8] == _HDF5 for at in (512, 1024, 2048))


def _check_classic_size(path: Path, size: int) -> None:
    """Refuse a classic file shorter than its header declares.

    The library reads beyond the end of such a file without complaint and delivers zeros.
    """
    try:
        with path.open("rb") as stream:
            expected = declared_length(stream)
    except ValueError as error:
        raise InputError(
            f"is truncated or damaged: {error}", source=path.name, remedy="fetch it again"
        ) from error
    if size < expected:
        raise InputError(
            f"is truncated: {size} bytes long, its header declares {expected}",
            source=path.name,
            remedy="fetch it again",
        )


def _looks_like_text(head: bytes) -> bool:
    printable_bytes = sum(byte in b"\t\n\r\f" or byte >= 32 for byte in head)
    return b"\x00" not in head and printable_bytes >= 0.95 * len(head)


def _describe(head: bytes) -> str:
    return printable(repr(head[:16].decode("latin-1")), 60)


def _attributes(holder: Any) -> dict[str, Any]:
    """Attributes of a dataset or variable; overlong text is cut, other overlong values left out."""
    result = {}
    for name in holder.ncattrs():
        try:
            value = holder.getncattr(name)
        except (RuntimeError, AttributeError, UnicodeError, ValueError):
            continue
        if isinstance(value, str):
            result[name] = value[:MAX_ATTRIBUTE]
        elif np.size(value) <= MAX_ATTRIBUTE:
            result[name] = value
    return result


def _selected_size(shape: tuple[int, ...], index: Any) -> int:
    """Number of values that an index selects, counted without reading."""
    if index is ...:
        index = ()
    index = index if isinstance(index, tuple) else (index,)
    size = 1
    for axis, length in enumerate(shape):
        part = index[axis] if axis < len(index) else slice(None)
        if isinstance(part, slice):
            size *= len(range(*part.indices(length)))
        elif np.ndim(part):
            size *= int(np.size(part))
    return size
