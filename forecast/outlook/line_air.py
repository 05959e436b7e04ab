"""The air of one sightline as rays meet it: of its own site, or changing along the way."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

import numpy as np

from forecast.physics.rays import Medium
from forecast.physics.sightline import LARGEST_SQUEEZE, SightlineTable, trace_sightlines
from forecast.physics.transfer_curve import transfer_heights

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = ["LineAir", "SiteAir", "over_water"]


class LineAir(Protocol):
    """What can be asked of a sightline's air, (column,).

    ``radius``: radius of the Earth along the path, m, (column,). `trace`: the sightline through
    each column. `heights`: heights (m) at distances (m) of rays launched at elevations (rad), as
    `forecast.physics.transfer_curve.transfer_heights` gives them.
    """

    radius: np.ndarray

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
