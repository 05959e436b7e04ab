"""One sightline at one valid time, as its observer would see it: what pictures and words need."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = ["AIRS", "SightlineView"]

#: Airs through which the target is looked at: the sounding's, standard air, none.
AIRS = ("air", "standard", "straight")


@dataclass(frozen=True)
class SightlineView:
    """What an observer would see of one target at one valid time.

    Angles are in rad above the observer's horizontal, lengths in m, heights above the water or
    the ground.

    Parameters
    ----------
    line : Sightline
        Observer and target.
    time : datetime64
        Valid time, UTC.
    source : str
        What the air was taken from, in words: "ascent", "model, 6 h ahead".
    zone : str
        IANA name of the site's time zone.
    radius : float
        Radius of the Earth along the path.
    observer_height, base, top : float
        Heights above the water: of the observer, of the lowest part of the target that counts
        and of its top.
    outline : ndarray
        The target's silhouette, (point, 2): offset across the line of sight, rising, and height.
    elevation : ndarray
        Directions of view, rising, (ray,).
    heights : dict of ndarray
        For each of `AIRS`: the height at the target's distance to which each direction leads,
        (ray,); NaN where it meets water or ground before. This is the transfer curve.
    horizon : dict of float
        For each of `AIRS`: the elevation of the highest direction that meets the surface.
    visible : ndarray
        Visible heights at the target's distance as a union of intervals, (interval, 2): from, to;
        the last may be infinite.
    fan_elevation, fan_distance, fan_height : ndarray
        Rays for the picture: launch (fan,), distances (step,), heights (fan, step), NaN after
        they have met water or ground.
    terrain : ndarray or None
        (point, 2): distance, height.
    level_height, level_temperature, level_modified_refractivity, level_origin : ndarray
        The lowest air, (level,): K, M-units, codes of `forecast.schema.LEVEL_ORIGINS`. M is that
        of the line's wave.
    ducts : ndarray
        Layers of the lowest air that hold rays of the line's wave, (duct, 2): base, top.
    probability : tuple of float
        That the sightline is open: best guess, 5 % and 95 % bounds.
    state : str
        ``shut``, ``grazing`` or ``open`` in the best guess.
    words : tuple of str
        Sentences: what is seen and why, what is not known.
    """

    line: Sightline
    time: np.datetime64
    source: str
    zone: str
    radius: float
    observer_height: float
    base: float
    top: float
    outline: np.ndarray
    elevation: np.ndarray
    heights: dict[str, np.ndarray]
    horizon: dict[str, float]
    visible: np.ndarray
    fan_elevation: np.ndarray
    fan_distance: np.ndarray
    fan_height: np.ndarray
    terrain: np.ndarray | None
    level_height: np.ndarray
    level_temperature: np.ndarray
    level_modified_refractivity: np.ndarray
    level_origin: np.ndarray
    ducts: np.ndarray
    probability: tuple[float, float, float]
    state: str
    words: tuple[str, ...] = field(default=())
