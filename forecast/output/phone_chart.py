"""The time–height chart for a narrow screen: the same data, labels above the strips."""

from __future__ import annotations

import textwrap
from datetime import UTC
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo

import matplotlib
import xarray as xr
from matplotlib import dates as mdates
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from forecast.output.chart_data import time_height
from forecast.output.chart_layers import (
    CHART_STYLE,
    INK,
    chosen_strips,
    draw_bars,
    draw_gradient,
    draw_light,
    draw_likelihood,
    figure_bytes,
    mark_forecast,
    most_of,
)
from forecast.output.text import local_time, percent, shorten

if TYPE_CHECKING:
    from forecast.outlook import Window

__all__ = ["phone_chart"]

_WIDTH = 4.3  # inches; 390 px of a phone at the dots below, twice as fine
_DPI = 180
_STRIP = 0.24  # inches
_LABEL = 0.26


def phone_chart(
    outlook: xr.Dataset,
    site: str,
    *,
    timezone: str = "UTC",
    top: float = 3000.0,
    low_stretch: bool = False,
    windows: list[Window] | None = None,
) -> bytes:
    """Draw the chart of one site for a narrow screen.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    site : str
        Name of the site.
    timezone : str
        IANA zone of the local time.
    top : float
        Top of the chart, m above ground.
    low_stretch : bool
        Stretch the lowest heights (square-root axis).
    windows : list of Window, optional
        Windows; the best of this site stands on top.

    Returns
    -------
    bytes
        PNG, the same bytes for the same chart.
    """
    data = time_height(outlook, site, top)
    zone = ZoneInfo(timezone)
    mine = [w for w in windows or [] if w.site == site]
    strips, _ = chosen_strips(data.strips)
    with matplotlib.rc_context(CHART_STYLE):
        head, main, foot = 0.75, 3.0, 0.55
        height = head + main + 0.42 + len(strips) * (_STRIP + _LABEL) + foot
        figure = Figure(figsize=(_WIDTH, height), dpi=_DPI, facecolor="white")
        FigureCanvasAgg(figure)
        left, width = 0.125, 0.855

        def place(from_top: float, tall: float) -> tuple[float, float, float, float]:
            return (left, 1.0 - (from_top + tall) / height, width, tall / height)

        axis = figure.add_axes(place(head, main))
        draw_gradient(axis, data, low_stretch)
        draw_likelihood(axis, data)
        mark_forecast(axis, data)
        axis.set_ylabel("height (m)", fontsize=8, labelpad=1.0)
        axis.tick_params(labelsize=7.5)
        light = figure.add_axes(place(head + main + 0.05, 0.1))
        draw_light(light, data)
        light.set_ylabel("")
        rows = [axis, light]
        at = head + main + 0.2
        for strip in strips:
            row = figure.add_axes(place(at + _LABEL, _STRIP))
            draw_bars(row, data, strip)
            weight = "bold" if strip.kind == "sightline" else "normal"
            label = f"{shorten(strip.label, 40)}: {most_of(data, strip)}"
            row.set_title(
                label, fontsize=8, loc="left", pad=2.0, fontweight=weight, parse_math=False
            )
            rows.append(row)
            at += _LABEL + _STRIP
        span = mdates.date2num([data.left.min(), data.right.max()])
        for row in rows:
            row.set_xlim(*span)
            row.tick_params(axis="x", labelbottom=False, length=0)
        last = rows[-1]
        locator = mdates.AutoDateLocator(minticks=3, maxticks=6, tz=UTC)
        last.xaxis.set_major_locator(locator)
        short = span[1] - span[0] < 3.0
        last.xaxis.set_major_formatter(
            mdates.DateFormatter("%-d %b\n%H:%M" if short else "%-d %b", tz=UTC)
        )
        last.tick_params(axis="x", labelbottom=True, length=3, labelsize=7.5)
        last.set_xlabel("UTC", fontsize=8, labelpad=1.0)
        answer = "No window: nothing reaches the threshold."
        if mine:
            w = mine[0]
            answer = (
                f"{shorten(w.subject, 40)}: {percent(w.probability)} "
                f"({percent(w.lower)} to {percent(w.upper)}), "
                f"{local_time(w.best_time, UTC)} UTC, {local_time(w.best_time, zone)} local"
            )
        figure.text(
            0.02, 1.0 - 0.16 / height, shorten(site, 44), fontsize=10, fontweight="bold",
            va="center", color=INK, parse_math=False,
        )  # fmt: skip
        figure.text(
            0.02, 1.0 - 0.3 / height, "\n".join(textwrap.wrap(answer, 58)), fontsize=8, va="top",
            color=INK, parse_math=False,
        )  # fmt: skip
    return figure_bytes(figure, "png")
