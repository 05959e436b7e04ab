"""The panels of a sightline's picture: rays, looks, transfer curve, lowest air."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle
from matplotlib.ticker import MaxNLocator

from forecast.output.colours import FAINT, INK, LIKELIHOOD
from forecast.output.sight_data import (
    AIR_NAMES,
    ARC_MINUTE,
    ENDS,
    PASSES,
    REACHES,
    angle_range,
    broken_curve,
    bulge,
    fan_fates,
    height_range,
    hidden_parts,
    is_known,
    is_point,
    is_traced,
    land_heights,
    picture_top,
    profile_top,
    sightings,
    silhouette,
    silhouette_span,
    target_rays,
    visible_parts,
)
from forecast.schema import LEVEL_ORIGINS

if TYPE_CHECKING:
    from forecast.outlook.view import SightlineView

__all__ = ["draw_looks", "draw_profile", "draw_rays", "draw_transfer"]

_WATER, _LAND, _DUCT = "#a9bac6", "#8d8272", "#f6d5ae"
_OUT_OF_VIEW = "#dfe3e6"
_BAND = "#f1ead2"
_RAYS = {ENDS: "#b6bcc2", PASSES: "#8b9299", REACHES: LIKELIHOOD}
#: Colour and dash of each air: apart in lightness, in hue for any eye, and in dash.
_LINES: dict[str, tuple[str, Any]] = {
    "air": (LIKELIHOOD, "solid"),
    "standard": ("#1f5f9c", (0, (5, 2))),
    "straight": ("#6f6f6f", (0, (1, 1.3))),
}
_ORIGIN_MARKS = {
    "measured": ("o", INK, "measured"),
    "modelled_surface_layer": ("o", "white", "modelled surface layer"),
    "interpolated": ("x", INK, "interpolated"),
}
_MOST_RAYS = 16  # of a kind drawn
_STEPS = [1, 2, 2.5, 5, 10]  # between ticks
_ROWS, _COLUMNS = 700, 500  # of the silhouettes' images


def _name_panel(
    axis: Axes, text: str, handles: list[Any], scale: float, columns: int, lift: float = 0.0
) -> None:
    """Title of a panel and, between it and the picture, its legend; both raised by points."""
    rows = -(-len(handles) // columns) if handles else 0
    axis.annotate(
        text, (0.0, 1.0), (0.0, lift + (5.0 + 12.0 * rows) * scale + 1.0), xycoords="axes fraction",
        textcoords="offset points", fontsize=10.0 * scale, fontweight="bold", color=INK,
    )  # fmt: skip
    if handles:
        axis.legend(
            handles=handles, loc="lower left", ncols=columns,
            bbox_to_anchor=(-0.005, 1.0 + lift / (72.0 * _size(axis)[1])),
            fontsize=8.0 * scale, frameon=False, handlelength=1.8, columnspacing=1.2,
            handletextpad=0.5, borderaxespad=0.2, labelspacing=0.25,
        )  # fmt: skip


def _size(axis: Axes) -> tuple[float, float]:
    """Width and height of an axis in inches."""
    figure = axis.get_figure(root=True)
    assert figure is not None
    box = axis.get_position()
    return box.width * figure.get_figwidth(), box.height * figure.get_figheight()


def _say(axis: Axes, text: str, scale: float, at: float = 0.5) -> None:
    """Words in the middle of a panel."""
    axis.text(
        0.5, at, text, transform=axis.transAxes, ha="center", va="center",
        fontsize=8.5 * scale, color=INK, linespacing=1.3, zorder=9.0,
        bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.85, "pad": 2.0},
    )  # fmt: skip


def _rounded(number: float) -> str:
    """Two digits of a factor."""
    return f"{float(f'{number:.2g}'):g}"


def draw_rays(axis: Axes, view: SightlineView, scale: float) -> None:
    """Rays over the curved water, in heights above the straight line between its two ends."""
    axis.tick_params(labelsize=8.0 * scale, labelright=True, right=True)
    if not is_known(view):
        axis.set_axis_off()
        _name_panel(axis, "Rays over the curved water", [], scale, 1)
        _say(axis, "The geometry is not known.", scale)
        return
    far, top = view.line.distance, picture_top(view)
    low = -0.07 * top
    along = np.linspace(0.0, far, 241)
    water = bulge(view, along)
    km = along / 1e3
    handles: list[Any] = []
    for base, end in np.asarray(view.ducts, dtype=float).reshape(-1, 2):
        if base < top:
            axis.fill_between(km, water + base, water + end, color=_DUCT, lw=0, zorder=1.0)
            duct = Patch(color=_DUCT, label="duct (holds rays)")
            handles = [duct]
    axis.fill_between(km, low, water, color=_WATER, lw=0, zorder=3.0)
    land = land_heights(view, along)
    if land.any():
        axis.fill_between(km, water, water + land, color=_LAND, lw=0, zorder=3.1)
        handles.append(Patch(color=_LAND, label="land"))
    handles = _draw_target(axis, view) + _draw_fan(axis, view, scale) + handles
    dot: Any = {"marker": "o", "color": INK, "ms": 5.5 * scale, "ls": "none"}
    axis.plot([0.0], [view.observer_height], clip_on=False, zorder=7.0, **dot)
    handles.insert(0, Line2D([], [], label="observer", **dot))
    wide = 0.022 * far / 1e3
    axis.set_xlim(0.0, far / 1e3 + wide)
    axis.set_ylim(low, top)
    axis.set_xlabel("distance from the observer (km)", fontsize=8.5 * scale, labelpad=1.5)
    axis.set_ylabel("height above water\nat the observer (m)", fontsize=8.5 * scale, labelpad=1.5)
    axis.annotate(
        "height above water\nat the target (m)", (1.0, 0.5), (29.0 * scale, 0.0), rotation=90,
        xycoords="axes fraction", textcoords="offset points", fontsize=8.5 * scale, va="center",
        ha="left", multialignment="center",
    )  # fmt: skip
    for ticks in (axis.xaxis, axis.yaxis):
        ticks.set_major_locator(MaxNLocator(7, steps=_STEPS))
    across, up = _size(axis)
    stretch = (up / (top - low)) / (across / (far + 1e3 * wide))
    _name_panel(
        axis, f"Rays over the curved water (heights × {_rounded(stretch)})",
        handles, scale, 4 if scale == 1.0 else 2,
    )  # fmt: skip


def _draw_fan(axis: Axes, view: SightlineView, scale: float) -> list[Line2D]:
    """Rays by what becomes of them; one line for all of a kind, broken between rays."""
    rays = np.asarray(view.fan_height, dtype=float)
    distance = np.asarray(view.fan_distance, dtype=float)
    handles = []
    if not np.isfinite(rays).any():
        _say(axis, "No ray could be followed: the air is not known.", scale)
        return []
    fates, water = fan_fates(view), bulge(view, distance)
    names = {
        REACHES: "rays that reach the target",
        PASSES: "rays that pass it",
        ENDS: "rays that meet water or land"
        if view.terrain is not None
        else "rays that meet water",
    }
    for fate, colour in _RAYS.items():
        some = rays[fates == fate]
        if some.shape[0] > _MOST_RAYS:
            some = some[np.linspace(0, some.shape[0] - 1, _MOST_RAYS).round().astype(int)]
        if fate == REACHES:
            # Neighbours in a fan may both miss what a ray between them meets.
            some = np.concatenate([some, target_rays(view)])
        if not some.size:
            continue
        width = 0.9 if fate == REACHES else 0.6
        gap = np.full((some.shape[0], 1), np.nan)
        x = np.concatenate([np.broadcast_to(distance / 1e3, some.shape), gap], axis=1)
        y = np.concatenate([some + water, gap], axis=1)
        axis.plot(
            x.ravel(), y.ravel(), color=colour, lw=width, zorder=4.0 + 0.1 * fate, gid=f"rays{fate}"
        )
        handles.append(Line2D([], [], color=colour, lw=2.0 * width, label=names[fate]))
    return handles[::-1]


def _draw_target(axis: Axes, view: SightlineView) -> list[Any]:
    """The target at its distance: strong where it is seen, hatched where it is hidden."""
    far = view.line.distance / 1e3
    seen, hidden = visible_parts(view), hidden_parts(view)
    unseen = "target, hidden" if is_traced(view, "air") else "target, not known whether visible"
    if is_point(view):
        face = LIKELIHOOD if seen.size else "white"
        name = "target, visible" if seen.size else unseen
        style: Any = {"marker": "D", "ms": 6.0, "mfc": face, "mec": LIKELIHOOD, "ls": "none"}
        axis.plot([far], [view.top], clip_on=False, zorder=8.0, **style)
        return [Line2D([], [], label=name, **style)]
    handles = []
    strong: Any = {"facecolor": LIKELIHOOD, "edgecolor": LIKELIHOOD}
    pale: Any = {"facecolor": "white", "edgecolor": "#8a8a8a", "hatch": "//////"}
    for parts, name, style in ((seen, "target, visible", strong), (hidden, unseen, pale)):
        for low, high in parts:
            box = (far, low), 0.022 * far, high - low
            axis.add_patch(Rectangle(*box, lw=0.8, zorder=6.0, **style))
        if len(parts):
            handles.append(Patch(lw=0.8, label=name, **style))
    return handles


def draw_looks(boxes: list[Axes], view: SightlineView, scale: float) -> None:
    """The target's silhouette through each air, on the same axes."""
    low, high = angle_range(view)
    left, right, nominal = silhouette_span(view)
    offset = left + (right - left) * (np.arange(_COLUMNS) + 0.5) / _COLUMNS
    angle = low + (high - low) * (np.arange(_ROWS) + 0.5) / _ROWS
    known = is_known(view)
    # 1 km as the unit where metres would crowd the axis.
    unit, per = ("km", 1e3) if right - left > 4000.0 else ("m", 1.0)
    middle = 0.5 * (left + right) / per
    extent = (left / per, right / per, low / ARC_MINUTE, high / ARC_MINUTE)
    for box, (air, name) in zip(boxes, AIR_NAMES.items(), strict=True):
        covered, ends = silhouette(view, air, angle, offset)
        if is_point(view):
            covered = np.zeros_like(covered)
        codes = np.where(covered, 2, np.where(ends[:, None], 1, 0))
        box.imshow(
            codes, extent=extent, origin="lower", aspect="auto", vmin=0, vmax=2, zorder=1.0,
            cmap=ListedColormap(["white", _OUT_OF_VIEW, INK]), interpolation="nearest",
        )  # fmt: skip
        horizon = view.horizon.get(air, np.nan) / ARC_MINUTE
        if np.isfinite(horizon):
            box.axhline(horizon, color=_LINES["standard"][0], lw=1.0, ls=(0, (4, 2)), zorder=2.0)
        shown = bool(covered.any())
        if is_point(view):
            at = sightings(view, air, view.top)[0] / ARC_MINUTE
            box.plot(np.full(at.size, middle), at, "o", ms=4.5 * scale + 1.0, color=INK, zorder=3.0)
            shown = at.size > 0
        if not shown:
            what = "nothing of the\ntarget visible" if is_traced(view, air) else "not known"
            _say(box, what, scale, 0.62)
        box.set_title(name.replace(" (no air)", ""), fontsize=8.5 * scale, pad=3.0, color=INK)
        box.set_xlim(*extent[:2])
        box.set_ylim(*extent[2:])
        ticks = np.array(MaxNLocator(6, steps=_STEPS).tick_values(*extent[:2]))
        inner = np.abs(ticks - middle) < 0.4 * (extent[1] - extent[0])
        box.set_xticks([] if nominal else ticks[inner])
        box.yaxis.set_major_locator(MaxNLocator(7, steps=_STEPS))
        box.tick_params(labelsize=8.0 * scale, labelleft=box is boxes[0])
    boxes[0].set_ylabel("arc minutes above horizontal", fontsize=8.5 * scale, labelpad=1.5)
    across = f"{unit} across at the target" if not nominal else "width not to scale"
    if not nominal and known:
        wide, tall = _size(boxes[0])
        stretch = (tall / (high - low)) / (wide / ((right - left) / view.line.distance))
        across += f" (heights × {_rounded(stretch)})"
    boxes[1].set_xlabel(across, fontsize=8.5 * scale, labelpad=2.0)
    handles = [
        Line2D([], [], color=INK, marker="o", ls="none", ms=5.0, label="target")
        if is_point(view)
        else Patch(color=INK, label="target"),
        Line2D([], [], color=_LINES["standard"][0], lw=1.0, ls=(0, (4, 2)), label="horizon"),
        Patch(
            color=_OUT_OF_VIEW, label="water or land in the way" if scale == 1.0 else "in the way"
        ),
    ]
    optical = view.line.wave == "optical"
    title = "How it would look" if optical else "Directions its waves come from"
    _name_panel(boxes[0], title, handles, scale, 3, 14.0 * scale)


