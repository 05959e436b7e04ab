"""The configured sightlines: their geometry, and what columns of air do to them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from forecast.outlook.surface import STATE_NAMES
from forecast.physics.column_batch import analyse_columns
from forecast.physics.earth import MEAN_EARTH_RADIUS, euler_radius
from forecast.physics.rays import build_medium
from forecast.physics.refractive_index import optical_refractivity
from forecast.physics.sightline import standard_medium, trace_sightlines

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = ["sightline_geometry", "trace_paths"]


def sightline_geometry(
    lines: list[Sightline], latitude: np.ndarray, site: np.ndarray
) -> dict[str, Any]:
    """Geometry of the sightlines, and what straight rays and standard air would show."""
    geometry: dict[str, Any] = {
        name: ("sightline", np.array([getattr(line, name) for line in lines], dtype=float))
        for name in (
            "observer_height",
            "target_height",
            "target_base_height",
            "distance",
            "azimuth",
        )
    }
    for label in ("straight", "standard"):
        hidden = np.full(len(lines), np.nan)
        elevation = np.full(len(lines), np.nan)
        for i, line in enumerate(lines):
            here = latitude[site == line.site]
            radius = float(euler_radius(np.mean(here) if here.size else 45.0, line.azimuth))
            air = standard_medium(line.wave if label == "standard" else "straight", radius)
            table = trace_sightlines(
                air, line.observer_height, line.target_height, line.distance,
                line.target_base_height,
            )  # fmt: skip
            hidden[i] = table.hidden_height[0, 0]
            elevation[i] = table.apparent_elevation[0, 0]
        geometry[f"hidden_height_{label}"] = ("sightline", hidden)
        geometry[f"apparent_elevation_{label}"] = ("sightline", elevation)
    return geometry


def trace_paths(
    lines: list[Sightline], state: dict[str, np.ndarray], latitude: np.ndarray, site: np.ndarray
) -> dict[str, Any]:
    """Every sightline through the columns of its own site; columns may be rows or members."""
    shape = (site.size, len(lines))
    codes = np.full(shape, -1, dtype=np.int8)
    floats = {
        name: np.full(shape, np.nan)
        for name in (
            "hidden_height",
            "visible_extent",
            "apparent_elevation",
            "horizon_elevation",
        )
    }
    images = {
        name: np.zeros(shape, dtype=np.int16) for name in ("upright_images", "inverted_images")
    }
    refractivity: dict[tuple[str, str, float], np.ndarray] = {}
    for i, line in enumerate(lines):
        own = np.flatnonzero(site == line.site)
        if own.size == 0:
            continue
        air = {name: a[own] for name, a in state.items()}
        key = (line.site, line.wave, line.wavelength if line.wave == "optical" else 0.0)
        if key not in refractivity:
            refractivity[key] = _refractivity(air, line)
        medium = build_medium(
            air["height"], refractivity[key], euler_radius(latitude[own], line.azimuth), line.wave
        )
        table = trace_sightlines(
            medium, line.observer_height, line.target_height, line.distance,
            line.target_base_height,
        )  # fmt: skip
        codes[own, i] = table.state[:, 0]
        for name, values in (*floats.items(), *images.items()):
            values[own, i] = getattr(table, name)[:, 0]
    both = ("profile", "sightline")
    named = {"sightline_state": codes, **floats, **images}
    return {name: (both, values) for name, values in named.items()}


def _refractivity(air: dict[str, np.ndarray], line: Sightline) -> np.ndarray:
    p, t, q = (air[name] for name in STATE_NAMES[1:])
    if line.wave == "optical":
        return optical_refractivity(p, t, q, line.wavelength)
    return analyse_columns(p, t, q, air["height"], MEAN_EARTH_RADIUS).refractivity
