"""The air of one sightline as rays meet it: of its own site, or changing along the way."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

import numpy as np

from forecast.physics.path_air import build_path_air, path_heights
from forecast.physics.path_sightline import trace_path_sightline
from forecast.physics.rays import Medium
from forecast.physics.sightline import LARGEST_SQUEEZE, SightlineTable, trace_sightlines
from forecast.physics.transfer_curve import transfer_heights

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = ["LineAir", "PathAirs", "SiteAir", "over_water"]


class LineAir(Protocol):
    """What can be asked of a sightline's air, (column,).

    ``radius``: radius of the Earth along the path, m, (column,). `trace`: the sightline through
    each column; after it ``blocked_by``: distance of the ground that stops the ray just under the
    lowest visible one, m, (column,), NaN where that is the water. `heights`: heights (m) at
    distances (m) of rays launched at elevations (rad), as
    `forecast.physics.transfer_curve.transfer_heights` gives them.
    """

    radius: np.ndarray
    blocked_by: np.ndarray

    def trace(self, line: Sightline) -> SightlineTable:
        """State and visible heights, (column, 1)."""

    def heights(
        self, line: Sightline, elevation: np.ndarray, distance: float | np.ndarray
    ) -> np.ndarray:
        """Where rays pass the given distances."""


class SiteAir:
    """Air that is the same all along the way, over a smooth surface."""

    def __init__(self, medium: Medium) -> None:
        self.medium = medium
        self.radius = medium.radius
        self.blocked_by = np.full(medium.radius.shape, np.nan)

    def trace(self, line: Sightline) -> SightlineTable:
        """State and visible heights, (column, 1)."""
        return trace_sightlines(self.medium, *over_water(line), largest_squeeze=LARGEST_SQUEEZE)

    def heights(
        self, line: Sightline, elevation: np.ndarray, distance: float | np.ndarray
    ) -> np.ndarray:
        """Where rays pass the given distances."""
        return transfer_heights(self.medium, over_water(line)[0], elevation, distance)


def over_water(line: Sightline) -> tuple[float, float, float, float]:
    """Observer height, top of the target, distance and its base, m, heights above the water."""
    tide = line.sea_level_offset
    base = max(line.target_base_height - tide, 0.0)
    return line.observer_height - tide, line.target_height - tide, line.distance, base


class PathAirs:
    """Air that changes along the way, or a way over ground.

    Parameters
    ----------
    height, refractivity : ndarray
        m above the water and N of the stations' profiles, (column, station, level).
    station : ndarray
        Their distances from the observer, m, (station,).
    radius : ndarray
        Radius of the Earth along the path, m, (column,).
    line : Sightline
        Whose wave, distance and tide they are for.
    ground : ndarray or None
        (point, 2): distance and height above mean sea level, m.
    """

    def __init__(
        self,
        height: np.ndarray,
        refractivity: np.ndarray,
        station: np.ndarray,
        radius: np.ndarray,
        line: Sightline,
        ground: np.ndarray | None,
    ) -> None:
        self.radius = radius
        self.blocked_by = np.full(radius.shape, np.nan)
        over = None if ground is None else ground - [0.0, line.sea_level_offset]
        self.air = build_path_air(
            height, refractivity, station, radius, line.distance, line.wave, over
        )

    def trace(self, line: Sightline) -> SightlineTable:
        """State and visible heights, (column, 1)."""
        observer, top, _, base = over_water(line)
        found = trace_path_sightline(self.air, observer, top, base)
        self.blocked_by = found.blocked_by
        return SightlineTable(*found[: len(SightlineTable._fields)])

    def heights(
        self, line: Sightline, elevation: np.ndarray, distance: float | np.ndarray
    ) -> np.ndarray:
        """Where rays pass the given distances."""
        found = path_heights(self.air, over_water(line)[0], elevation, np.atleast_1d(distance))
        return found[..., 0] if np.ndim(distance) == 0 else found
