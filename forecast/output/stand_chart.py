"""Where to stand, as a chart: the odds by height of the eye and valid time, and by place."""

from __future__ import annotations

import re
import textwrap
from datetime import UTC
from pathlib import Path
from typing import Any, NamedTuple
from zoneinfo import ZoneInfo

import matplotlib
import numpy as np
import xarray as xr
from matplotlib import dates as mdates
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import PolyCollection, QuadMesh
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.patheffects import withStroke

from forecast.output.chart_data import TimeHeight, time_height, utc
from forecast.output.chart_layers import (
    CHART_STYLE,
    draw_light,
    figure_bytes,
    mark_forecast,
    set_time_axes,
)
from forecast.output.charts import save_chart
from forecast.output.colours import FAINT, INK, INTERVAL, LIKELIHOOD, NO_DATA
from forecast.output.stand_odds import (
    PlaceOdds,
    StandOdds,
    foot_texts,
    head_texts,
    stand_odds,
    stand_text,
)
from forecast.output.text import local_time, percent, shorten, zone_name

__all__ = ["save_stand_chart", "stand_chart"]

# From the empty ground of the probability bars to their colour in equal steps of OKLab (Ottosson
# 2020): as far apart to the eye as the probabilities are, and darker all the way.
_ODDS_COLOURS = (
    "#f5f5f5", "#efdfd9", "#e9c9be", "#e2b4a3", "#da9e88", "#d1886d", "#c87252", "#be5b34",
    LIKELIHOOD,
)  # fmt: skip
_COLOURS = 128  # of the PNG: one ramp and lines
_PLACES_RIGHT = 6.2  # inches; words follow
_LINE = 0.0185  # inches from line to line, per point of size
_HEADROOM = 0.065  # share of the rows' height
_MOST_LABELS = 16  # heights written at the axis
_HALO: Any = [withStroke(linewidth=2.4, foreground="white")]


class _Layout(NamedTuple):
    """Lengths in inches, sizes in points, texts in letters."""

    width: float
    dpi: int
    left: float
    right: float
    main: float
    row: float
    label_above: bool
    ticks: int
    size: float
    answer: float
    letters: int


_WIDE = _Layout(11.0, 110, 2.3, 9.75, 3.7, 0.26, False, 13, 8.5, 4.0, 150)
_PHONE = _Layout(4.3, 180, 0.54, 4.1, 3.0, 0.42, True, 6, 7.5, 1.5, 68)


