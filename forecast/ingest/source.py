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
from forecast.ingest.times import decode_times

__all__ = ["MAX_LEVELS", "MAX_VALUES", "Source", "VariableInfo", "open_source"]

#: Most values read from a variable at once (160 MB as float64); common sense, no source.
MAX_VALUES = 20_000_000

#: Most levels of one profile: 55 hours at one per second; common sense, no source.
MAX_LEVELS = 200_000

#: Largest chunk that is unpacked, bytes: one value costs the memory of its whole chunk.
MAX_CHUNK = 256 * 1024**2

#: Most variables and most characters of an attribute that are looked at.
MAX_VARIABLES = 5_000
MAX_ATTRIBUTE = 10_000

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
        self._check_chunk(name)
        try:
            with warnings.catch_warnings():
                # The library warns of attributes it cannot apply; the values are checked later.
                warnings.simplefilter("ignore")
                return self._dataset.variables[name][index]
        except (RuntimeError, OSError, ValueError, TypeError, IndexError) as error:
            raise InputError(
                f"cannot be read: damaged or truncated ({error})", source=self.name, variable=name
            ) from error

    def _check_chunk(self, name: str) -> None:
        chunks = self._dataset.variables[name].chunking()
        itemsize = getattr(self.variables[name].dtype, "itemsize", 8)
        if isinstance(chunks, list) and np.prod(chunks, dtype=float) * itemsize > MAX_CHUNK:
            raise InputError(
                f"is stored in chunks of {' x '.join(map(str, chunks))} values; at most "
                f"{MAX_CHUNK // 1024**2} MB are unpacked at once",
                source=self.name,
                variable=name,
                remedy="store the file anew with smaller chunks",
            )


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
