"""The time–height chart: when, where, how likely and how sure, read in ten seconds."""

from __future__ import annotations

import textwrap
from datetime import UTC
from pathlib import Path
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo

import matplotlib
import numpy as np
import xarray as xr
from matplotlib import dates as mdates
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import QuadMesh
from matplotlib.figure import Figure

from forecast.output.chart_data import Strip, TimeHeight, time_height, utc
from forecast.output.chart_layers import (
    CHART_STYLE,
    FAINT,
    INK,
    LIKELY,
    STANDARD_GRADIENT,
    chosen_strips,
    draw_bars,
    draw_gradient,
    draw_light,
    draw_likelihood,
    figure_bytes,
    mark_forecast,
    most_of,
)
from forecast.output.files import write_bytes_atomic
from forecast.output.text import chart_text, local_time, percent, shorten
from forecast.schema import CAUTION

if TYPE_CHECKING:
    from forecast.outlook import Window

__all__ = ["draw_time_height", "save_chart"]


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
    with matplotlib.rc_context(CHART_STYLE):
        strips, left_out = chosen_strips(data.strips)
        single = data.time.size == 1
        tall = 3.9 + 0.36 * len(strips)
        figure = Figure(figsize=(11.0, tall + 2.2), dpi=110, facecolor="white")
        FigureCanvasAgg(figure)
        height = figure.get_figheight()
        grid = figure.add_gridspec(
            len(strips) + 2,
            2 if single else 1,
            height_ratios=[3.7, 0.16, *[0.36] * len(strips)],
            left=0.225,
            right=0.915,
            top=1.0 - 1.22 / height,
            bottom=1.0 / height,
            hspace=0.12,
        )
        axis = figure.add_subplot(grid[0, 0])
        span = mdates.date2num([data.left.min(), data.right.max()])
        mesh = draw_gradient(axis, data, low_stretch)
        draw_likelihood(axis, data)
        _mark_profiles(axis, data)
        mark_forecast(axis, data)
        axis.set_xlim(*span)
        axis.set_ylabel("height above ground (m)")
        _colour_bar(figure, axis, mesh, height)
        if single:
            _draw_profile(figure.add_subplot(grid[0, 1]), outlook, int(data.rows[0]), top)
        light = figure.add_subplot(grid[1, 0])
        draw_light(light, data)
        below = [light]
        for i, strip in enumerate(strips):
            row = figure.add_subplot(grid[2 + i, 0])
            _draw_strip(row, data, strip)
            below.append(row)
        for row in below:
            row.set_xlim(*span)
        _time_axes(axis, below[-1], [axis, *below[:-1]], span, zone)
        _title(figure, outlook, data, windows or [], zone, height)
        _footer(figure, outlook, data, left_out, height)
    return figure


