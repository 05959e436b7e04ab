"""What a far target looks like through the air: its images, how stretched, how lifted.

Read off the transfer curve (`forecast.physics.transfer_curve`), sampled finely enough that what
is finer than the eye can tell is all that gets lost.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.sightline import LARGEST_SQUEEZE, SightlineTable
from forecast.physics.transfer_curve import (
    ARC_SECOND,
    straight_elevation,
    view_elevations,
)
from forecast.schema import APPEARANCES

__all__ = ["Appearance", "appearance", "class_words"]

_SMALLEST_IMAGE = 5.0 * ARC_SECOND  # thinner folds are not told; ours, the eye resolves some 60″
_SMALLEST_FOLD, _FOLD_SHARE = 1.0, 0.02  # m, and share of the target: folds under both are not told
_CLEAR = 10.0 * ARC_SECOND  # above the horizon; ours
_SMALLEST_LIFT = 30.0 * ARC_SECOND  # half of what the eye resolves; ours
_SMALLEST_STRETCH = 0.1  # share by which a target must be stretched or squeezed; ours
#: Ray curvature by Earth's curvature in standard air, to which "raised" refers: 6.5 K/km.
_STANDARD_COEFFICIENT = 0.17


class Appearance(NamedTuple):
    """Result of `appearance`: arrays (column,).

    ``arrival_elevation``: elevation of the target's top, of its highest visible part where the
    top is hidden, rad. ``lift``: the same, less that of the same point in standard air (as if
    nothing were in the way), rad. ``magnification``: apparent height of the largest image, upright
    if there is one, by the height of the same part in straight rays; NaN for a point.
    ``apparent_height``: angle that all images of the target fill, rad; NaN for a point.
    ``clear_height``: lowest height at the target's distance that shows at least 10″ above the
    horizon, m: unlike the lowest of all it does not hang on pencils of rays along the horizon, and
    it is told of hidden targets too. ``classes``: bits of `forecast.schema.APPEARANCES`.
    """

    arrival_elevation: np.ndarray
    lift: np.ndarray
    magnification: np.ndarray
    apparent_height: np.ndarray
    clear_height: np.ndarray
    classes: np.ndarray


def appearance(
    transfer: Callable[[np.ndarray], np.ndarray],
    radius: Any,
    observer_height: float,
    base: float,
    top: float,
    distance: float,
    table: SightlineTable,
    hidden_in_standard: bool = False,
) -> Appearance:
    """How a target looks through a batch of columns.

    Parameters
    ----------
    transfer : callable
        The transfer curve: from elevations, rad, (column, ray), to heights at the target's
        distance, m, NaN where the surface is met before.
    radius : array_like
        Radius of the Earth along the path, m, (column,).
    observer_height, base, top, distance : float
        Observer, lowest and highest part of the target above the surface, distance, m.
    table : SightlineTable
        Of the same sightline alone, (column, 1), from `forecast.physics.sightline`.
    hidden_in_standard : bool
        Whether standard air would hide all of the target: what shows then looms.

    Returns
    -------
    Appearance
        NaN and no class where nothing is seen, but for the clear height.

    Notes
    -----
    Looming and sinking: raised or lowered against standard air (curvature of rays 0.17 of the
    Earth's) by 30″ or more; towering and stooping: stretched or squeezed by a tenth or more
    against straight rays; superior mirage: an inverted image above an upright one; inferior
    mirage: the lowest image is inverted. The words are the usual ones of atmospheric optics
    (Minnaert 1954, The Nature of Light and Colour in the Open Air, sect. 32–39, from memory); the
    sizes are ours.
    """
    seen = table.apparent_elevation[:, 0]
    horizon = table.horizon_elevation[:, 0]
    visible = np.isfinite(seen) & np.isfinite(horizon)
    radius = np.broadcast_to(np.nan_to_num(np.asarray(radius, dtype=float), nan=1.0), seen.shape)
    low = np.minimum(horizon, straight_elevation(observer_height, base, distance, radius))
    known = np.isfinite(horizon)
    # A hidden target has nothing to look for above the horizon but what is clear of it.
    high = np.where(visible, seen, np.where(known, horizon, 0.0))
    angle = view_elevations(np.where(known, low, 0.0), high)
    height = transfer(angle)
    clear = np.where(angle >= horizon[:, None] + _CLEAR, height, np.inf)
    clear_height = np.nanmin(clear, axis=1, initial=np.inf)
    clear_height[~(known & np.isfinite(clear_height))] = np.nan
    # A point has images too: heights near it stand for it.
    slack = max(0.0, 0.5 * (2.0 * _SMALLEST_FOLD - (top - base)))
    columns = seen.size
    images = np.full((columns, 2, 6), np.nan)
    fold = max(_SMALLEST_FOLD, _FOLD_SHARE * (top - base))
    _find_images(
        angle, height, base - slack, top + slack, fold, LARGEST_SQUEEZE * distance, images
    )  # fmt: skip
    upright, inverted = images[:, 0], images[:, 1]

    chosen = np.where(upright[:, :1] >= 0.0, upright, inverted)
    largest = chosen[:, 0]
    span = straight_elevation(observer_height, chosen[:, 2], distance, radius) - straight_elevation(
        observer_height, chosen[:, 1], distance, radius
    )
    magnification = np.full(columns, np.nan)
    np.divide(largest, span, out=magnification, where=visible & (top > base) & (largest > 0.0))

    highest = np.nanmax(
        np.where(table.visible_bottom <= top, np.minimum(table.visible_top, top), -np.inf)[:, 0],
        axis=1,
        initial=base,
    )
    bent = radius / (1.0 - _STANDARD_COEFFICIENT)
    lift = seen - straight_elevation(observer_height, highest, distance, bent)
    classes = np.zeros(columns, dtype=np.int16)
    for name, found in {
        "looming": (lift > _SMALLEST_LIFT) | hidden_in_standard,
        "sinking": (lift < -_SMALLEST_LIFT) & (not hidden_in_standard),
        "towering": magnification > 1.0 + _SMALLEST_STRETCH,
        "stooping": magnification < 1.0 - _SMALLEST_STRETCH,
        "superior_mirage": inverted[:, 4] > upright[:, 3],
        "inferior_mirage": inverted[:, 3] < upright[:, 3],
    }.items():
        classes[found & visible] |= APPEARANCES[name]
    return Appearance(
        np.where(visible, seen, np.nan),
        np.where(visible, lift, np.nan),
        magnification,
        np.where(visible & (top > base), upright[:, 5] + inverted[:, 5], np.nan),
        clear_height,
        classes,
    )


def class_words(code: int) -> list[str]:
    """Words for the bits of `forecast.schema.APPEARANCES`.

    Parameters
    ----------
    code : int
        Sum of bits.

    Returns
    -------
    list of str
        Such as ``["looming", "superior mirage"]``.
    """
    return [name.replace("_", " ") for name, bit in APPEARANCES.items() if code & bit]


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _find_images(angle, height, base, top, smallest_fold, steepest, images):  # pragma: no cover
    """Cut each column's transfer curve into images of the target and sum them up.

    A turn of the curve counts once the height has come back by `smallest_fold`; less is the work
    of the profile's own levels, between which the air is taken as linear. Steps steeper than
    `steepest` (m per rad) are jumps. `images` (column, way, value): for upright and inverted
    images the largest angle, the heights at its two ends, the lowest and highest elevation at
    which one begins, and the sum of their angles.
    """
    columns, rays = angle.shape
    for c in prange(columns):
        for way in range(2):
            images[c, way, 0] = -1.0
            images[c, way, 3] = np.inf
            images[c, way, 4] = -np.inf
            images[c, way, 5] = 0.0
        pivot = -1
        extreme = -1
        rising = 0
        for i in range(rays + 1):
            broken = i == rays or not np.isfinite(height[c, i])
            if not broken and pivot >= 0:
                jump = abs(height[c, i] - height[c, i - 1])
                if jump > steepest * (angle[c, i] - angle[c, i - 1]):
                    broken = True
            if broken:
                if pivot >= 0 and extreme > pivot:
                    _add_image(angle, height, c, pivot, extreme, base, top, smallest_fold, images)
                pivot = i if i < rays and np.isfinite(height[c, i]) else -1
                extreme = pivot
                rising = 0
                continue
            if pivot < 0:
                pivot = i
                extreme = i
                continue
            here = height[c, i]
            if rising == 0:
                extreme = i
                if abs(here - height[c, pivot]) > smallest_fold:
                    rising = 1 if here > height[c, pivot] else -1
            elif rising * (here - height[c, extreme]) >= 0.0:
                extreme = i
            elif rising * (height[c, extreme] - here) > smallest_fold:
                _add_image(angle, height, c, pivot, extreme, base, top, smallest_fold, images)
                pivot = extreme
                extreme = i
                rising = -rising


@njit(cache=True, nogil=True, error_model="numpy")
def _add_image(angle, height, c, first, last, base, top, fold, images):  # pragma: no cover
    """Count the part of a stretch of rays that shows the target, if it is large enough."""
    start = -1
    end = -1
    for i in range(first, last):
        middle = 0.5 * (height[c, i] + height[c, i + 1])
        if base <= middle <= top:
            if start < 0:
                start = i
            end = i + 1
    if start < 0:
        return
    size = angle[c, end] - angle[c, start]
    low = min(height[c, start], height[c, end])
    high = max(height[c, start], height[c, end])
    if size < _SMALLEST_IMAGE or high - low < min(fold, 0.5 * (top - base)):
        return
    way = 0 if height[c, last] > height[c, first] else 1
    if size > images[c, way, 0]:
        images[c, way, 0] = size
        images[c, way, 1] = low
        images[c, way, 2] = high
    images[c, way, 3] = min(images[c, way, 3], angle[c, start])
    images[c, way, 4] = max(images[c, way, 4], angle[c, start])
    images[c, way, 5] += size