def draw_transfer(axis: Axes, view: SightlineView, scale: float) -> None:
    """Which height at the target each direction leads to, through each air."""
    low, high = (angle / ARC_MINUTE for angle in angle_range(view))
    left, right = height_range(view)
    handles: list[Any] = []
    for i, (air, name) in enumerate(AIR_NAMES.items()):
        colour, dash = _LINES[air]
        angle, height = broken_curve(view, air)
        axis.plot(
            height, angle / ARC_MINUTE, color=colour, ls=dash, lw=2.6 - 0.5 * i, zorder=3.0 + i,
            gid=f"transfer-{air}",
        )  # fmt: skip
        handles.append(Line2D([], [], color=colour, ls=dash, lw=2.6 - 0.5 * i, label=name))
        horizon = view.horizon.get(air, np.nan) / ARC_MINUTE
        if np.isfinite(horizon):
            axis.plot(
                [0.0], [horizon], marker=5, ms=7.0 * scale, color=colour, clip_on=False,
                transform=axis.get_yaxis_transform(), zorder=6.0 - i,
            )  # fmt: skip
    if is_point(view):
        axis.axvline(view.top, color=_BAND, lw=2.5, zorder=1.0)
    elif is_known(view):
        axis.axvspan(view.base, view.top, color=_BAND, lw=0, zorder=1.0)
    handles.insert(1, Patch(color=_BAND, label="target"))
    handles.append(Line2D([], [], color=FAINT, marker=5, ls="none", ms=6.0, label="horizon"))
    if not any(np.isfinite(view.heights.get(air, ())).any() for air in AIR_NAMES):
        traced = is_traced(view, "air")
        _say(axis, "All rays end before the target." if traced else "not known", scale)
    axis.set_xlim(left, right)
    axis.set_ylim(low, high)
    axis.set_xlabel("height at the target's distance (m)", fontsize=8.5 * scale, labelpad=2.0)
    axis.set_ylabel("arc minutes above horizontal", fontsize=8.5 * scale, labelpad=1.5)
    axis.xaxis.set_major_locator(MaxNLocator(6, steps=_STEPS))
    axis.yaxis.set_major_locator(MaxNLocator(7, steps=_STEPS))
    axis.tick_params(labelsize=8.0 * scale)
    axis.grid(color="#e4e4e4", lw=0.5)
    _name_panel(axis, "Which height is seen in which direction", handles, scale, 3)


