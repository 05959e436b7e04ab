"""The layers that wide and narrow charts share: shading, outlines, bars, day and night."""

from __future__ import annotations

import io
import warnings
from typing import Any

import matplotlib
import numpy as np
from matplotlib import dates as mdates
from matplotlib.axes import Axes
from matplotlib.collections import PolyCollection, QuadMesh
from matplotlib.colors import ListedColormap, Normalize
from matplotlib.figure import Figure

from forecast.output.chart_data import Strip, TimeHeight, best_profile
from forecast.output.text import percent

__all__ = [
    "CHART_STYLE",
    "FAINT",
    "INK",
    "LIKELY",
    "STANDARD_GRADIENT",
    "chosen_strips",
    "draw_bars",
    "draw_gradient",
    "draw_light",
    "draw_likelihood",
    "figure_bytes",
    "mark_forecast",
    "most_of",
]

_GRADIENT_RANGE = (-150.0, 260.0)  # dM/dz per km; trapping below 0
STANDARD_GRADIENT = 118.0  # dM/dz per km in standard air, k = 4/3
LIKELY = (0.3, 0.6, 0.9)  # outlines of the likelihood of lying inside a duct
_MOST_STRIPS = 12
INK = "#1b1b1b"
FAINT = "#6b6b6b"
CHART_STYLE: Any = {
    "font.family": "DejaVu Sans",
    "font.size": 9.5,
    "svg.hashsalt": "bendcast",
    "svg.fonttype": "none",
    "path.simplify": True,
}


def figure_bytes(figure: Figure, ending: str) -> bytes:
    """The figure as ``png`` or ``svg``: the same bytes for the same figure."""
    stamps = {"png": {"Software": None}, "svg": {"Date": None, "Creator": None}}
    buffer = io.BytesIO()
    with matplotlib.rc_context(CHART_STYLE), warnings.catch_warnings():
        # Names may hold letters that the font lacks: they are drawn as boxes, no news for a log.
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        figure.savefig(buffer, format=ending, metadata=stamps[ending])
    return buffer.getvalue()


def chosen_strips(strips: list[Strip]) -> tuple[list[Strip], int]:
    """Keep the likeliest strips where there are more than a chart can hold."""
    if len(strips) <= _MOST_STRIPS:
        return strips, 0
    best = sorted(strips, key=lambda s: -float(np.nanmax([*s.probability, -1.0])))[:_MOST_STRIPS]
    return [s for s in strips if s in best], len(strips) - len(best)


def _colours() -> ListedColormap:
    """Cividis (Nuñez, Anderton & Renslow 2018): light where rays bend little, dark if trapped."""
    return ListedColormap(matplotlib.colormaps["cividis"](np.linspace(0.0, 1.0, 256)))


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
        cmap=_colours(),
        norm=Normalize(*_GRADIENT_RANGE),
        rasterized=True,
        shading="flat",
    )
    axis.set_facecolor("#e9e9e9")
    axis.set_ylim(0.0, data.edges[-1])
    if low_stretch:
        axis.set_yscale("function", functions=(_root, np.square))
        axis.set_yticks(
            [h for h in (0, 50, 100, 250, 500, 1000, 2000, 3000) if h <= data.edges[-1]]
        )
        axis.set_ylim(0.0, data.edges[-1])
    return mesh


def _root(height: Any) -> Any:
    return np.sqrt(np.maximum(height, 0.0))


def draw_likelihood(axis: Axes, data: TimeHeight) -> None:
    """Outline where ducts lie: thicker and whiter the likelier."""
    x = np.empty(2 * data.time.size)
    x[0::2] = mdates.date2num(data.left)
    x[1::2] = mdates.date2num(data.right)
    values = np.repeat(np.nan_to_num(data.likelihood), 2, axis=0).T
    if values.max(initial=0.0) < LIKELY[0]:
        return
    axis.contour(
        x,
        data.bins,
        values,
        levels=LIKELY,
        colors="white",
        linewidths=[0.7, 1.2, 1.9],
        linestyles=["dotted", "dashed", "solid"],
    )


def mark_forecast(axis: Axes, data: TimeHeight) -> None:
    """Draw a line where the forecast begins, after the latest ascent."""
    if data.ascent.any() and not data.ascent.all():
        latest = mdates.date2num(data.right[data.ascent].max())
        axis.axvline(latest, color="white", lw=1.4)
        axis.text(
            latest, 0.9, " forecast →", color="white", fontsize=8.5,
            transform=axis.get_xaxis_transform(),
        )  # fmt: skip


def draw_light(axis: Axes, data: TimeHeight) -> None:
    """Night, twilight and day as a strip of greys."""
    x = mdates.date2num(data.light_time)
    step = x[1] - x[0]
    edges = np.append(x - 0.5 * step, x[-1] + 0.5 * step)
    axis.pcolormesh(
        edges,
        [0.0, 1.0],
        data.light[None, :],
        cmap=ListedColormap(["#30343b", "#9aa1ab", "#f7f3df"]),
        vmin=0,
        vmax=2,
        rasterized=True,
    )
    axis.set_yticks([])
    axis.set_ylabel("night · twilight · day", rotation=0, ha="right", va="center", fontsize=8)


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


def most_of(data: TimeHeight, strip: Strip) -> str:
    """Say the largest probability of a strip in a few letters: of what lies ahead, if any does."""
    best = best_profile(data, strip)
    if best is None:
        return "unknown"
    most = percent(float(strip.probability[best]))
    return f"{most} ahead" if data.ahead.any() and not data.ahead.all() else f"max {most}"


def draw_bars(axis: Axes, data: TimeHeight, strip: Strip) -> None:
    """Probability as bars, with the interval as a lighter band around their ends."""
    x = mdates.date2num(data.left)
    width = mdates.date2num(data.right) - x
    known = np.isfinite(strip.probability)
    axis.set_facecolor("#f5f5f5")
    none, whole = np.zeros(x.size), np.ones(x.size)
    _add_bars(axis, x, width, none, strip.probability, known, color="#00224e")
    _add_bars(axis, x, width, strip.lower, strip.upper, known, color="#d3b13b", alpha=0.75)
    _add_bars(
        axis, x, width, none, whole, ~known, facecolor="none", edgecolor="#aaaaaa", hatch="////"
    )
    axis.set_ylim(0.0, 1.0)
    axis.set_yticks([0.5])
    axis.tick_params(axis="y", labelleft=False, length=0)
    axis.grid(axis="y", color="white", lw=0.8)
    axis.set_axisbelow(False)
