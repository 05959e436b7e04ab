"""The layers that wide and narrow charts share: shading, outlines, bars, day and night."""

from __future__ import annotations

import io
import warnings
from datetime import UTC
from typing import Any
from zoneinfo import ZoneInfo

import matplotlib
import numpy as np
from matplotlib import dates as mdates
from matplotlib.axes import Axes
from matplotlib.collections import PolyCollection, QuadMesh
from matplotlib.colors import ListedColormap, Normalize
from matplotlib.figure import Figure
from matplotlib.patheffects import withStroke
from PIL import Image

from forecast.output.chart_data import Strip, TimeHeight, best_profile, utc
from forecast.output.colours import (
    GRADIENT_RANGE,
    INK,
    INTERVAL,
    LIGHT,
    LIKELIHOOD,
    NO_DATA,
    gradient_colours,
)
from forecast.output.text import local_time, percent
from forecast.output.time_axis import time_ticks

__all__ = [
    "CHART_STYLE",
    "LIKELY",
    "LIKELY_STYLES",
    "LIKELY_WIDTHS",
    "STANDARD_GRADIENT",
    "chosen_strips",
    "draw_bars",
    "draw_gradient",
    "draw_light",
    "draw_likelihood",
    "figure_bytes",
    "mark_forecast",
    "mark_profiles",
    "set_time_axes",
    "strip_remark",
]

STANDARD_GRADIENT = 118.0  # dM/dz per km in standard air, k = 4/3
_STRETCHED_TICKS = (0, 30, 100, 200, 300, 500, 750, 1000, 1500, 2000, 3000, 4000, 5000)
LIKELY = (0.3, 0.9)  # outlines of the likelihood of lying inside a duct
LIKELY_WIDTHS = (0.9, 1.4)
LIKELY_STYLES = ("dashed", "solid")
_MOST_STRIPS = 12
CHART_STYLE: Any = {
    "font.family": "DejaVu Sans",
    "font.size": 9.5,
    "svg.hashsalt": "bendcast",
    "svg.fonttype": "none",
    "path.simplify": True,
}


def figure_bytes(
    figure: Figure, ending: str, alternative: str = "", colours: int | None = None
) -> bytes:
    """The figure as ``png`` or ``svg``, this with a text alternative: same figure, same bytes.

    A PNG of few `colours` (at most 256) is a quarter of the size: what line drawings need.
    """
    # Neither a date nor a version: they would change the bytes.
    meta: dict[str, Any] = {"Software": None}
    if ending == "svg":
        meta = {"Date": None, "Creator": None}
        if alternative:
            meta["Title"] = alternative
    buffer = io.BytesIO()
    with matplotlib.rc_context(CHART_STYLE), warnings.catch_warnings():
        # Names may hold letters that the font lacks: they are drawn as boxes, no news for a log.
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        figure.savefig(buffer, format=ending, metadata=meta)
    if ending != "png" or colours is None:
        return buffer.getvalue()
    reduced = io.BytesIO()
    with Image.open(buffer) as image:
        image.convert("RGB").quantize(colours, dither=Image.Dither.NONE).save(
            reduced, "PNG", optimize=True
        )
    return reduced.getvalue()


def chosen_strips(strips: list[Strip]) -> tuple[list[Strip], int]:
    """Keep the likeliest strips where there are more than a chart can hold."""
    if len(strips) <= _MOST_STRIPS:
        return strips, 0
    best = sorted(strips, key=lambda s: -float(np.nanmax([*s.probability, -1.0])))[:_MOST_STRIPS]
    return [s for s in strips if s in best], len(strips) - len(best)


def draw_gradient(axis: Axes, data: TimeHeight, low_stretch: bool) -> QuadMesh:
    """Shade dM/dz of every native layer; one image artist, gaps left open."""
    edges = np.empty(2 * data.time.size)
    edges[0::2] = mdates.date2num(data.left)
    edges[1::2] = mdates.date2num(data.right)
    # Between the columns stand columns of no width or, where there is a gap, of nothing.
    values = np.full((data.edges.size - 1, edges.size - 1), np.nan)
    values[:, 0::2] = data.gradient.T
    mesh = axis.pcolormesh(
        edges,
        data.edges,
        np.ma.masked_invalid(values),
        cmap=gradient_colours(),
        norm=Normalize(*GRADIENT_RANGE),
        rasterized=True,
        shading="flat",
    )
    axis.set_facecolor(NO_DATA)
    axis.set_ylim(0.0, data.edges[-1])
    if low_stretch:
        axis.set_yscale("function", functions=(_root, np.square))
        axis.set_yticks(
            [h for h in (0, 50, 100, 250, 500, 1000, 2000, 3000) if h <= data.edges[-1]]
        )
        axis.set_ylim(0.0, data.edges[-1])
        axis.set_yticks([z for z in _STRETCHED_TICKS if z <= data.edges[-1]])
    return mesh


def _root(height: Any) -> Any:
    return np.sqrt(np.maximum(height, 0.0))


