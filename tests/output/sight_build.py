"""Sightlines as seen through invented airs: what the pictures' tests look at."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from forecast.outlook.view import AIRS, SightlineView
from forecast.physics.ducts import find_ducts
from forecast.physics.rays import Medium, build_medium
from forecast.physics.sightline import standard_medium, trace_sightlines
from forecast.physics.transfer_curve import straight_elevation, transfer_heights, view_elevations
from forecast.schema import SIGHTLINE_STATES
from forecast.settings import Sightline

A = 6371e3
Z = np.concatenate([[0.0], np.geomspace(0.005, 50.0, 160), np.geomspace(51.0, 15e3, 120)])
STANDARD = 288.15 - 0.0065 * Z
COLD = STANDARD - 5.0 * np.exp(-Z / 8.0)
WARM = STANDARD + 3.0 * np.exp(-Z / 1.5)
INVERSION = STANDARD + 8.0 / (1.0 + np.exp(-(Z - 40.0) / 3.0))

RIDGE = ((-9e3, 300.0), (-5e3, 1300.0), (-1.5e3, 2100.0), (0.0, 2650.0), (1.2e3, 2000.0),
         (4e3, 2250.0), (6e3, 900.0), (9.5e3, 300.0))  # fmt: skip
HULL = ((-30.0, 6.0), (-28.0, 14.0), (-18.0, 14.0), (-16.0, 34.0), (-6.0, 34.0), (-5.0, 11.0),
        (24.0, 11.0), (30.0, 15.0))  # fmt: skip


def refractivity(temperature):
    """N of dry air at the pressure of 6.5 K/km: what light takes from it is n − 1 ~ p/T."""
    pressure = (1.0 - 0.0065 * Z / 288.15) ** 5.2559
    return 277.84 * pressure * (288.15 / temperature)


def make_view(
    temperature=STANDARD,
    observer=4.0,
    base=0.0,
    top=36.0,
    distance=40e3,
    silhouette=(),
    terrain=None,
    name="Skerry light",
    probability=(0.8, 0.62, 0.93),
    words=("Air warms by 4.4 K in the lowest 15 m and carries light along the water.",),
    wave="optical",
):
    """A view through an air given by its temperatures at the heights `Z`."""
    n = refractivity(temperature)
    airs: dict[str, Medium] = {
        "air": build_medium(Z, n, A, "optical"),
        "standard": standard_medium("optical", A),
        "straight": standard_medium("straight", A),
    }
    tables = {a: trace_sightlines(airs[a], observer, top, distance, base) for a in AIRS}
    horizon = {a: float(tables[a].horizon_elevation[0, 0]) for a in AIRS}
    geometric = [float(straight_elevation(observer, h, distance, A)) for h in (base, top)]
    land = None if terrain is None else np.array(terrain, dtype=float)
    if land is not None:
        over = straight_elevation(observer, land[1:, 1], land[1:, 0], A)
        geometric.append(float(over.max()) + 2e-3)
    low = min(geometric[0], *horizon.values())
    high = max(geometric[-1] + distance / (2.0 * A), *horizon.values()) + 2e-3
    angle = view_elevations(low, high)[0]
    steps = np.linspace(0.0, distance, 161)[1:]
    heights = {a: _blocked(airs[a], observer, angle, steps, land)[:, -1] for a in AIRS}
    fan = np.linspace(max(low, -6e-3), high, 70)
    rays = _blocked(airs["air"], observer, fan, steps, land)
    # The eye is where all rays begin.
    rays = np.concatenate([np.full((fan.size, 1), observer), rays], axis=1)
    m = n + 1e6 * Z / A
    table = find_ducts(Z[None, :], m[None, :])
    bands = np.stack([table.base[0], table.top[0]], axis=1)
    line = Sightline(
        name=name, site="Cape", observer_height=observer, target_height=top, distance=distance,
        target_base_height=base, azimuth=215.0, wave=wave, silhouette=tuple(silhouette),
    )  # fmt: skip
    half = max(0.04 * (top - base), 0.5)
    block = [(-half, top), (half, top)]
    visible = _lit(angle, heights["air"], distance)
    low_part = Z <= 400.0
    state = int(tables["air"].state[0, 0])
    if land is not None:
        shown = np.any((visible[:, 0] < top) & (visible[:, 1] > base))
        state = SIGHTLINE_STATES["open" if shown else "shut"]
    return SightlineView(
        line=line,
        time=np.datetime64("2031-05-02T16:00"),
        source="ascent",
        zone="Europe/Oslo",
        radius=A,
        observer_height=observer,
        base=base,
        top=top,
        outline=np.array(silhouette or block, dtype=float),
        elevation=angle,
        heights=heights,
        horizon=horizon,
        visible=visible,
        fan_elevation=fan,
        fan_distance=np.append(0.0, steps),
        fan_height=rays,
        terrain=land,
        level_height=Z[low_part][::6],
        level_temperature=temperature[low_part][::6],
        level_modified_refractivity=m[low_part][::6],
        level_origin=np.where(Z < 10.0, 1, np.where(Z < 20.0, 2, 0))[low_part][::6],
        ducts=bands[np.isfinite(bands).all(axis=1)],
        probability=probability,
        state={code: name for name, code in SIGHTLINE_STATES.items()}[state],
        words=words,
    )


def unknown_view(**more):
    """A view of which nothing could be computed."""
    view = make_view()
    none = {a: np.full(view.elevation.shape, np.nan) for a in AIRS}
    empty = np.zeros(0)
    return replace(
        view,
        **{
            "elevation": view.elevation,
            "heights": none,
            "horizon": dict.fromkeys(AIRS, np.nan),
            "visible": np.zeros((0, 2)),
            "fan_height": np.full_like(view.fan_height, np.nan),
            "level_height": empty,
            "level_temperature": empty,
            "level_modified_refractivity": empty,
            "level_origin": empty,
            "ducts": np.zeros((0, 2)),
            "probability": (np.nan, np.nan, np.nan),
            "state": "unknown",
            "words": ("The lowest air is not known.",),
            **more,
        },
    )


def _blocked(medium, observer, angle, steps, land):
    """Heights of rays at the steps, (ray, step): NaN after they have met water or ground."""
    height = transfer_heights(medium, observer, angle, steps)[0]
    if land is not None:
        met = height < np.interp(steps, land[:, 0], land[:, 1])
        height[np.maximum.accumulate(met, axis=1)] = np.nan
    return height


def _lit(angle, height, distance):
    """Heights that any ray leads to: the union of the curve's pieces."""
    jump = np.abs(np.diff(height)) > 30.0 * distance * np.diff(angle)
    edges = np.flatnonzero(jump | (np.isnan(height[1:]) != np.isnan(height[:-1]))) + 1
    pieces = [p for p in np.split(height, edges) if p.size > 1 and np.isfinite(p).all()]
    spans = sorted((float(p.min()), float(p.max())) for p in pieces)
    merged: list[list[float]] = []
    for low, high in spans:
        if merged and low <= merged[-1][1] + 0.05:
            merged[-1][1] = max(merged[-1][1], high)
        else:
            merged.append([low, high])
    return np.array(merged).reshape(-1, 2)