def stand_chart(
    outlook: xr.Dataset, sightline: int, *, timezone: str = "UTC", phone: bool = False
) -> Figure:
    """Draw the odds of a sightline by height of the eye and valid time.

    Parameters
    ----------
    outlook : xarray.Dataset
        As for `stand_odds`.
    sightline : int
        Position along ``sightline``.
    timezone : str
        IANA zone of the local time.
    phone : bool
        For a narrow screen.

    Returns
    -------
    matplotlib.figure.Figure
        Ready to save; ``text_alternative`` says what it shows.

    Raises
    ------
    ValueError
        If the outlook has no row of the sightline's site.
    """
    data = time_height(outlook, str(outlook["sightline_site"].values[sightline]), 300.0)
    odds = stand_odds(outlook, sightline, data)
    zone = ZoneInfo(timezone)
    form = _PHONE if phone else _WIDE
    head = _head_lines(head_texts(outlook, sightline, odds, data, zone), form)
    foot = [
        line
        for text in foot_texts(outlook, odds, data)
        for line in textwrap.wrap(text, int(1.28 * form.letters))
    ]
    top = 0.82 + sum(_LINE * size for _, size, _ in head)
    below = (len(odds.places) * form.row + 0.6) if odds.places else 0.0
    height = top + form.main + 0.66 + below + 0.15 + _LINE * (form.size - 1.5) * len(foot)
    with matplotlib.rc_context(CHART_STYLE):
        figure = Figure(figsize=(form.width, height), dpi=form.dpi, facecolor="white")
        FigureCanvasAgg(figure)

        def add(from_top: float, tall: float, left: float, right: float) -> Axes:
            box = (left, height - from_top - tall, right - left, tall)
            across = (form.width, height, form.width, height)
            return figure.add_axes(tuple(a / b for a, b in zip(box, across, strict=True)))  # type: ignore[arg-type]

        right = 0.5 * (form.left + form.right) if data.time.size == 1 else form.right
        axis = add(top, form.main, form.left, right)
        mesh = _draw_odds(axis, odds, data, form)
        mark_forecast(axis, data)
        for text in axis.texts:
            text.set_path_effects(_HALO)
        _mark_best(axis, odds, data, form)
        _mark_observer(axis, odds, float(outlook["observer_height"].values[sightline]), form)
        light = add(top + form.main + 0.05, 0.13, form.left, right)
        draw_light(light, data)
        upper = set_time_axes([axis, light], data, zone, form.ticks, form.size - 0.5)
        for home, name in ((upper, zone_name(zone)), (light, "UTC")):
            home.set_xlabel(name, fontsize=form.size - 0.5, labelpad=2.0, color=FAINT)
        axis.set_ylabel("height of the eye (m)", fontsize=form.size + 0.5)
        if not phone:
            _beside(light, "night · twilight · day")
            _odds_bar(figure, add(top, form.main, right + 0.12, right + 0.26), mesh, form)
        if odds.places:
            across = form.right if phone else _PLACES_RIGHT
            at = top + form.main + 0.9
            table = add(at, len(odds.places) * form.row, form.left, across)
            _draw_places(table, odds, form)
        _write_head(figure, head)
        _legend(figure, form, top)
        figure.text(
            0.02, 0.08 / height, "\n".join(foot), fontsize=form.size - 1.5, va="bottom",
            color=FAINT, linespacing=1.15, parse_math=False,
        )  # fmt: skip
    figure.text_alternative = stand_text(outlook, sightline, odds, data)  # type: ignore[attr-defined]
    return figure


def save_stand_chart(
    stem: str | Path, outlook: xr.Dataset, sightline: int, *, timezone: str = "UTC"
) -> dict[str, Any]:
    """Write the chart of a sightline as PNG and SVG, the same bytes for the same chart.

    Parameters
    ----------
    stem : str or Path
        Path without ending.
    outlook, sightline, timezone
        As for `stand_chart`.

    Returns
    -------
    dict
        As `forecast.output.charts.save_chart` gives, and ``phone``: PNG for a narrow screen.
    """
    narrow = stand_chart(outlook, sightline, timezone=timezone, phone=True)
    phone = figure_bytes(narrow, "png", colours=_COLOURS)
    narrow.clear()
    return {
        **save_chart(stand_chart(outlook, sightline, timezone=timezone), stem, _COLOURS),
        "phone": phone,
    }


def _centre(odds: StandOdds, height: float) -> float:
    """Where a height lies on the stretched axis, on which the tried heights stand evenly."""
    middle = np.arange(odds.heights.size) + 0.5
    shift = 0.1  # m; keeps the surface itself on a logarithmic scale
    return float(np.interp(np.log(height + shift), np.log(odds.heights + shift), middle))


