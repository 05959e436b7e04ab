"""Through which height at the target each direction of view leads: the transfer curve."""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.physics.rays import Medium, trace_rays

__all__ = ["ARC_SECOND", "straight_elevation", "transfer_heights", "view_elevations"]

ARC_SECOND = np.pi / 648000.0  # rad

_MARGIN = 120.0 * ARC_SECOND  # looked at below and above what is of interest
_LOW_ZONE = 1200.0 * ARC_SECOND  # above the horizon, where images fold
_FINE_RAYS, _COARSE_RAYS = 1400, 200


def straight_elevation(observer_height: Any, height: Any, distance: Any, radius: Any) -> np.ndarray:
    """Elevation of a point in straight rays, or bent ones with an effective radius.

    Parameters
    ----------
    observer_height, height : array_like
        Heights above the surface, m.
    distance : array_like
        Distance along the surface, m, more than 0.
    radius : array_like
        Radius of the sphere, m.

    Returns
    -------
    ndarray
        Elevation above the observer's horizontal, rad: plane geometry of the triangle with the
        centre of the sphere.
    """
    angle = np.asarray(distance, dtype=float) / radius
    low = np.asarray(observer_height, dtype=float)
    high = np.asarray(height, dtype=float)
    # (a + H) cos φ − (a + h), without the cancellation of the two radii.
    rise = (high - low) - 2.0 * (radius + high) * np.sin(0.5 * angle) ** 2
    return np.arctan2(rise, (radius + high) * np.sin(angle))


def view_elevations(lowest: Any, highest: Any) -> np.ndarray:
    """Directions to look in: fine near the horizon, where images fold, coarser above.

    Parameters
    ----------
    lowest, highest : array_like
        Elevations of interest, rad, (column,); a margin of 2′ is added on both sides.

    Returns
    -------
    ndarray
        (column, ray), rising, rad: steps of 1″ or so within the lowest 20′.
    """
    low = np.atleast_1d(np.asarray(lowest, dtype=float)) - _MARGIN
    high = np.maximum(np.atleast_1d(np.asarray(highest, dtype=float)), low) + _MARGIN
    knee = np.minimum(low + _MARGIN + _LOW_ZONE, high)
    fine = low[:, None] + np.linspace(0.0, 1.0, _FINE_RAYS) * (knee - low)[:, None]
    coarse = np.linspace(0.0, 1.0, _COARSE_RAYS + 1)[1:] * (high - knee)[:, None]
    # A range that ends at the knee leaves no coarse part: keep the directions rising all the same.
    step = (fine[:, -1:] - fine[:, -2:-1]) * np.arange(1, _COARSE_RAYS + 1)
    return np.concatenate([fine, knee[:, None] + np.maximum(coarse, 1e-3 * step)], axis=1)


def transfer_heights(
    medium: Medium, observer_height: Any, elevation: np.ndarray, distance: Any
) -> np.ndarray:
    """Height at which rays from the observer pass given distances.

    Parameters
    ----------
    medium : Medium
        The air, (column,).
    observer_height : array_like
        Height of the observer above the surface, m, scalar or (column,).
    elevation : ndarray
        Directions, rad, (ray,) or (column, ray).
    distance : array_like
        Distance along the surface, m: scalar or (distance,).

    Returns
    -------
    ndarray
        m, (column, ray), or (column, ray, distance) for several distances; NaN where the ray met
        the surface before.
    """
    columns = medium.z.shape[0]
    angle = np.broadcast_to(elevation, (columns, np.shape(elevation)[-1]))
    far = np.atleast_1d(np.asarray(distance, dtype=float))
    height = np.broadcast_to(np.asarray(observer_height, dtype=float), columns)[:, None]
    rays = angle.shape[1]
    ends = trace_rays(
        medium, height, np.repeat(angle, far.size, axis=1), np.tile(far, rays), reflect=False
    )
    found = np.where(np.isnan(ends.blocked_at), ends.height, np.nan)
    return found if np.ndim(distance) == 0 else found.reshape(columns, rays, far.size)
