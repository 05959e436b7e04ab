"""The tables must hold every window and be safe to open in a spreadsheet."""

from __future__ import annotations

import csv
import json
from dataclasses import replace

from forecast.output.tables import write_windows_csv, write_windows_json


def test_csv_holds_every_window_in_order(case, tmp_path):
    _, windows, _ = case
    write_windows_csv(windows, tmp_path / "w.csv")
    with (tmp_path / "w.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == len(windows) > 3
    assert [int(r["rank"]) for r in rows] == list(range(1, len(rows) + 1))
    first, window = rows[0], windows[0]
    assert first["start_utc"] == window.start.strftime("%Y-%m-%dT%H:%M:%SZ")
    assert abs(float(first["probability"]) - window.probability) < 1e-4
    assert first["reason"] == window.reason
    assert (tmp_path / "w.csv").read_bytes().count(b"\r\n") == len(windows) + 1


def test_no_cell_is_taken_for_a_formula(case, tmp_path):
    _, windows, _ = case
    hostile = [replace(windows[0], subject="=1+2", site="@cape", reason="-3 m")]
    write_windows_csv(hostile, tmp_path / "w.csv")
    with (tmp_path / "w.csv").open(encoding="utf-8", newline="") as stream:
        cells = [cell for row in csv.reader(stream) for cell in row]
    assert {"'=1+2", "'@cape", "'-3 m"} <= set(cells)
    assert not any(cell[:1] in "=+-@" for cell in cells if cell)


def test_json_is_strict_and_complete(case, tmp_path):
    _, windows, _ = case
    write_windows_json(windows, tmp_path / "w.json", {"title": "t"})

    def refuse(constant):
        raise AssertionError(f"{constant} is not JSON")

    body = json.loads((tmp_path / "w.json").read_text(encoding="utf-8"), parse_constant=refuse)
    assert body["title"] == "t"
    assert [w["subject"] for w in body["windows"]] == [w.subject for w in windows]


def test_no_windows_is_a_header_alone(tmp_path):
    write_windows_csv([], tmp_path / "w.csv")
    assert (tmp_path / "w.csv").read_text().count("\n") == 1
