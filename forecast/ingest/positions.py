"""Positions on the sphere and along the axes of a grid: distances, turns, neighbours."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from forecast.physics.earth import MEAN_EARTH_RADIUS

__all__ = ["ROUNDING", "Bracket", "bracket", "great_circle", "unwrap", "wrap"]

#: Coordinates are this exact (degrees): those in float32 are rounded to about 2e-5.
ROUNDING = 1e-4


def great_circle(latitude: Any, longitude: Any, latitude_2: Any, longitude_2: Any) -> np.ndarray:
    """Distance (m) on the sphere by the haversine formula; degrees, broadcasting."""
    lat, lon, lat2, lon2 = (
        np.radians(np.asarray(x, dtype=float))
        for x in (latitude, longitude, latitude_2, longitude_2)
    )
    half = (
        np.sin(0.5 * (lat2 - lat)) ** 2
        + np.cos(lat) * np.cos(lat2) * np.sin(0.5 * (lon2 - lon)) ** 2
    )
    return 2.0 * MEAN_EARTH_RADIUS * np.arcsin(np.sqrt(np.minimum(half, 1.0)))


def wrap(longitude: Any) -> np.ndarray:
    """Longitude in −180…180, rounded so that both conventions give the same numbers."""
    return np.round((np.asarray(longitude, dtype=float) + 180.0) % 360.0 - 180.0, 9)


def unwrap(longitude: np.ndarray) -> np.ndarray:
    """Longitudes along an axis without the jump of 360 degrees."""
    if longitude.size < 2:
        return longitude
    steps = (np.diff(longitude) + 180.0) % 360.0 - 180.0
    jumps = np.round((steps - np.diff(longitude)) / 360.0)
    return longitude + 360.0 * np.concatenate([[0.0], np.cumsum(jumps)])


@dataclass(frozen=True)
class Bracket:
    """Two indices around a value, the share of the second, the excess and the spacing."""

    indices: np.ndarray
    share: float
    beyond: float
    step: float


def bracket(axis: np.ndarray, value: float, period: float | None = None) -> Bracket:
    """Neighbours of a value on an axis, in the order of rising coordinate whatever the axis's.

    So one place gets the same neighbours in the same order from files that differ only in the
    direction of their axes.
    """
    order = np.arange(axis.size)
    if period is not None:
        axis = unwrap(axis)
    if axis.size > 1 and axis[-1] < axis[0]:
        axis, order = axis[::-1], order[::-1]
    if period is not None:
        step = float(np.median(np.diff(axis)))
        if axis[-1] - axis[0] < period - ROUNDING <= axis[-1] - axis[0] + 1.5 * step:
            axis, order = np.append(axis, axis[0] + period), np.append(order, order[0])
        # The turn of the circle that brings the value nearest to the middle of the axis.
        middle = 0.5 * (axis[0] + axis[-1])
        value += period * round((middle - value) / period)
    upper = int(np.clip(np.searchsorted(axis, value, side="right"), 1, axis.size - 1))
    low, high = float(axis[upper - 1]), float(axis[upper])
    beyond = max(float(axis[0]) - value, value - float(axis[-1]), 0.0)
    share = float(np.clip((value - low) / (high - low), 0.0, 1.0))
    return Bracket(order[[upper - 1, upper]], share, beyond, high - low)
