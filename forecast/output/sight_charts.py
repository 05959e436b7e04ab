"""Pictures of one sightline at one time: its rays, the target as it would appear, and why."""

from __future__ import annotations

import textwrap
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from forecast.output.chart_data import utc
from forecast.output.chart_layers import CHART_STYLE, figure_bytes
from forecast.output.colours import FAINT, INK
from forecast.output.files import write_bytes_atomic
from forecast.output.sight_data import (
    AIR_NAMES,
    ARC_MINUTE,
    is_point,
    is_traced,
    seen_directions,
    sightings,
)
from forecast.output.sight_layers import draw_looks, draw_profile, draw_rays, draw_transfer
from forecast.output.text import local_time, percent, shorten, zone_name
from forecast.schema import CAUTION, SIGHTLINE_STATES

if TYPE_CHECKING:
    from forecast.outlook.view import SightlineView

__all__ = ["save_sightline_figure", "sight_alt_text", "sightline_figure", "sightline_phone_figure"]

_COLOURS = 96  # of the PNG: few are drawn, the rest are softened edges
_WIDE, _PHONE = 11.0, 4.3  # inches, as the time–height charts
_PANEL, _SMALL = 2.1, 0.82  # inches of a panel and size of its letters, on a phone


def sightline_figure(view: SightlineView) -> Figure:
    """Draw a sightline for a page: rays and lowest air above, looks and transfer curve below.

    Parameters
    ----------
    view : SightlineView
        What is seen; what is not known in it is said in words on the picture.

    Returns
    -------
    matplotlib.figure.Figure
        Ready to save; it belongs to no window.
    """
    with matplotlib.rc_context(CHART_STYLE):
        header = _header_rows(view, wide=True)
        head = 0.75 + sum(row[-1] for row in header)
        upper, lower, between, less = 2.9, 2.9, 1.2, 0.76
        height = head + upper + between + lower + 1.05
        figure, add = _sheet(_WIDE, height, 110)
        _write_header(figure, header)
        draw_rays(add(0.78, 7.35, head, upper), view, 1.0)
        draw_profile(add(8.85, 10.75, head + less, upper - less), view, 1.0)
        at = head + upper + between
        boxes = [add(0.78 + 1.97 * i, 2.63 + 1.97 * i, at, lower) for i in range(3)]
        draw_looks(boxes, view, 1.0)
        draw_transfer(add(7.45, 10.75, at, lower), view, 1.0)
        _footer(figure, view, 165)
    figure.text_alternative = sight_alt_text(view)  # type: ignore[attr-defined]
    return figure


def sightline_phone_figure(view: SightlineView) -> Figure:
    """Draw a sightline for a narrow screen: the same panels, one under the other.

    Parameters
    ----------
    view : SightlineView
        What is seen.

    Returns
    -------
    matplotlib.figure.Figure
        390 px of a phone wide, twice as fine.
    """
    with matplotlib.rc_context(CHART_STYLE):
        header = _header_rows(view, wide=False)
        at = [0.95 + sum(row[-1] for row in header)]
        for gap in (0.95, 0.9, 1.3):
            at.append(at[-1] + _PANEL + gap)
        figure, add = _sheet(_PHONE, at[-1] + _PANEL + 1.0, 180)
        _write_header(figure, header)
        draw_rays(add(0.62, 3.68, at[0], _PANEL), view, _SMALL)
        boxes = [add(0.52 + 1.24 * i, 1.66 + 1.24 * i, at[1], _PANEL) for i in range(3)]
        draw_looks(boxes, view, _SMALL)
        draw_transfer(add(0.52, 4.14, at[2], _PANEL), view, _SMALL)
        draw_profile(add(0.52, 4.14, at[3], _PANEL), view, _SMALL)
        _footer(figure, view, 76)
    figure.text_alternative = sight_alt_text(view)  # type: ignore[attr-defined]
    return figure


def save_sightline_figure(stem: str | Path, view: SightlineView) -> dict[str, Any]:
    """Write the pictures of a sightline as PNG and SVG, the same bytes for the same view.

    Parameters
    ----------
    stem : str or Path
        Path without ending.
    view : SightlineView
        What is seen.

    Returns
    -------
    dict
        ``png``, ``svg`` (bytes, as written), ``phone`` (bytes of a PNG for a narrow screen, not
        written), ``alt`` (text alternative), ``file`` (name of the SVG).
    """
    alt = sight_alt_text(view)
    out: dict[str, Any] = {"alt": alt, "file": f"{Path(stem).name}.svg"}
    figure = sightline_figure(view)
    for ending in ("png", "svg"):
        out[ending] = figure_bytes(figure, ending, alt, _COLOURS)
        write_bytes_atomic(Path(f"{stem}.{ending}"), out[ending])
    out["phone"] = figure_bytes(sightline_phone_figure(view), "png", colours=_COLOURS)
    return out


def sight_alt_text(view: SightlineView) -> str:
    """Say in words what the pictures of a sightline show.

    Parameters
    ----------
    view : SightlineView
        What is drawn.

    Returns
    -------
    str
        A few sentences.
    """
    zone, time = ZoneInfo(view.zone), utc(view.time)
    parts = [
        f"Sightline {shorten(view.line.name, 80)} at {time:%Y-%m-%d %H:%M} UTC "
        f"({local_time(time, zone)} {zone_name(zone)}): {_chance_words(view)}.",
        f"Observer at {round(view.observer_height, 1):g} m, target {_target_words(view)}, "
        f"{view.line.distance / 1e3:.1f} km away.",
        *(_look_words(view, air) for air in AIR_NAMES),
    ]
    ducts = np.asarray(view.ducts, dtype=float).reshape(-1, 2)
    if ducts.size:
        said = ", ".join(f"{low:.0f} to {high:.0f} m" for low, high in ducts[:4])
        parts.append(f"Layers that hold rays at heights of {said}.")
    parts += [shorten(sentence, 300) for sentence in view.words]
    return " ".join(parts)


