"""The time–height chart: when, where, how likely and how sure, read in ten seconds."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo

import matplotlib
import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import QuadMesh
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from forecast.output.chart_data import TimeHeight, time_height, utc
from forecast.output.chart_layers import (
    CHART_STYLE,
    LIKELY,
    LIKELY_STYLES,
    LIKELY_WIDTHS,
    STANDARD_GRADIENT,
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
from forecast.output.colours import FAINT, INK, LIKELIHOOD, NO_DATA, gradient_colours
from forecast.output.files import write_bytes_atomic
from forecast.output.text import (
    answer_lines,
    chart_text,
    percent,
    profile_counts,
    shorten,
    zone_name,
)
from forecast.schema import CAUTION

if TYPE_CHECKING:
    from forecast.outlook import Window

__all__ = ["draw_time_height", "save_chart"]

# Inches, from the left and from the top.
_WIDTH = 11.0
_LEFT, _MIDDLE, _BESIDE, _RIGHT = 2.3, 4.7, 5.95, 9.75
_HEAD, _MAIN, _STRIP, _SPACE, _FOOT = 1.58, 3.7, 0.34, 0.08, 0.98
_TICKS = 13


def draw_time_height(
    outlook: xr.Dataset,
    site: str,
    *,
    timezone: str = "UTC",
    top: float = 3000.0,
    low_stretch: bool = False,
    windows: list[Window] | None = None,
) -> Figure:
    """Draw the chart of one site.

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
        Windows; the best of this site is named in the title.

    Returns
    -------
    matplotlib.figure.Figure
        Ready to save; it belongs to no window.
    """
    data = time_height(outlook, site, top)
    zone = ZoneInfo(timezone)
    mine = [w for w in windows or [] if w.site == site]
    strips, left_out = chosen_strips(data.strips)
    single = data.time.size == 1
    with matplotlib.rc_context(CHART_STYLE):
        height = _HEAD + _MAIN + 0.42 + len(strips) * (_STRIP + _SPACE) + _FOOT
        figure = Figure(figsize=(_WIDTH, height), dpi=110, facecolor="white")
        FigureCanvasAgg(figure)
        right = _MIDDLE if single else _RIGHT

        def add(from_top: float, tall: float, ends: tuple[float, float] = (_LEFT, right)) -> Axes:
            wide = (ends[1] - ends[0]) / _WIDTH
            bottom = 1.0 - (from_top + tall) / height
            return figure.add_axes((ends[0] / _WIDTH, bottom, wide, tall / height))

        axis = add(_HEAD, _MAIN)
        mesh = draw_gradient(axis, data, low_stretch)
        draw_likelihood(axis, data)
        mark_forecast(axis, data)
        axis.set_ylabel("height above ground (m)")
        _colour_bar(add(_HEAD, _MAIN, (_RIGHT + 0.12, _RIGHT + 0.26)), mesh)
        if single:
            beside = add(_HEAD, _MAIN, (_BESIDE, _RIGHT))
            _draw_profile(beside, outlook, int(data.rows[0]), data.edges[-1], axis)
        marks = add(_HEAD + _MAIN + 0.03, 0.14)
        mark_profiles(marks, data)
        light = add(_HEAD + _MAIN + 0.19, 0.15)
        draw_light(light, data)
        _label(marks, "ascents ▲  model times |")
        _label(light, "night · twilight · day")
        best = "best ahead (UTC)" if data.ahead.any() and data.ascent.any() else "best (UTC)"
        _remark(light, best, FAINT)
        below = [marks, light]
        for i, strip in enumerate(strips):
            row = add(_HEAD + _MAIN + 0.42 + i * (_STRIP + _SPACE), _STRIP)
            draw_bars(row, data, strip)
            name = "\n".join(textwrap.wrap(shorten(strip.label, 44), 25))
            _label(row, name, "bold" if strip.kind == "sightline" else "normal")
            _remark(row, strip_remark(data, strip))
            below.append(row)
        set_time_axes([axis, *below], data, zone, _TICKS // 3 if single else _TICKS, 8.0)
        # Beside the ticks, in the margin: no line is lost to it.
        _remark(
            axis, zone_name(zone).replace(" (", "\n("), FAINT, offset=20.0, at=1.0 + 0.16 / _MAIN
        )
        _remark(below[-1], "UTC", FAINT, offset=20.0, at=-0.13 / _STRIP)
        axis.grid(axis="x", color="white", lw=0.5, alpha=0.6)
        _header(figure, outlook, data, mine, zone)
        _footer(figure, outlook, data, left_out)
    figure.text_alternative = chart_text(outlook, data, mine, zone)  # type: ignore[attr-defined]
    return figure


def save_chart(figure: Figure, stem: str | Path, colours: int | None = None) -> dict[str, Any]:
    """Write a chart as PNG and SVG, the same bytes for the same chart.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        From `draw_time_height`.
    stem : str or Path
        Path without ending.
    colours : int, optional
        As for `forecast.output.chart_layers.figure_bytes`.

    Returns
    -------
    dict
        ``png`` and ``svg`` (bytes), ``alt`` (text alternative), ``file`` (name of the SVG).
    """
    out: dict[str, Any] = {
        "alt": getattr(figure, "text_alternative", ""),
        "file": f"{Path(stem).name}.svg",
    }
    for ending in ("png", "svg"):
        out[ending] = figure_bytes(figure, ending, out["alt"], colours)
        write_bytes_atomic(Path(f"{stem}.{ending}"), out[ending])
    figure.clear()
    return out


def _label(axis: Axes, text: str, weight: str = "normal") -> None:
    """Name a strip on its left."""
    axis.annotate(
        text, (0.0, 0.5), (-7.0, 0.0), xycoords="axes fraction", textcoords="offset points",
        ha="right", va="center", fontsize=8.5, fontweight=weight, color=INK, parse_math=False,
    )  # fmt: skip


def _remark(axis: Axes, text: str, colour: str = INK, offset: float = 7.0, at: float = 0.5) -> None:
    """Say something on the right of an axis."""
    axis.annotate(
        text, (1.0, at), (offset, 0.0), xycoords="axes fraction", textcoords="offset points",
        va="center", fontsize=8, color=colour, linespacing=1.05, parse_math=False,
    )  # fmt: skip


def _colour_bar(axis: Axes, mesh: QuadMesh) -> None:
    figure = axis.get_figure(root=True)
    assert figure is not None
    bar = figure.colorbar(mesh, cax=axis)
    bar.set_ticks([-100.0, 0.0, STANDARD_GRADIENT, 200.0])
    bar.set_ticklabels(["−100", "0", "118", "200"])
    axis.tick_params(labelsize=8)
    bar.set_label("dM/dz (per km): below 0 trapping, 118 standard air", fontsize=8)


def _draw_profile(axis: Axes, outlook: xr.Dataset, row: int, top: float, beside: Axes) -> None:
    """M by height, with ducts shaded, beside a lone profile."""
    z = outlook["height"].values[row]
    m = outlook["modified_refractivity"].values[row]
    good = np.isfinite(z) & np.isfinite(m) & (z <= top)
    axis.sharey(beside)
    axis.plot(m[good], z[good], color=INK, lw=1.2)
    least = float(outlook.attrs.get("minimum_duct_strength", 0.0))
    base, end = outlook["duct_base"].values[row], outlook["duct_top"].values[row]
    for b, e, s in zip(base, end, outlook["duct_strength"].values[row], strict=True):
        if np.isfinite(s) and s >= least and b < top:
            axis.axhspan(b, min(e, top), color=LIKELIHOOD, alpha=0.3, lw=0)
    axis.set_xlabel("modified refractivity M", fontsize=8)
    axis.xaxis.set_label_position("top")
    axis.tick_params(labelleft=False, labelsize=8, top=True, labeltop=True, labelbottom=False)
    axis.grid(color="#dddddd", lw=0.5)


def _header(
    figure: Figure, outlook: xr.Dataset, data: TimeHeight, windows: list[Window], zone: ZoneInfo
) -> None:
    """Whose chart it is, the answer in words, and how to read the picture."""
    height = figure.get_figheight()
    title = f"{outlook.attrs.get('title', '')} · {data.site}"
    lines = [title, *answer_lines(windows, zone)]
    for text, at, size, weight in zip(
        lines, (0.24, 0.53, 0.76), (10, 13, 10), ("normal", "bold", "normal"), strict=True
    ):
        figure.text(
            0.02, 1.0 - at / height, shorten(text, 110), fontsize=size, fontweight=weight,
            va="center", color=INK, parse_math=False,
        )  # fmt: skip
    dark = gradient_colours()(0.2)
    handles = [
        Patch(color=dark, label="layer that traps radio waves (dM/dz < 0)"),
        *[
            Line2D(
                [],
                [],
                color=LIKELIHOOD,
                lw=width,
                ls=style,
                label=f"in a duct: {percent(p)} of members",
            )
            for p, width, style in zip(LIKELY, LIKELY_WIDTHS, LIKELY_STYLES, strict=True)
        ],
        Patch(color=NO_DATA, label="no data"),
    ]
    figure.legend(
        handles=handles,
        loc="center left",
        bbox_to_anchor=(0.014, 1.0 - 1.02 / height),
        ncols=len(handles),
        fontsize=8,
        frameon=False,
        handlelength=2.0,
        columnspacing=1.4,
        borderaxespad=0.0,
    )


def _footer(figure: Figure, outlook: xr.Dataset, data: TimeHeight, left_out: int) -> None:
    more = f" {left_out} more rows in the tables." if left_out else ""
    lines = [
        f"{profile_counts(data)}, "
        f"{utc(data.time[0]):%Y-%m-%d %H:%M} to {utc(data.time[-1]):%Y-%m-%d %H:%M} UTC. "
        f"Bars: share of members, 0 to 100 %; pale band: 90 % interval; hatched: cannot tell. "
        f"{str(outlook.attrs.get('calibration', '')).capitalize()}.{more}",
        f"Source: {outlook.attrs.get('source', '')}.",
        CAUTION,
    ]
    figure.text(
        0.02, 0.08 / figure.get_figheight(), "\n".join(lines), fontsize=7, va="bottom",
        color=FAINT, parse_math=False, wrap=True,
    )  # fmt: skip
