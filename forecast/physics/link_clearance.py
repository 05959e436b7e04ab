"""How much room a radio path has over the ground at a given k, in metres and in Fresnel radii.

The ground is raised by the bulge ``x (d − x) / (2 k a)`` and the path drawn straight (Rec. ITU-R
P.530-18 section 2.2.2, P.834-9 section 2). What must be clear is the Recommendation's rule for
antennas without height diversity, section 2.2.2.1 (from memory):

=========== =================== ==========================================================
k           climate             of the first Fresnel zone's radius F1, over every obstacle
=========== =================== ==========================================================
median      any                 1.0
low         temperate           0.0 over a single isolated obstacle, else 0.3
low         tropical            0.6 on paths longer than some 30 km, else as temperate
=========== =================== ==========================================================

"Low" is the k exceeded for 99.9 % of the time: the Recommendation reads it off a figure for want
of data, here it comes from the air itself (`forecast.physics.gradient_statistics`). Below some
2 GHz the Recommendation lets less than these fractions do, to save height.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.earth import MEAN_EARTH_RADIUS
from forecast.physics.link_reference import LIGHT_SPEED

__all__ = [
    "CLIMATES",
    "OBSTACLES",
    "ClearanceVerdict",
    "PathClearance",
    "fresnel_radius",
    "judge_clearance",
    "obstruction_loss",
    "path_clearance",
    "required_fractions",
]

#: Climates that the rule knows, and kinds of obstacle.
CLIMATES = ("temperate", "tropical")
OBSTACLES = ("isolated", "extended")

_LONG_TROPICAL_PATH = 30e3  # m
_POINTS = 500  # the bulge is looked at so many times along the path beside the ground's own points


class PathClearance(NamedTuple):
    """Room along a path, one value per k, arrays shaped as k.

    ``fraction``: smallest clearance over F1; ``distance`` from the first antenna (m), ``clearance``
    (m, negative where the ground stands in the line) and ``radius`` (F1, m) at that worst point.
    ``margin``: smallest clearance less the part of F1 required (m); ``margin_distance`` (m) and
    ``margin_fraction`` (margin over F1) where that is.
    """

    fraction: np.ndarray
    distance: np.ndarray
    clearance: np.ndarray
    radius: np.ndarray
    margin: np.ndarray
    margin_distance: np.ndarray
    margin_fraction: np.ndarray


class ClearanceVerdict(NamedTuple):
    """Rule of P.530 applied: at median and low k, the fractions required, and the smaller margin.

    ``margin`` (m) and ``margin_fraction`` (of F1): of the k that leaves less room; ``low_governs``:
    whether that is the low k.
    """

    at_median: PathClearance
    at_low: PathClearance
    required_median: float
    required_low: float
    margin: np.ndarray
    margin_fraction: np.ndarray
    low_governs: np.ndarray


def fresnel_radius(
    first_distance: Any, second_distance: Any, frequency: Any, order: Any = 1
) -> Any:
    """Radius of a Fresnel zone, ``√(n λ d1 d2 / (d1 + d2))``.

    Parameters
    ----------
    first_distance, second_distance : array_like
        From the point to either antenna, m, 0 or more, not both 0.
    frequency : array_like
        Hz, above 0.
    order : array_like
        Which zone, 1 and up.

    Returns
    -------
    ndarray or float
        m (Rec. ITU-R P.530-18 eq. 3: 17.3 √(d1 d2 / (f d)), km and GHz, for the first).

    Raises
    ------
    ValueError
        If a distance is negative, both are 0, or frequency or order are not above 0.
    """
    d1, d2, f, n = (
        np.asarray(a, dtype=float) for a in (first_distance, second_distance, frequency, order)
    )
    if np.any(d1 < 0.0) or np.any(d2 < 0.0) or np.any(d1 + d2 == 0.0):
        raise ValueError("fresnel_radius: distances must be 0 or more, m, and not both 0")
    if np.any(f <= 0.0) or np.any(n <= 0.0):
        raise ValueError("fresnel_radius: frequency (Hz) and order must be above 0")
    return np.sqrt(n * LIGHT_SPEED / f * d1 * d2 / (d1 + d2))


def required_fractions(
    climate: str = "temperate", obstacle: str = "extended", distance: float = 0.0
) -> tuple[float, float]:
    """Parts of F1 that must be clear at median and at low k (table at the head of the module).

    Parameters
    ----------
    climate : {"temperate", "tropical"}
    obstacle : {"isolated", "extended"}
        Whether one point or a stretch of ground comes near the path; extended asks for more.
    distance : float
        Length of the path, m.

    Returns
    -------
    tuple of float

    Raises
    ------
    ValueError
        If climate or obstacle are unknown.
    """
    if climate not in CLIMATES or obstacle not in OBSTACLES:
        raise ValueError(
            f"required_fractions: climate {climate!r}, obstacle {obstacle!r}; choose from "
            f"{', '.join(CLIMATES)} and {', '.join(OBSTACLES)}"
        )
    if climate == "tropical" and distance > _LONG_TROPICAL_PATH:
        return 1.0, 0.6
    return 1.0, 0.0 if obstacle == "isolated" else 0.3


def obstruction_loss(fraction: Any) -> Any:
    """Mean loss over average ground, ``10 − 20 h/F1`` dB, never below 0.

    Parameters
    ----------
    fraction : array_like
        Clearance over F1 at the worst point, negative where the ground stands in the line.

    Returns
    -------
    ndarray or float
        dB: between the loss of a knife edge and of a smooth Earth, meant for above 15 dB.

    References
    ----------
    Rec. ITU-R P.530-18 section 2.2.1 eq. 2.
    """
    return np.maximum(10.0 - 20.0 * np.asarray(fraction, dtype=float), 0.0)


def path_clearance(
    ground: Any,
    first_height: float,
    second_height: float,
    frequency: float,
    k: Any,
    earth_radius: Any = MEAN_EARTH_RADIUS,
    required: float = 0.0,
) -> PathClearance:
    """Smallest clearance of a path over ground, for one or many k.

    Parameters
    ----------
    ground : array_like
        (point, 2): distance from the first antenna, from 0 to the second antenna, not falling, and
        height above mean sea level, m, straight between the points.
    first_height, second_height : float
        Of the antennas above the ground at the first and last point, m, 0 or more.
    frequency : float
        Hz, above 0.
    k : array_like
        Effective Earth radius factor, any shape, not 0; negative and infinite values are right as
        they are (the ground then sinks, or lies flat); NaN gives NaN.
    earth_radius : array_like
        m, above 0, shaped as k or a scalar.
    required : float
        Part of F1 to be kept clear, for the margin.

    Returns
    -------
    PathClearance

    Raises
    ------
    ValueError
        If shapes do not fit, the ground holds NaN, does not start at 0 or falls back, an antenna
        stands below ground, a k is 0, or a radius or frequency is not above 0.
    """
    name = "path_clearance"
    line = np.asarray(ground, dtype=float)
    if line.ndim != 2 or line.shape[1] != 2 or line.shape[0] < 2:
        raise ValueError(f"{name}: ground {line.shape}; it must be (point, 2), two points or more")
    x, z = line.T
    if not np.all(np.isfinite(line)):
        raise ValueError(f"{name}: the ground holds NaN; fill or cut the gap first")
    if x[0] != 0.0 or x[-1] <= 0.0 or np.any(np.diff(x) < 0.0):
        raise ValueError(f"{name}: distances run {x[0]:g} to {x[-1]:g} m; they must rise from 0")
    if not (0.0 <= first_height < np.inf and 0.0 <= second_height < np.inf):
        raise ValueError(
            f"{name}: antennas {first_height:g} and {second_height:g} m above ground; they must "
            "stand 0 m or more above it"
        )
    if not 0.0 < frequency < np.inf:
        raise ValueError(f"{name}: frequency {frequency:g} Hz; it must be above 0")
    factor = np.asarray(k, dtype=float)
    if np.any(factor == 0.0):
        raise ValueError(f"{name}: k of 0; give a factor such as 4/3")
    radius = np.broadcast_to(np.asarray(earth_radius, dtype=float), factor.shape)
    if np.any(radius <= 0.0):
        raise ValueError(f"{name}: radius {np.min(radius):g} m; it must be above 0")

    distance = x[-1]
    inside = (x > 0.0) & (x < distance)
    even = np.linspace(0.0, distance, _POINTS + 1)[1:-1]
    at = np.concatenate([x[inside], even])
    room = (
        z[0]
        + first_height
        + (z[-1] + second_height - z[0] - first_height) * at / distance
        - np.concatenate([z[inside], np.interp(even, x, z)])
    )
    zone = fresnel_radius(at, distance - at, frequency)
    out = np.empty((7, factor.size))
    _least(at, room, zone, distance, (1.0 / (factor * radius)).ravel(), float(required), out)
    return PathClearance(*out.reshape(7, *factor.shape))


def judge_clearance(
    ground: Any,
    first_height: float,
    second_height: float,
    frequency: float,
    median_k: Any,
    low_k: Any,
    climate: str = "temperate",
    obstacle: str = "extended",
    earth_radius: Any = MEAN_EARTH_RADIUS,
) -> ClearanceVerdict:
    """Clearance at median and low k against the rule of Rec. ITU-R P.530-18 section 2.2.2.1.

    Parameters
    ----------
    ground, first_height, second_height, frequency, earth_radius
        As in `path_clearance`.
    median_k, low_k : array_like
        k exceeded for 50 % and for 99.9 % of the time, same shapes.
    climate, obstacle
        As in `required_fractions`.

    Returns
    -------
    ClearanceVerdict

    Raises
    ------
    ValueError
        As in `path_clearance` and `required_fractions`.
    """
    line = np.asarray(ground, dtype=float)
    length = float(line[-1, 0]) if line.ndim == 2 and line.size else 0.0
    at_median_k, at_low_k = required_fractions(climate, obstacle, length)
    median, low = (
        path_clearance(line, first_height, second_height, frequency, k, earth_radius, required)
        for k, required in ((median_k, at_median_k), (low_k, at_low_k))
    )
    governs = low.margin < median.margin
    return ClearanceVerdict(
        median,
        low,
        at_median_k,
        at_low_k,
        np.where(governs, low.margin, median.margin),
        np.where(governs, low.margin_fraction, median.margin_fraction),
        governs,
    )


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _least(at, room, zone, distance, curvature, required, out):  # pragma: no cover - compiled
    """Fill ``out`` (7, case): the point of least fraction and the point of least margin."""
    for c in prange(curvature.size):
        worst, tightest = -1, -1
        fraction, margin = np.inf, np.inf
        for i in range(at.size):
            clear = room[i] - 0.5 * at[i] * (distance - at[i]) * curvature[c]
            if clear < fraction * zone[i]:
                fraction, worst = clear / zone[i], i
            if clear - required * zone[i] < margin:
                margin, tightest = clear - required * zone[i], i
        if worst < 0:
            out[:, c] = np.nan
            continue
        out[0, c] = fraction
        out[1, c] = at[worst]
        out[2, c] = fraction * zone[worst]
        out[3, c] = zone[worst]
        out[4, c] = margin
        out[5, c] = at[tightest]
        out[6, c] = margin / zone[tightest]