def _sheet(wide: float, height: float, dpi: int) -> tuple[Figure, Callable[..., Axes]]:
    """A white figure, and a way to add axes by inches from the left and from the top."""
    figure = Figure(figsize=(wide, height), dpi=dpi, facecolor="white")
    FigureCanvasAgg(figure)

    def add(left: float, right: float, from_top: float, tall: float) -> Axes:
        bottom = 1.0 - (from_top + tall) / height
        return figure.add_axes((left / wide, bottom, (right - left) / wide, tall / height))

    return figure, add


def _header_rows(view: SightlineView, wide: bool) -> list[tuple[str, float, str, str, float]]:
    """Which sightline, how likely, when and what is seen: text, size, weight, colour, inches."""
    zone, time = ZoneInfo(view.zone), utc(view.time)
    clock = "" if zone.key == "UTC" else f" · {local_time(time, zone)} {zone_name(zone)}"
    when = f"{time:%Y-%m-%d %H:%M} UTC{clock}"
    line = view.line
    where = f"observer at {round(view.observer_height, 1):g} m, target {_target_words(view)}"
    where += f", {line.distance / 1e3:.1f} km"
    where += f" away at {line.azimuth:.0f}°" if np.isfinite(line.azimuth) else " away"
    chance = _chance_words(view).replace(" %", "\u00a0%").replace("% to ", "%\u00a0to\u00a0")
    chance = chance[0].upper() + chance[1:]
    said = shorten(view.words[0], 260) if view.words else ""
    if wide:
        return [
            (shorten(line.name, 90), 13.0, "bold", INK, 0.27),
            (chance, 11.0, "bold", INK, 0.24),
            (f"{when} · {where}", 9.5, "normal", FAINT, 0.21),
            *((text, 10.0, "normal", INK, 0.21) for text in _lines(said, 130, 2)),
        ]
    return [
        *((t, 10.0, "bold", INK, 0.2) for t in _lines(shorten(line.name, 90), 42, 2)),
        *((text, 8.5, "bold", INK, 0.17) for text in textwrap.wrap(chance, 50)),
        *((text, 7.8, "normal", FAINT, 0.16) for text in textwrap.wrap(when, 60)),
        *((text, 7.8, "normal", FAINT, 0.16) for text in textwrap.wrap(where, 60)),
        *((text, 8.2, "normal", INK, 0.165) for text in _lines(said, 58, 4)),
    ]


def _lines(text: str, width: int, most: int) -> list[str]:
    """Text in at most so many lines; what is cut off shows as such."""
    return textwrap.wrap(text, width, max_lines=most, placeholder=" …")


def _write_header(figure: Figure, rows: list[tuple[str, float, str, str, float]]) -> None:
    at = 0.04
    for text, size, weight, colour, step in rows:
        at += step
        figure.text(
            0.02, 1.0 - at / figure.get_figheight(), text, fontsize=size, color=colour,
            fontweight=weight, va="baseline", parse_math=False,
        )  # fmt: skip


def _footer(figure: Figure, view: SightlineView, width: int) -> None:
    origin = (
        f"Source: {shorten(view.source, 120)}. Heights above the water or the ground; "
        "angles above the observer's horizontal. Refraction only: haze and light are not drawn."
    )
    lines = [part for text in (origin, CAUTION) for part in textwrap.wrap(text, width)]
    figure.text(
        0.02, 0.08 / figure.get_figheight(), "\n".join(lines), fontsize=7 if width > 100 else 6.3,
        va="bottom", color=FAINT, parse_math=False,
    )  # fmt: skip


def _chance_words(view: SightlineView) -> str:
    """State in the best guess, and how likely the sightline is open, in one line."""
    best, lower, upper = view.probability
    if not np.isfinite(best):
        if view.state not in SIGHTLINE_STATES:
            return "not known whether it is open"
        return f"{view.state} in the best guess, cannot tell how likely it is open"
    return (
        f"{view.state} in the best guess, {percent(best)} likely to be open "
        f"({percent(lower)} to {percent(upper)})"
    )


def _target_words(view: SightlineView) -> str:
    """Heights of the target; a dash if they are not known."""
    if not np.isfinite([view.base, view.top]).all():
        return "–"
    top = f"{round(view.top, 1):g} m"
    return top if is_point(view) else f"{round(view.base, 1):g} to {top}"


def _look_words(view: SightlineView, air: str) -> str:
    """What one air shows of the target, and where."""
    name = AIR_NAMES[air].capitalize()
    if not is_traced(view, air):
        return f"{name}: not known."
    shown = seen_directions(view, air)
    if not shown.size:
        return f"{name}: nothing of the target visible."
    low, high = shown.min() / ARC_MINUTE, shown.max() / ARC_MINUTE
    inside = [view.top] if is_point(view) else np.linspace(view.base, view.top, 11)[1:-1]
    counts = [sightings(view, air, height)[1] for height in inside]
    most = max(counts, key=len)
    words = f"{name}: visible at {low:.1f}′"
    if high - low >= 0.05:
        words += f" to {high:.1f}′"
    if len(most) > 1:
        words += f", up to {len(most)} images, {int((~most).sum())} of them inverted"
    horizon = view.horizon.get(air, np.nan)
    if np.isfinite(horizon):
        words += f"; horizon at {horizon / ARC_MINUTE:.1f}′"
    return words + "."