def draw_likelihood(axis: Axes, data: TimeHeight, weight: float = 1.0) -> None:
    """Outline where ducts lie, the heavier the likelier; a gap in time ends an outline."""
    values = np.nan_to_num(data.likelihood)
    if values.max(initial=0.0) < LIKELY[0]:
        return
    edges = np.stack([data.left, data.right], axis=1)
    # Two points per profile, and two of nothing in every gap.
    gaps = np.flatnonzero(data.left[1:] > data.right[:-1]) + 1
    empty = np.stack([data.right[gaps - 1], data.left[gaps]], axis=1)
    x = mdates.date2num(np.insert(edges, gaps, empty, axis=0).ravel())
    values = np.repeat(np.insert(values, gaps, 0.0, axis=0), 2, axis=0)
    lines = axis.contour(
        x,
        data.bins,
        values.T,
        levels=LIKELY,
        colors=LIKELIHOOD,
        linewidths=[weight * width for width in LIKELY_WIDTHS],
        linestyles=LIKELY_STYLES,
    )
    # A pale rim keeps the lines apart from dark layers.
    lines.set_path_effects([withStroke(linewidth=2.2 * weight, foreground="white")])


def mark_forecast(axis: Axes, data: TimeHeight) -> None:
    """Draw a line where the forecast begins, after the latest ascent."""
    if data.ascent.any() and data.ahead.any():
        latest = mdates.date2num(data.right[data.ascent].max())
        axis.axvline(latest, color=INK, lw=1.2)
        axis.text(
            latest, 0.955, " forecast →", color=INK, fontsize=8.5, va="center",
            transform=axis.get_xaxis_transform(),
        )  # fmt: skip


def mark_profiles(axis: Axes, data: TimeHeight, weight: float = 1.0) -> None:
    """A strip with a triangle for every ascent and a dash for every model profile."""
    when = mdates.date2num(data.time)
    for mask, marker, size in ((data.ascent, "^", 16), (~data.ascent, "|", 14)):
        axis.scatter(
            when[mask], np.full(mask.sum(), 0.5), s=size * weight**2, marker=marker,
            color=INK, linewidths=0.7 * weight, clip_on=False,
        )  # fmt: skip
    axis.set_ylim(0.0, 1.0)
    axis.set_axis_off()


def draw_light(axis: Axes, data: TimeHeight) -> None:
    """Night, twilight and day as a strip of greys."""
    x = mdates.date2num(data.light_time)
    step = x[1] - x[0]
    edges = np.append(x - 0.5 * step, x[-1] + 0.5 * step)
    axis.pcolormesh(
        edges,
        [0.0, 1.0],
        data.light[None, :],
        cmap=ListedColormap([NO_DATA, *LIGHT]),
        vmin=-1,
        vmax=2,
        rasterized=True,
    )
    axis.set_yticks([])


def _add_bars(
    axis: Axes,
    left: np.ndarray,
    width: np.ndarray,
    bottom: np.ndarray,
    top: np.ndarray,
    shown: np.ndarray,
    **style: Any,
) -> None:
    """Bars as one collection: hundreds of patches of their own would take most of the drawing."""
    if not shown.any():
        return
    x0, x1, y0, y1 = (a[shown] for a in (left, left + width, bottom, top))
    corners = np.stack(
        [np.stack([x, y], axis=1) for x, y in ((x0, y0), (x0, y1), (x1, y1), (x1, y0))], axis=1
    )
    axis.add_collection(PolyCollection(list(corners), linewidth=0.0, rasterized=True, **style))


def draw_bars(axis: Axes, data: TimeHeight, strip: Strip) -> None:
    """Probability as bars, with the interval as a lighter band around their ends."""
    x = mdates.date2num(data.left)
    width = mdates.date2num(data.right) - x
    known = np.isfinite(strip.probability)
    axis.set_facecolor(NO_DATA)
    none, whole = np.zeros(x.size), np.ones(x.size)
    _add_bars(axis, x, width, none, whole, whole > 0.0, color="#f5f5f5")
    _add_bars(axis, x, width, none, strip.probability, known, color=LIKELIHOOD)
    _add_bars(axis, x, width, strip.lower, strip.upper, known, color=INTERVAL, alpha=0.8)
    _add_bars(
        axis, x, width, none, whole, ~known, facecolor="none", edgecolor="#aaaaaa", hatch="////"
    )
    axis.set_ylim(0.0, 1.0)
    axis.set_yticks([0.5])
    axis.tick_params(axis="y", labelleft=False, length=0)
    axis.grid(axis="y", color="#bbbbbb", lw=0.6)
    axis.set_axisbelow(False)


def strip_remark(data: TimeHeight, strip: Strip) -> str:
    """How likely, how sure and when, for the time of the strip worth naming."""
    best = best_profile(data, strip)
    if best is None:
        return "cannot tell"
    if not strip.probability[best] >= 0.005:
        return percent(0.0)
    lower, upper = (f"{100.0 * a[best]:.0f}" for a in (strip.lower, strip.upper))
    when = local_time(utc(data.time[best]), UTC)
    return f"{percent(strip.probability[best])} ({lower}–{upper})\n{when}"


def set_time_axes(
    axes: list[Axes], data: TimeHeight, zone: ZoneInfo, most: int, size: float
) -> Axes:
    """Give stacked axes one span of time: UTC at the lowest, local time above the first.

    Returns the axis of local time, for its name.
    """
    ends = utc(data.left.min()), utc(data.right.max())
    for axis in axes:
        axis.set_xlim(*mdates.date2num(ends))
        axis.set_xticks(mdates.date2num([time for time, _ in time_ticks(*ends, UTC, most)]))
        axis.tick_params(axis="x", labelbottom=False, length=0)
    upper: Any = axes[0].secondary_xaxis("top")
    for axis, tz in ((axes[-1], UTC), (upper, zone)):
        ticks = time_ticks(*ends, tz, most)
        axis.set_xticks(mdates.date2num([time for time, _ in ticks]), [text for _, text in ticks])
        axis.tick_params(axis="x", labelsize=size, labelbottom=axis is axes[-1], length=3)
    return upper
