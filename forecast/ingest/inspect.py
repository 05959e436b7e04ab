"""What would be taken for what in a file, and what would be refused and why: for people."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from forecast.errors import InputError, printable
from forecast.ingest import one_line
from forecast.ingest.assemble import Column
from forecast.ingest.dispatch import is_gridded, is_model, read_columns
from forecast.ingest.quality import flag_counts
from forecast.ingest.recognise import read_role, recognise
from forecast.ingest.recognition import Recognition
from forecast.ingest.source import Source, open_source

__all__ = ["FileReport", "inspect_file"]

#: Depth over which the vertical resolution near the ground is given, m.
NEAR_GROUND = 300.0

#: Most candidates and reasons that are listed.
MAX_LISTED = 30


@dataclass
class FileReport:
    """Report on one file.

    Attributes
    ----------
    file : str
        Base name.
    kind : str
        ``soundings``, ``model columns`` or empty when neither.
    layouts : list of str
        Known layouts that apply.
    taken : list of dict
        ``role``, ``variable``, ``how``, ``units`` (before), ``units_after``, ``dims``.
    not_taken : list of dict
        ``role``, ``variable``, ``reason``.
    problems : list of str
        Roles whose candidates cannot be used, with what to set.
    refused : list of str
        Why the file, or which of its profiles, would be set aside.
    profiles : int
        Profiles that would be used.
    stations : list of str
    first_time, last_time : str or None
        ISO 8601, UTC.
    levels : int
        Most levels of a profile.
    lowest_level : float or None
        Median height of the first usable level, m above ground.
    near_ground_spacing : float or None
        Median over profiles of the mean spacing of usable levels in the lowest 300 m, m.
    flags : dict of str to int
        Levels that carry each quality flag.
    notes : list of str
    """

    file: str
    kind: str = ""
    layouts: list[str] = field(default_factory=list)
    taken: list[dict[str, str]] = field(default_factory=list)
    not_taken: list[dict[str, str]] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)
    refused: list[str] = field(default_factory=list)
    profiles: int = 0
    stations: list[str] = field(default_factory=list)
    first_time: str | None = None
    last_time: str | None = None
    levels: int = 0
    lowest_level: float | None = None
    near_ground_spacing: float | None = None
    flags: dict[str, int] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)

    def to_dict(self) -> dict[str, Any]:
        """The report as JSON-safe types."""
        return {
            name: (list(value) if isinstance(value, list) else value)
            for name, value in vars(self).items()
        }

    def to_text(self) -> str:
        """The report as a table for people."""
        lines = [self.file + (f"  ({self.kind})" if self.kind else "")]
        if self.layouts:
            lines.append(f"  layouts: {'; '.join(self.layouts)}")
        if self.taken:
            head = {"role": "role", "variable": "variable", "units": "unit", "how": "how"}
            head["units_after"] = "as"
            columns = ("role", "variable", "units", "units_after", "how")
            table = [head, *self.taken]
            widths = {c: min(40, max(len(row[c]) for row in table)) for c in columns}
            lines += [
                ("  " + "  ".join(row[c].ljust(widths[c]) for c in columns)).rstrip()
                for row in table
            ]
        lines += [f"  problem: {text}" for text in self.problems]
        if self.profiles:
            span = self.first_time or ""
            if self.last_time != self.first_time:
                span += f" to {self.last_time}"
            many = "s" if self.profiles > 1 else ""
            lines.append(f"  {self.profiles} profile{many}, {span}, up to {self.levels} levels")
            lines.append(f"  station: {'; '.join(self.stations[:5])}")
            low, gap = self.lowest_level, self.near_ground_spacing
            lines.append(
                "  near the ground: "
                + ("no usable level" if low is None else f"first level at {low:.1f} m")
                + (f", one level per {gap:.1f} m in the lowest {NEAR_GROUND:g} m" if gap else "")
            )
            marks = ", ".join(f"{name} {count}" for name, count in self.flags.items())
            lines.append(f"  quality flags (levels): {marks or 'none'}")
        lines += [f"  note: {text}" for text in self.notes]
        for row in self.not_taken[:MAX_LISTED]:
            lines.append(f"  not taken: {row['variable']} for {row['role']}: {row['reason']}")
        if len(self.not_taken) > MAX_LISTED:
            lines.append(f"  and {len(self.not_taken) - MAX_LISTED} more candidates not taken")
        lines += [f"  REFUSED: {text}" for text in self.refused]
        return "\n".join(lines)


def inspect_file(path: Path, names: Mapping[str, str] | None = None) -> FileReport:
    """Report on one file; never raises for what the file holds.

    Parameters
    ----------
    path : Path
    names : mapping of str to str, optional
        The user's mapping.

    Returns
    -------
    FileReport
    """
    report = FileReport(printable(path.name))
    try:
        with open_source(path) as source:
            recognition = recognise(source, names)
            _describe_recognition(report, recognition)
            points = _sample_points(report, source, recognition)
            found = read_columns(source, recognition, points, "nearest", report.notes)
            report.kind = "model columns" if is_model(source, recognition) else "soundings"
    except InputError as error:
        report.refused.append(one_line(error))
        return report
    except Exception as error:
        # As in reading: a reader's own fault is reported, not raised.
        report.refused.append(f"unexpected: {type(error).__name__}: {printable(error)}")
        return report
    if recognition.humidity:
        report.notes.append(f"humidity is taken from {recognition.humidity.replace('_', ' ')}")
    columns = [item for item in found if not isinstance(item, InputError)]
    reasons = [one_line(item) for item in found if isinstance(item, InputError)]
    report.refused += reasons[:MAX_LISTED]
    if len(reasons) > MAX_LISTED:
        report.refused.append(f"and {len(reasons) - MAX_LISTED} more profiles")
    if columns:
        _describe_columns(report, columns)
    return report


def _describe_recognition(report: FileReport, recognition: Recognition) -> None:
    report.layouts = list(recognition.layouts)
    every = list(recognition.taken.values())
    for group in recognition.groups.values():
        every += group.values()
    every += [
        replace(taken, how=f"{taken.how}, where {recognition.taken[role].variable} is missing")
        for role, taken in recognition.attributes.items()
        if recognition.taken[role] is not taken
    ]
    report.taken = [
        {
            "role": taken.role,
            "variable": printable(taken.variable, 60),
            "how": printable(taken.how, 120),
            "units": printable(taken.units or "-", 40),
            "units_after": taken.target or ("UTC" if taken.role.endswith("time") else "-"),
            "dims": printable(", ".join(taken.dims), 120),
        }
        for taken in every
    ]
    report.not_taken = [
        {"role": r.role, "variable": r.variable, "reason": printable(r.reason)}
        for r in recognition.rejected
    ]
    report.problems = [one_line(error) for error in recognition.problems.values()]


def _sample_points(
    report: FileReport, source: Source, recognition: Recognition
) -> list[tuple[str, float, float]] | None:
    """For a grid, the middle of it: enough to see what the columns look like."""
    if not is_gridded(source, recognition):
        return None
    middle = []
    for role in ("latitude", "longitude"):
        values = read_role(source, recognition, role)
        middle.append(float(values[tuple(n // 2 for n in values.shape)]))
    report.notes.append(
        f"gridded data: the profiles shown are those at the middle of the grid "
        f"({middle[0]:.2f}, {middle[1]:.2f}); sites of the settings choose the points"
    )
    return [("middle of the grid", middle[0], middle[1])]


def _describe_columns(report: FileReport, columns: list[Column]) -> None:
    report.profiles = len(columns)
    report.levels = max(column.height.size for column in columns)
    report.stations = sorted({column.station for column in columns})
    times = sorted(column.time for column in columns)
    report.first_time, report.last_time = (
        f"{np.datetime_as_string(time, 's')}Z" for time in (times[0], times[-1])
    )
    report.flags = flag_counts(np.concatenate([column.quality for column in columns]))
    lowest, spacing = [], []
    for column in columns:
        height = column.height[column.usable]
        if height.size:
            lowest.append(height[0])
        near = height[height <= NEAR_GROUND]
        if near.size >= 2:
            spacing.append((near[-1] - near[0]) / (near.size - 1))
    report.lowest_level = round(float(np.median(lowest)), 2) if lowest else None
    report.near_ground_spacing = round(float(np.median(spacing)), 2) if spacing else None
