"""What lies around sites and sightlines besides the air: water temperatures and ground."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np

    from forecast.ingest.water_series import WaterSeries

__all__ = ["NOTHING_AROUND", "Surroundings"]


@dataclass(frozen=True)
class Surroundings:
    """What was read besides profiles.

    ``water``: series of water temperatures by site. ``ground``: by sightline, its terrain as
    (point, 2): distance from the observer and height above mean sea level, m. ``blind``: names of
    sightlines whose ground could not be read; they are not told of, rather than told wrongly.
    """

    water: Mapping[str, WaterSeries] = field(default_factory=dict)
    ground: Mapping[str, np.ndarray] = field(default_factory=dict)
    blind: frozenset[str] = frozenset()


#: No series, no terrain.
NOTHING_AROUND = Surroundings()