def _draw_odds(axis: Axes, odds: StandOdds, data: TimeHeight, form: _Layout) -> QuadMesh:
    """Shade the odds, gaps in time left open; hatched where nothing is known."""
    count = odds.heights.size
    edges = np.stack([mdates.date2num(data.left), mdates.date2num(data.right)], axis=1).ravel()
    values = np.full((count, edges.size - 1), np.nan)
    values[:, 0::2] = odds.chance.T
    axis.set_facecolor(NO_DATA)
    mesh = axis.pcolormesh(
        edges,
        np.arange(count + 1),
        np.ma.masked_invalid(values),
        cmap=LinearSegmentedColormap.from_list("odds", _ODDS_COLOURS),
        vmin=0.0,
        vmax=1.0,
        rasterized=True,
    )
    # Unknown are the lowest heights of a time, or all.
    known = np.isfinite(odds.chance)
    unknown = np.where(known.any(axis=1), known.argmax(axis=1), count).astype(float)
    x0, x1, none = edges[0::2], edges[1::2], np.zeros(unknown.size)
    corners = [(x0, none), (x0, unknown), (x1, unknown), (x1, none)]
    boxes = np.stack([np.stack(corner, axis=1) for corner in corners], axis=1)[unknown > 0.0]
    axis.add_collection(
        PolyCollection(
            list(boxes), facecolor="none", edgecolor="#aaaaaa", hatch="////", linewidth=0.0,
            rasterized=True,
        )
    )  # fmt: skip
    # Room for what is written, above the highest row.
    axis.axhspan(count, count + _HEADROOM * count, color="white")
    axis.set_ylim(0.0, count * (1.0 + _HEADROOM))
    every = -(-count // _MOST_LABELS)
    shown = range(0, count, every)
    axis.set_yticks([i + 0.5 for i in shown], [f"{odds.heights[i]:g}" for i in shown])
    axis.tick_params(axis="y", labelsize=form.size, length=2)
    return mesh


def _mark_best(axis: Axes, odds: StandOdds, data: TimeHeight, form: _Layout) -> None:
    """A ring at the best height of every valid time; the one worth naming with its number."""
    left, right = mdates.date2num(data.left), mdates.date2num(data.right)
    x = 0.5 * (left + right)
    has = odds.best >= 0
    size = float(np.clip(1400.0 / max(data.time.size, 1), 5.0, 26.0)) * (form.size / 8.5) ** 2
    axis.scatter(
        x[has], odds.best[has] + 0.5, s=size, facecolor="white", edgecolor=INK, linewidths=0.8,
        zorder=4,
    )  # fmt: skip
    if odds.named is None:
        return
    row, stand = odds.named
    axis.scatter(x[row], stand + 0.5, s=2.6 * size + 12.0, marker="D", facecolor=INK,
                 edgecolor="white", linewidths=1.0, zorder=5)  # fmt: skip
    ends = x[0], x[-1]
    late = x[row] > 0.5 * (ends[0] + ends[1])
    high = stand + 1 >= odds.heights.size
    axis.annotate(
        f"{percent(odds.chance[row, stand])} from {odds.heights[stand]:g} m",
        (x[row], stand + 0.5),
        (-9.0 if late else 9.0, -8.0 if high else 8.0),
        textcoords="offset points",
        ha="right" if late else "left",
        va="center",
        fontsize=form.size + 0.5,
        fontweight="bold",
        color=INK,
        path_effects=_HALO,
        zorder=6,
    )


def _mark_observer(axis: Axes, odds: StandOdds, height: float, form: _Layout) -> None:
    """A line at the height that the settings give."""
    y = _centre(odds, height)
    axis.axhline(y, color=INK, lw=1.0, ls=(0, (5, 3)), zorder=3)
    axis.annotate(
        f"observer, {height:g} m", (0.0, y), (4.0, 5.0), xycoords=("axes fraction", "data"),
        textcoords="offset points", va="center", fontsize=form.size - 0.5, color=INK,
        path_effects=_HALO, zorder=6,
    )  # fmt: skip


def _odds_bar(figure: Figure, axis: Axes, mesh: QuadMesh, form: _Layout) -> None:
    bar = figure.colorbar(mesh, cax=axis)
    bar.set_ticks([0.0, 0.25, 0.5, 0.75, 1.0])
    bar.set_ticklabels([percent(p) for p in (0.0, 0.25, 0.5, 0.75, 1.0)])
    axis.tick_params(labelsize=form.size - 0.5)
    bar.set_label("odds: share of members in which it is open", fontsize=form.size - 0.5)


def _beside(axis: Axes, text: str) -> None:
    axis.annotate(
        text, (0.0, 0.5), (-7.0, 0.0), xycoords="axes fraction", textcoords="offset points",
        ha="right", va="center", fontsize=8.5, color=INK, parse_math=False,
    )  # fmt: skip


def _draw_places(axis: Axes, odds: StandOdds, form: _Layout) -> None:
    """A dot with its interval for every place, and in words what it takes there."""
    count = len(odds.places)
    axis.set_xlim(0.0, 1.0)
    axis.set_ylim(count, 0.0)
    axis.set_yticks([])
    axis.set_xticks([0.0, 0.5, 1.0], [percent(p) for p in (0.0, 0.5, 1.0)])
    axis.tick_params(labelsize=form.size - 0.5, length=2)
    axis.grid(axis="x", color="#dddddd", lw=0.6)
    axis.set_axisbelow(True)
    for side in ("top", "right", "left"):
        axis.spines[side].set_visible(False)
    axis.set_title(
        "Places, each at its best height and time (UTC)", fontsize=form.size, loc="left", pad=5.0,
        fontweight="bold",
    )  # fmt: skip
    style: Any = {"fontsize": form.size - 0.5, "color": INK, "va": "center", "parse_math": False}
    style |= {"xycoords": ("axes fraction", "data"), "textcoords": "offset points"}
    for i, place in enumerate(odds.places):
        y = i + (0.72 if form.label_above else 0.5)
        if np.isfinite(place.chance):
            ends = [place.lower, place.upper]
            axis.plot(ends, [y, y], color=INTERVAL, lw=5.0, solid_capstyle="butt", clip_on=False)
            axis.plot([place.chance], [y], "o", color=LIKELIHOOD, ms=6.0, clip_on=False)
        name, words = shorten(place.name, 20 if form.label_above else 30), _place_words(place)
        if form.label_above:
            axis.annotate(name, (0.0, i + 0.3), (0.0, 0.0), ha="left", **style)
            axis.annotate(words, (1.0, i + 0.3), (0.0, 0.0), ha="right", **style)
        else:
            axis.annotate(name, (0.0, y), (-7.0, 0.0), ha="right", **style)
            axis.annotate(words, (1.0, y), (12.0, 0.0), ha="left", **style)


def _place_words(place: PlaceOdds) -> str:
    if not np.isfinite(place.chance):
        return "cannot tell"
    words = f"{percent(place.chance)} ({100.0 * place.lower:.0f}–{100.0 * place.upper:.0f})"
    if np.isfinite(place.height):
        words += f", {place.height:g} m up, {local_time(utc(place.time), UTC)}"
    return words


def _head_lines(texts: tuple[str, str, str], form: _Layout) -> list[tuple[str, float, str]]:
    """Text, size and weight of each line above the chart."""
    lines = []
    for text, larger, weight in zip(
        texts, (1.0, form.answer, 0.5), ("normal", "bold", "normal"), strict=True
    ):
        size = form.size + larger
        text = re.sub(r"(?<=\d) (?=%|m\b)", "\N{NO-BREAK SPACE}", text)
        # Bold letters are wider.
        letters = int(form.letters * form.size / size * (0.88 if weight == "bold" else 1.0))
        lines += [(line, size, weight) for line in textwrap.wrap(text, letters)]
    return lines


def _write_head(figure: Figure, lines: list[tuple[str, float, str]]) -> None:
    height = figure.get_figheight()
    at = 0.12
    for text, size, weight in lines:
        figure.text(
            0.02, 1.0 - at / height, text, fontsize=size, fontweight=weight, va="top", color=INK,
            parse_math=False,
        )  # fmt: skip
        at += _LINE * size


def _legend(figure: Figure, form: _Layout, top: float) -> None:
    """How to read the marks, between the words and the chart."""
    handles = [
        Patch(facecolor=_ODDS_COLOURS[2], label="unlikely"),
        Patch(facecolor=_ODDS_COLOURS[-1], label="likely"),
        Line2D([], [], ls="none", marker="o", mfc="white", mec=INK, ms=5, label="best height"),
        Line2D([], [], ls="none", marker="D", color=INK, ms=5, label="best of all"),
        Patch(facecolor=NO_DATA, hatch="////", edgecolor="#aaaaaa", label="not known"),
    ]
    figure.legend(
        handles=handles,
        loc="center left",
        bbox_to_anchor=(0.012, 1.0 - (top - 0.53) / figure.get_figheight()),
        ncols=len(handles),
        fontsize=form.size - 0.5,
        frameon=False,
        handlelength=1.2,
        handletextpad=0.4,
        columnspacing=1.0,
        borderaxespad=0.0,
    )