def save_chart(figure: Figure, stem: str | Path) -> dict[str, Any]:
    """Write a chart as PNG and SVG, the same bytes for the same chart.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        From `draw_time_height`.
    stem : str or Path
        Path without ending.

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
        out[ending] = figure_bytes(figure, ending)
        write_bytes_atomic(Path(f"{stem}.{ending}"), out[ending])
    figure.clear()
    return out


def _mark_profiles(axis: Axes, data: TimeHeight) -> None:
    """Ticks for ascents and model times."""
    when = mdates.date2num(data.time)
    across = axis.get_xaxis_transform()
    for mask, marker, size, label in (
        (data.ascent, "^", 20, "ascent"),
        (~data.ascent, "|", 12, "model profile"),
    ):
        if mask.any():
            axis.scatter(
                when[mask], np.full(mask.sum(), 0.012), s=size, marker=marker, color="white",
                edgecolors=INK if marker == "^" else None, linewidths=0.6, transform=across,
                label=label, zorder=5,
            )  # fmt: skip
    handles, labels = axis.get_legend_handles_labels()
    lines = [
        matplotlib.lines.Line2D([], [], color="white", lw=w, ls=s)
        for w, s in ((0.7, "dotted"), (1.2, "dashed"), (1.9, "solid"))
    ]
    axis.legend(
        [*handles, *lines],
        [*labels, *[f"in a duct, {100 * p:.0f} % of members" for p in LIKELY]],
        loc="upper left",
        ncols=5,
        fontsize=7.5,
        framealpha=0.75,
        facecolor="#3a3a3a",
        labelcolor="white",
        handlelength=1.8,
        columnspacing=1.0,
        borderpad=0.35,
    )


def _colour_bar(figure: Figure, axis: Axes, mesh: QuadMesh, height: float) -> None:
    box = axis.get_position()
    bar_axis = figure.add_axes((0.925, box.y0, 0.013, box.height))
    bar = figure.colorbar(mesh, cax=bar_axis, extend="both", extendfrac=0.03)
    bar.set_ticks([-100.0, 0.0, STANDARD_GRADIENT, 200.0])
    bar.set_ticklabels(["−100", "0", "118", "200"])
    bar.ax.axhline(0.0, color="white", lw=1.6)
    bar.ax.tick_params(labelsize=8)
    bar.set_label("dM/dz (per km): below 0 trapping, 118 standard air", fontsize=8)


def _draw_profile(axis: Axes, outlook: xr.Dataset, row: int, top: float) -> None:
    """M by height, with ducts shaded, beside a lone profile."""
    z = outlook["height"].values[row]
    m = outlook["modified_refractivity"].values[row]
    good = np.isfinite(z) & (z <= top)
    axis.plot(m[good], z[good], color=INK, lw=1.2)
    least = float(outlook.attrs.get("minimum_duct_strength", 0.0))
    base, end = outlook["duct_base"].values[row], outlook["duct_top"].values[row]
    for b, e, s in zip(base, end, outlook["duct_strength"].values[row], strict=True):
        if np.isfinite(s) and s >= least and b < top:
            axis.axhspan(b, min(e, top), color="#00224e", alpha=0.25, lw=0)
    axis.set_ylim(0.0, top)
    axis.set_xlabel("modified refractivity M", fontsize=8.5)
    axis.tick_params(labelleft=False, labelsize=8)
    axis.set_title("M of the profile; ducts shaded", fontsize=8.5)
    axis.grid(color="#dddddd", lw=0.5)


def _draw_strip(axis: Axes, data: TimeHeight, strip: Strip) -> None:
    """Draw the bars with their label on the left and the largest on the right."""
    draw_bars(axis, data, strip)
    label = shorten(strip.label, 44)
    weight = "bold" if strip.kind == "sightline" else "normal"
    axis.set_ylabel(
        "\n".join(textwrap.wrap(label, 25)), rotation=0, ha="right", va="center", fontsize=8.5,
        fontweight=weight, parse_math=False,
    )  # fmt: skip
    axis.text(
        1.008,
        0.5,
        most_of(data, strip),
        transform=axis.transAxes,
        va="center",
        fontsize=8,
        color=INK,
    )


def _time_axes(
    upper: Axes, lowest: Axes, others: list[Axes], span: np.ndarray, zone: ZoneInfo
) -> None:
    """UTC at the bottom, local time at the top."""
    for axis in others:
        axis.tick_params(axis="x", labelbottom=False, length=0)
    days = span[1] - span[0]
    scales: list[tuple[Any, Any, str]] = [
        (lowest, UTC, "bottom"),
        (upper.secondary_xaxis("top"), zone, "top"),
    ]
    for axis, tz, where in scales:
        hours = next(h for h in (1, 3, 6, 12, 24, 48, 96, 240) if days * 24 / h <= 13 or h == 240)
        locator: mdates.DateLocator
        if hours < 24:
            locator = mdates.HourLocator(byhour=range(0, 24, hours), tz=tz)
        else:
            locator = mdates.DayLocator(interval=hours // 24, tz=tz)
        axis.xaxis.set_major_locator(locator)
        pattern = "%-d %b" if hours >= 24 else "%-d %b\n%H:%M"
        axis.xaxis.set_major_formatter(mdates.DateFormatter(pattern, tz=tz))
        axis.tick_params(axis="x", labelsize=8)
        name = "UTC" if where == "bottom" else f"local time ({zone.key})"
        axis.set_xlabel(name, fontsize=8.5, labelpad=2.0)
    lowest.set_xlim(*span)
    upper.grid(axis="x", color="white", lw=0.4, alpha=0.5)


def _title(
    figure: Figure,
    outlook: xr.Dataset,
    data: TimeHeight,
    windows: list[Window],
    zone: ZoneInfo,
    height: float,
) -> None:
    mine = [w for w in windows if w.site == data.site]
    figure.text(
        0.02, 1.0 - 0.26 / height, shorten(f"{outlook.attrs.get('title', '')} · {data.site}", 90),
        fontsize=13, fontweight="bold", va="center", color=INK, parse_math=False,
    )  # fmt: skip
    if mine:
        w = mine[0]
        answer = (
            f"Best: {shorten(w.subject, 44)}, {local_time(w.best_time, UTC)} UTC "
            f"({local_time(w.best_time, zone)} local): {percent(w.probability)} "
            f"({percent(w.lower)} to {percent(w.upper)})"
        )
    else:
        answer = "No window: nothing reaches the threshold."
    figure.text(
        0.02, 1.0 - 0.55 / height, answer, fontsize=10.5, va="center", color=INK, parse_math=False
    )
    figure.text_alternative = chart_text(outlook, data, mine, zone)  # type: ignore[attr-defined]


def _footer(
    figure: Figure, outlook: xr.Dataset, data: TimeHeight, left_out: int, height: float
) -> None:
    more = f" {left_out} more rows in the tables." if left_out else ""
    lines = [
        f"{data.ascent.sum()} ascents, {(~data.ascent).sum()} model profiles, "
        f"{utc(data.time[0]):%Y-%m-%d %H:%M} to {utc(data.time[-1]):%Y-%m-%d %H:%M} UTC. "
        f"Bars: share of members (0 to 100 %), pale band: 90 % interval, hatched: cannot tell. "
        f"{str(outlook.attrs.get('calibration', '')).capitalize()}.{more}",
        f"Source: {outlook.attrs.get('source', '')}. {CAUTION}",
    ]
    figure.text(
        0.02, 0.08 / height, "\n".join(lines), fontsize=7, va="bottom", color=FAINT,
        parse_math=False, wrap=True,
    )  # fmt: skip
