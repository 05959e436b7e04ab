"""From files to the Profiles dataset: recognise, read, check, assemble.

A file that cannot be used is set aside with its reason and never stops the others.
"""

from __future__ import annotations

import os
import warnings
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from forecast.errors import InputError, printable

if TYPE_CHECKING:
    import xarray as xr

    from forecast.ingest.assemble import Column
    from forecast.ingest.inspect import FileReport

__all__ = ["Point", "Reading", "SetAside", "inspect_files", "open_profiles", "read_files"]

#: Name, latitude and longitude (degrees) at which gridded data are taken.
Point = tuple[str, float, float]

#: Most profiles of one file that are set aside one by one.
MAX_REASONS_PER_FILE = 20


@dataclass(frozen=True)
class SetAside:
    """An input refused: base name of the file, and why in one line."""

    file: str
    reason: str


@dataclass
class Reading:
    """What came of reading files.

    Attributes
    ----------
    profiles : xarray.Dataset or None
        The Profiles dataset; None if nothing could be used.
    set_aside : list of SetAside
        Files, or single profiles of files, that were refused.
    notes : list of str
        What a user may want to know: how files were read, counts of quality flags.
    """

    profiles: xr.Dataset | None
    set_aside: list[SetAside] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)


def read_files(
    paths: Iterable[str | os.PathLike[str]],
    *,
    names: Mapping[str, str] | None = None,
    points: Iterable[Point] | None = None,
    method: str = "bilinear",
    progress: Callable[[int, int, str], None] | None = None,
) -> Reading:
    """Read soundings and model columns from netCDF files.

    Parameters
    ----------
    paths : iterable of path-like
        Files; their order does not matter.
    names : mapping of str to str, optional
        Which variable fills a role, before all recognition: role → ``variable`` or
        ``variable [unit]``. Roles are listed in `forecast.ingest.roles.ROLES`.
    points : iterable of (name, latitude, longitude), optional
        Where to take columns from gridded model data.
    method : {"bilinear", "nearest"}
        How to take them.
    progress : callable, optional
        Called with files done, files in all, and the name of the file at hand.

    Returns
    -------
    Reading
        Profiles sorted by station, time, lead time and file.

    Raises
    ------
    InputError
        If `names` itself has faults.
    """
    from forecast.ingest.assemble import assemble, set_aside_duplicates, set_aside_oversize
    from forecast.ingest.recognition import parse_names

    parse_names(names)
    places = None if points is None else list(points)
    files = [Path(path) for path in paths]
    columns: list[Column] = []
    set_aside: list[SetAside] = []
    notes: list[str] = []
    for number, path in enumerate(files):
        if progress is not None:
            progress(number, len(files), printable(path.name))
        kept, refused = _read_file(path, names, places, method, notes)
        columns += kept
        set_aside += refused
    if progress is not None:
        progress(len(files), len(files), "")
    for choose in (set_aside_duplicates, set_aside_oversize):
        columns, dropped = choose(columns)
        set_aside += [SetAside(file, printable(reason)) for file, reason in dropped]
    set_aside.sort(key=lambda item: (item.file, item.reason))
    if not columns:
        return Reading(None, set_aside, sorted(notes))
    return Reading(assemble(columns), set_aside, [*sorted(notes), *_flag_notes(columns)])


def open_profiles(
    paths: str | os.PathLike[str] | Iterable[str | os.PathLike[str]],
    names: Mapping[str, str] | None = None,
    *,
    points: Iterable[Point] | None = None,
    method: str = "bilinear",
) -> xr.Dataset:
    """Profiles dataset of one or more files; inputs that are set aside are warned of.

    Parameters
    ----------
    paths : path-like or iterable of path-like
    names, points, method
        See `read_files`.

    Returns
    -------
    xarray.Dataset
        Dims ``(profile, level)``; see `forecast.schema`.

    Raises
    ------
    InputError
        If nothing can be used; the reasons are listed.
    """
    if isinstance(paths, str | os.PathLike):
        paths = [paths]
    reading = read_files(paths, names=names, points=points, method=method)
    if reading.profiles is None:
        reasons = "; ".join(f"{item.file}: {item.reason}" for item in reading.set_aside[:5])
        if len(reading.set_aside) == 1:
            raise InputError(reading.set_aside[0].reason, source=reading.set_aside[0].file)
        raise InputError(f"no profile can be used: {reasons or 'no files given'}")
    for item in reading.set_aside:
        warnings.warn(f"set aside {item.file}: {item.reason}", UserWarning, stacklevel=2)
    return reading.profiles


def inspect_files(
    paths: Iterable[str | os.PathLike[str]], *, names: Mapping[str, str] | None = None
) -> list[FileReport]:
    """What would be taken for what in each file, and what would be refused and why.

    Parameters
    ----------
    paths : iterable of path-like
    names : mapping of str to str, optional
        See `read_files`.

    Returns
    -------
    list of FileReport
        In the order of `paths`.

    Raises
    ------
    InputError
        If `names` itself has faults.
    """
    from forecast.ingest.inspect import inspect_file
    from forecast.ingest.recognition import parse_names

    parse_names(names)
    return [inspect_file(Path(path), names) for path in paths]


def _read_file(
    path: Path,
    names: Mapping[str, str] | None,
    points: list[Point] | None,
    method: str,
    notes: list[str],
) -> tuple[list[Column], list[SetAside]]:
    """Columns of one file, and what of it is set aside; never raises for what the file holds."""
    from forecast.ingest.dispatch import read_columns
    from forecast.ingest.recognise import recognise
    from forecast.ingest.source import open_source

    name = printable(path.name)
    found_notes: list[str] = []
    try:
        with open_source(path) as source:
            found = read_columns(source, recognise(source, names), points, method, found_notes)
    except InputError as error:
        return [], [SetAside(name, one_line(error))]
    except Exception as error:
        # A reader's own fault must not stop the batch; the type helps to report it.
        return [], [SetAside(name, f"unexpected: {type(error).__name__}: {printable(error)}")]
    notes += [f"{name}: {printable(note)}" for note in found_notes]
    columns = [item for item in found if not isinstance(item, InputError)]
    reasons = [one_line(item) for item in found if isinstance(item, InputError)]
    more = len(reasons) - MAX_REASONS_PER_FILE
    if more > 0:
        reasons = [*reasons[:MAX_REASONS_PER_FILE], f"and {more} more profiles of this file"]
    if not columns and not reasons:
        reasons = ["holds no profiles"]
    return columns, [SetAside(name, reason) for reason in reasons]


def one_line(error: InputError) -> str:
    """An error's text without the file's name."""
    text = f"{printable(error.variable)}: " if error.variable else ""
    text += printable(error.reason)
    return f"{text}; {printable(error.remedy)}" if error.remedy else text


def _flag_notes(columns: list[Column]) -> list[str]:
    """One line per quality flag: levels and profiles that carry it."""
    from forecast.schema import QUALITY_FLAGS

    notes = []
    for flag, bit in QUALITY_FLAGS.items():
        counts = [int(((column.quality & bit) != 0).sum()) for column in columns]
        profiles = sum(count > 0 for count in counts)
        if profiles:
            notes.append(f"quality {flag}: {sum(counts)} levels in {profiles} profiles")
    return notes
