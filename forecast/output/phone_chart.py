"""The time–height chart for a narrow screen: the same data, labels above the strips."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo

import matplotlib
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from forecast.output.chart_data import time_height
from forecast.output.chart_layers import (
    CHART_STYLE,
    chosen_strips,
    draw_bars,
    draw_gradient,
    draw_light,
    draw_likelihood,
    figure_bytes,
    mark_forecast,
    mark_profiles,
    set_time_axes,
    strip_remark,
)
from forecast.output.colours import INK
from forecast.output.text import answer_lines, shorten, zone_name

if TYPE_CHECKING:
    from forecast.outlook import Window

__all__ = ["phone_chart"]

_WIDTH = 4.3  # inches; 390 px of a phone at the dots below, twice as fine
_DPI = 180
_MAIN, _STRIP, _LABEL, _FOOT = 3.0, 0.24, 0.26, 0.55  # inches
_LEFT, _WIDE = 0.125, 0.835
_TICKS = 6


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
        answer = [
            part
            for line in answer_lines(mine, zone, 40)
            for part in textwrap.wrap(shorten(line, 160), 50)
        ]
        head = 0.75 + 0.14 * len(answer)
        height = head + _MAIN + 0.42 + len(strips) * (_STRIP + _LABEL) + _FOOT
        figure = Figure(figsize=(_WIDTH, height), dpi=_DPI, facecolor="white")
        FigureCanvasAgg(figure)

        def add(from_top: float, tall: float) -> Axes:
            return figure.add_axes((_LEFT, 1.0 - (from_top + tall) / height, _WIDE, tall / height))

        axis = add(head, _MAIN)
        draw_gradient(axis, data, low_stretch)
        draw_likelihood(axis, data, 0.6)
        mark_forecast(axis, data)
        axis.set_ylabel("height above ground (m)", fontsize=8, labelpad=1.0)
        axis.tick_params(labelsize=7.5)
        marks = add(head + _MAIN + 0.03, 0.1)
        mark_profiles(marks, data, 0.6)
        light = add(head + _MAIN + 0.15, 0.1)
        draw_light(light, data)
        rows = [axis, marks, light]
        at = head + _MAIN + 0.27
        for strip in strips:
            row = add(at + _LABEL, _STRIP)
            draw_bars(row, data, strip)
            weight = "bold" if strip.kind == "sightline" else "normal"
            row.set_title(
                shorten(strip.label, 30), fontsize=7.5, loc="left", pad=2.0, fontweight=weight,
                parse_math=False,
            )  # fmt: skip
            remark = strip_remark(data, strip).replace("\n", ", ")
            row.set_title(remark, fontsize=7.5, loc="right", pad=2.0)
            rows.append(row)
            at += _LABEL + _STRIP
        upper = set_time_axes(rows, data, zone, _TICKS, 7.5)
        for home, name in ((upper, zone_name(zone)), (rows[-1], "UTC")):
            home.set_xlabel(name, fontsize=7.5, labelpad=1.5)
        for text, lower, size, weight in (
            (shorten(site, 44), 0.17, 10, "normal"),
            ("\n".join(answer), 0.29, 8.5, "bold"),
        ):
            figure.text(
                0.02, 1.0 - lower / height, text, fontsize=size, fontweight=weight,
                va="center" if size == 10 else "top", color=INK, parse_math=False,
            )  # fmt: skip
    return figure_bytes(figure, "png")