def draw_profile(axis: Axes, view: SightlineView, scale: float) -> None:
    """The lowest air: temperature and M by height, each level marked by where it comes from."""
    z, t, m = (
        np.asarray(a, dtype=float)
        for a in (view.level_height, view.level_temperature, view.level_modified_refractivity)
    )
    axis.tick_params(labelsize=8.0 * scale)
    top = profile_top(view)
    shown = np.isfinite(z) & (z <= top) & (np.isfinite(t) | np.isfinite(m))
    if not shown.any():
        axis.set_xticks([])
        axis.set_yticks([])
        _say(axis, "The lowest air is not known.", scale)
        _name_panel(axis, "Why: the lowest air", [], scale, 1)
        return
    for base, end in np.asarray(view.ducts, dtype=float).reshape(-1, 2):
        axis.axhspan(base, end, color=_DUCT, lw=0, zorder=0.5)
    beside: Any = axis.twiny()
    cool, warm = _LINES["standard"][0], LIKELIHOOD
    handles: list[Any] = []
    origin = np.asarray(view.level_origin)
    for home, value, colour, dash in (
        (axis, t - 273.15, warm, "solid"),
        (beside, m, cool, "dashed"),
    ):
        home.plot(value[shown], z[shown], color=colour, ls=dash, lw=1.3)
        for key, (marker, inside, _) in _ORIGIN_MARKS.items():
            mine = shown & (origin == LEVEL_ORIGINS[key])
            face = colour if inside == INK else inside
            home.plot(value[mine], z[mine], marker, ms=3.6 * scale, mec=colour, mfc=face)
    for key, (marker, inside, name) in _ORIGIN_MARKS.items():
        if (shown & (origin == LEVEL_ORIGINS[key])).any():
            style: Any = {"marker": marker, "mec": INK, "mfc": inside, "ls": "none"}
            handles.append(Line2D([], [], ms=3.8, label=name, **style))
    if 0.0 <= view.observer_height <= top:
        level: Any = {"color": FAINT, "lw": 1.0, "ls": (0, (1, 1.5))}
        axis.axhline(view.observer_height, zorder=0.8, **level)
        handles.append(Line2D([], [], label="observer", **level))
    axis.set_ylim(0.0, top)
    axis.set_xlabel("temperature (°C)", fontsize=8.5 * scale, labelpad=2.0, color=warm)
    axis.set_ylabel("height (m)", fontsize=8.5 * scale, labelpad=1.5)
    for home, colour in ((axis, warm), (beside, cool)):
        home.xaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 5, 10], min_n_ticks=2))
        home.tick_params(axis="x", labelsize=8.0 * scale, colors=colour, pad=1.5)
        home.margins(x=0.08)
    columns = 1 if scale == 1.0 else 2
    beside.set_xlabel("modified refractivity M", fontsize=8.5 * scale, labelpad=2.5, color=cool)
    _name_panel(axis, "Why: the lowest air", handles, scale, columns, 31.0 * scale)
