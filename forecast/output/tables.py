"""The windows as tables: CSV for spreadsheets, JSON for programs."""

from __future__ import annotations

import csv
import io
import json
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from forecast.output.files import write_text_atomic

if TYPE_CHECKING:
    from forecast.outlook import Window

__all__ = ["iso", "window_rows", "write_windows_csv", "write_windows_json"]


def iso(time: datetime) -> str:
    """ISO 8601 in UTC with Z, to the second."""
    return time.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def window_rows(windows: list[Window]) -> list[dict[str, Any]]:
    """Plain values of each window, in ranking order.

    Parameters
    ----------
    windows : list of Window
        From `forecast.outlook.find_windows`.

    Returns
    -------
    list of dict
        Keys: rank, site, kind, subject, start, end, best_time (ISO 8601 UTC), probability,
        lower, upper (1), valid_times, ahead, reason.
    """
    return [
        {
            "rank": rank,
            "site": w.site,
            "kind": w.kind,
            "subject": w.subject,
            "start": iso(w.start),
            "end": iso(w.end),
            "best_time": iso(w.best_time),
            "probability": round(w.probability, 4),
            "lower": round(w.lower, 4),
            "upper": round(w.upper, 4),
            "valid_times": w.valid_times,
            "ahead": w.ahead,
            "reason": w.reason,
        }
        for rank, w in enumerate(windows, 1)
    ]


def write_windows_csv(windows: list[Window], path: str | Path) -> None:
    """Write windows as CSV (RFC 4180), header first.

    Parameters
    ----------
    windows : list of Window
        From `forecast.outlook.find_windows`.
    path : str or Path
        File to write. Text cells that a spreadsheet would take for a formula get a leading
        apostrophe.
    """
    names = [
        "rank",
        "site",
        "kind",
        "subject",
        "start_utc",
        "end_utc",
        "best_time_utc",
        "probability",
        "probability_lower",
        "probability_upper",
        "valid_times",
        "ahead",
        "reason",
    ]
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\r\n")
    writer.writerow(names)
    for row in window_rows(windows):
        writer.writerow([_cell(value) for value in row.values()])
    write_text_atomic(path, text.getvalue())


def write_windows_json(windows: list[Window], path: str | Path, meta: dict[str, Any]) -> None:
    """Write windows as JSON: what `meta` says, then ``windows``.

    Parameters
    ----------
    windows : list of Window
        From `forecast.outlook.find_windows`.
    path : str or Path
        File to write.
    meta : dict
        JSON-safe facts about the run, without time stamps.
    """
    body = {**meta, "windows": window_rows(windows)}
    text = json.dumps(body, indent=2, ensure_ascii=False, allow_nan=False)
    write_text_atomic(path, text + "\n")


def _cell(value: Any) -> Any:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, str) and value[:1] in {"=", "+", "-", "@", "\t", "\r"}:
        return f"'{value}"
    return value