CASES = {
    "lamp over cold water": {"temperature": COLD, "base": 36.0},
    "mountain": {
        "observer": 60.0, "top": 2650.0, "distance": 105e3, "silhouette": RIDGE,
        "name": "Hoarfell from the east mole", "temperature": COLD,
    },
    "mirage over warm water": {
        "temperature": WARM, "observer": 5.0, "top": 34.0, "distance": 12e3, "silhouette": HULL,
        "name": "Ferry",
    },
    "hidden": {"top": 30.0, "distance": 60e3, "probability": (0.0, 0.0, 0.04),
               "words": ("Standard air hides all below 163 m.",)},
    "terrain": {
        "observer": 30.0, "top": 900.0, "distance": 60e3,
        "terrain": ((0, 0), (18e3, 0), (21e3, 160), (24e3, 640), (26e3, 520), (30e3, 0), (60e3, 0)),
        "name": "Far ridge behind the island",
        "silhouette": ((-4e3, 200.0), (-1e3, 900.0), (2e3, 500.0), (5e3, 100.0)),
        "probability": (0.0, 0.0, 0.03), "words": ("Land at 24.0 km stands in the way.",),
    },
    "superior mirage": {
        "temperature": INVERSION, "observer": 20.0, "top": 150.0, "distance": 40e3,
        "silhouette": ((-800, 20), (-300, 90), (0, 150), (200, 70), (900, 40)), "name": "Holm",
    },
    "near peak": {"observer": 10.0, "top": 3000.0, "distance": 50e3, "name": "Peak"},
}  # fmt: skip


def case(name, **more):
    """One of `CASES`."""
    return make_view(**{**CASES[name], **more})
