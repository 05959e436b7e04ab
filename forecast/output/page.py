"""The page a planner opens in the morning: one HTML file that needs nothing else.

Everything is embedded; the content security policy allows only the page's own style and script,
named by hash, so that no text from a file or a settings name can do anything but be read.
"""

from __future__ import annotations

import base64
import hashlib
import struct
from datetime import UTC
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo

import numpy as np
import xarray as xr
from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from forecast.errors import printable
from forecast.output.chart_data import utc
from forecast.output.files import write_text_atomic
from forecast.output.tables import iso
from forecast.output.text import answer_lines, local_time, metres, percent, time_span
from forecast.schema import CAUTION, SIGHTLINE_STATES

if TYPE_CHECKING:
    from forecast.outlook import Window

__all__ = ["write_page"]

_CARDS = 6
_NAME = 80  # characters of a name that are shown
_STATES = {code: name for name, code in SIGHTLINE_STATES.items()} | {-1: "unknown"}


def write_page(
    path: str | Path,
    *,
    outlook: xr.Dataset,
    windows: list[Window],
    charts: dict[str, dict[str, Any]],
    sights: list[dict[str, Any]],
    settings_title: str,
    sites: list[tuple[str, str]],
    set_aside: list[dict[str, str]],
    meta: dict[str, Any],
) -> None:
    """Write the page, whole or not at all.

    Parameters
    ----------
    path : str or Path
        File to write.
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    windows : list of Window
        Best first.
    charts : dict
        By site: ``png`` (bytes), ``alt``, ``file``, as `forecast.output.charts.save_chart` gives,
        and ``phone`` (bytes), as `forecast.output.phone_chart.phone_chart` gives.
    sights : list of dict
        ``view`` (SightlineView) and its ``pictures`` in the form of `charts`.
    settings_title : str
        Title of the run.
    sites : list of (str, str)
        Name and IANA time zone of each site that has a chart.
    set_aside : list of dict
        ``site``, ``file``, ``reason``.
    meta : dict
        ``made_at`` (ISO 8601), ``version``, ``warnings``, ``threshold``.
    """
    zones = {name: ZoneInfo(zone) for name, zone in sites}
    rows = [_window(rank, w, zones) for rank, w in enumerate(windows, 1)]
    style, script = _asset("page.css"), _asset("page.js")
    times = outlook["time"].values
    html = (
        _environment()
        .get_template("page.html")
        .render(
            title=printable(settings_title, _NAME),
            style=Markup(style),
            script=Markup(script),
            style_hash=_hash(style),
            script_hash=_hash(script),
            answer=_answer(windows, zones),
            span=f"Covers {_minute(times.min())} to {_minute(times.max())} UTC.",
            best=_best(rows),
            windows=rows,
            threshold=percent(float(meta["threshold"])),
            sites=[_site(outlook, name, charts[name]) for name, _ in sites],
            sights=[_sight(outlook, sight) for sight in sights],
            resolution=[_resolution(outlook, name) for name, _ in sites],
            error_model=outlook.attrs["error_model"],
            calibration=outlook.attrs["calibration"],
            set_aside=set_aside,
            warnings=meta["warnings"],
            caution=CAUTION,
            source=outlook.attrs["source"],
            made_at=meta["made_at"],
            version=meta["version"],
        )
    )
    write_text_atomic(path, html)


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("forecast.output"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    # Control characters are no valid HTML even where they are escaped.
    environment.filters["printable"] = printable
    return environment


def _asset(name: str) -> str:
    loader = _environment().loader
    assert loader is not None
    return loader.get_source(_environment(), name)[0]


def _hash(text: str) -> str:
    return base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()


def _minute(time: np.datetime64) -> str:
    return f"{utc(time):%Y-%m-%d %H:%M}"


def _window(rank: int, w: Window, zones: dict[str, ZoneInfo]) -> dict[str, Any]:
    zone = zones.get(w.site, ZoneInfo("UTC"))
    lower, upper = 100.0 * w.lower, 100.0 * w.upper
    # A card shows the first sentence; the rest unfolds.
    reason, _, more = w.reason.partition(". ")
    return {
        "rank": rank,
        "kind": w.kind,
        "site": printable(w.site, _NAME),
        "subject": printable(w.subject, _NAME),
        "when_utc": time_span(w.start, w.end, UTC),
        "when_local": time_span(w.start, w.end, zone),
        "zone": zone.key,
        "best": local_time(w.best_time, UTC),
        "best_local": local_time(w.best_time, zone),
        "start": local_time(w.start, UTC),
        "end": local_time(w.end, UTC),
        "start_key": iso(w.start),
        "end_key": iso(w.end),
        "best_key": iso(w.best_time),
        "chance": percent(w.probability),
        "interval": f"{percent(w.lower)} to {percent(w.upper)}",
        "bar": f"{100.0 * w.probability:.1f}",
        "bar_lower": f"{lower:.1f}",
        "bar_width": f"{max(upper - lower, 0.0):.1f}",
        "valid_times": w.valid_times,
        "reason": reason + "." if more else reason,
        "more": more,
        "ahead": w.ahead,
    }


def _best(rows: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """The cards: of what lies ahead, the best window of each thing first; else of late."""
    ahead = [row for row in rows if row["ahead"]] or rows
    seen: set[tuple[str, str]] = set()
    first: list[dict[str, Any]] = []
    later: list[dict[str, Any]] = []
    for row in ahead:
        key = (row["site"], row["subject"])
        (later if key in seen else first).append(row)
        seen.add(key)
    return [*first, *later][:_CARDS]


def _answer(windows: list[Window], zones: dict[str, ZoneInfo]) -> list[str]:
    """The best thing to plan for, or else the best of late: what and how likely; when; where."""
    if not windows:
        return [*answer_lines(windows, UTC)[:1]]
    site = windows[0].site
    lines = answer_lines(windows, zones.get(site, ZoneInfo("UTC")), _NAME)
    return [*lines, f"at {printable(site, _NAME)}"]


def _site(outlook: xr.Dataset, name: str, chart: dict[str, Any]) -> dict[str, Any]:
    """A site's chart and sightlines; "now" is its latest ascent or, without one, the first time."""
    rows = np.flatnonzero(outlook["site"].values.astype(str) == name)
    ascents = rows[outlook["source_kind"].values[rows].astype(str) == "ascent"]
    now = int(ascents[-1] if ascents.size else rows[0])
    ahead = rows[rows > now] if ascents.size else rows
    lines = []
    for s in range(outlook.sizes["sightline"]):
        if str(outlook["sightline_site"].values[s]) == name:
            lines.append(_line(outlook, ahead if ahead.size else rows, now, s))
    return {
        "name": printable(name, _NAME),
        **_picture(chart),
        "now": f"the {'latest ascent' if ascents.size else 'first valid time'}, "
        f"{_minute(outlook['time'].values[now])} UTC",
        "best": "the likeliest time after it" if ahead.size else "the likeliest time of all",
        "lines": lines,
    }


def _picture(chart: dict[str, Any]) -> dict[str, Any]:
    """A chart as the page embeds it, in two widths."""
    # Width and height stand in the PNG header, ISO/IEC 15948 section 11.2.2.
    width, height = struct.unpack(">II", chart["png"][16:24])
    phone_width, phone_height = struct.unpack(">II", chart["phone"][16:24])
    return {
        "png": base64.b64encode(chart["png"]).decode(),
        "phone": base64.b64encode(chart["phone"]).decode(),
        "phone_width": phone_width,
        "phone_height": phone_height,
        "alt": chart["alt"],
        "file": chart["file"],
        "width": width,
        "height": height,
    }


def _sight(outlook: xr.Dataset, sight: dict[str, Any]) -> dict[str, Any]:
    """What an observer would see at a window's best time, and where to stand."""
    view = sight["view"]
    zone = ZoneInfo(view.zone)
    moment = utc(view.time)
    pictures = [_picture(picture) for picture in sight["pictures"]]
    for picture, words in zip(pictures, ("seen", "stand"), strict=False):
        picture["what"] = words
    return {
        "name": printable(view.line.name, _NAME),
        "when": f"{moment:%Y-%m-%d %H:%M} UTC",
        "local": "" if zone.key == "UTC" else f"{local_time(moment, zone)} {zone.key}",
        "words": [printable(words, 2000) for words in view.words],
        "pictures": pictures,
    }


def _line(outlook: xr.Dataset, rows: np.ndarray, now: int, s: int) -> dict[str, Any]:
    """One row of the sightlines' table: hidden heights, now and at the likeliest of `rows`.

    Each number comes with the plain one to sort by.
    """
    chance, lower = (
        np.nan_to_num(outlook[f"sightline_probability{end}"].values[rows, s], nan=-1.0)
        for end in ("", "_lower")
    )
    best = int(rows[np.lexsort((rows, -lower, -chance))[0]])
    base = float(outlook["target_base_height"].values[s])
    top = float(outlook["target_height"].values[s])

    def number(value: float, more: str = "") -> tuple[str, str]:
        return f"{metres(value)}{more}", _key(value)

    def hidden(row: int) -> tuple[str, str]:
        state = _STATES[int(outlook["sightline_state"].values[row, s])]
        return number(float(outlook["hidden_height"].values[row, s]), f", {state}")

    likely = float(outlook["sightline_probability"].values[best, s])
    target = metres(top) if base >= top else f"{base:.0f} to {metres(top)}"
    return {
        "name": printable(str(outlook["sightline_name"].values[s]), _NAME),
        "wave": {"optical": "light", "radio": "radio"}[str(outlook["sightline_wave"].values[s])],
        "numbers": [
            number(float(outlook["distance"].values[s])),
            number(float(outlook["observer_height"].values[s])),
            (target, _key(top)),
            number(float(outlook["hidden_height_straight"].values[s])),
            number(float(outlook["hidden_height_standard"].values[s])),
            hidden(now),
            hidden(best),
            (percent(likely), _key(likely)),
        ],
        "when": _minute(outlook["time"].values[best]),
    }


def _key(value: float) -> str:
    """A number to sort by; nothing where it is not known."""
    return f"{value:.6g}" if np.isfinite(value) else ""


def _resolution(outlook: xr.Dataset, name: str) -> str:
    """What the profiles of a site resolve near the ground."""
    mine = outlook["site"].values.astype(str) == name
    parts = []
    for kind, words in (("ascent", "ascents"), ("model", "model profiles")):
        rows = mine & (outlook["source_kind"].values.astype(str) == kind)
        if rows.any():
            lowest = float(np.median(outlook["lowest_level"].values[rows]))
            spacing = float(np.median(outlook["near_ground_resolution"].values[rows]))
            parts.append(
                f"{words} start at {lowest:.0f} m with a level every {spacing:.0f} m below 300 m"
            )
    return f"{printable(name, _NAME)}: {'; '.join(parts)} (medians); thinner layers go unseen."
