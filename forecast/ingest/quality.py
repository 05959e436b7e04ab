"""Which levels of a sounding are doubtful, and which cannot be used: named rules on arrays.

Each rule marks levels with a bit of `forecast.schema.QUALITY_FLAGS`. Most only mark; a value is
dropped (set to NaN) where physics cannot use it. "cp" is common practice without a source.

==========================  =============================================  ============  ========
bit                         marks a level when                             consequence   source
==========================  =============================================  ============  ========
height_not_monotonic        its height is not above all levels before it   height NaN    cp
                            (balloon dips, stalls)
duplicate_level             pressure and height repeat the level before,   height NaN    cp
                            or (merged arrays) the pressure was given
                            twice
spike                       T is off by more than 5 K, or RH by more than  value NaN     cp
                            0.4, against both neighbours, in the same
                            sense, neighbours within 60 m; or its height
                            is off by more than 50 m against both
                            hydrostatic neighbours (500 m at the ends)
temperature_out_of_range    T < 150 K or T > 340 K                         T NaN         cp
humidity_out_of_range       RH < −2 % or RH > 150 %, or q < 0 or q > 0.06  q NaN         cp
                            (RH −2 to 0 % counts as dry)                   (q = 0)
supersaturation             RH > 105 % over water                          q cut to      cp
                                                                           RH 105 %
frozen_sensor               T the same over ≥ 20 levels and ≥ 500 m, or    none          cp
                            RH over ≥ 20 levels and ≥ 1000 m below
                            300 hPa (not at 0–3 % or ≥ 99 %)
hydrostatic_mismatch        the last 300 m of height differ from the       none          cp
                            hypsometric thickness by more than 10 % and
                            20 m, beside the rounding of p to 0.1 hPa
gap_near_ground             no usable level for more than 100 m below it,  none          cp
                            within 300 m of the ground
descending_branch           it is the highest; levels after it are         rest left     cp
                            dropped                                        out
first_level_not_at_station  the first level lies > 50 m above the          none          cp
                            station, or below it                           (height NaN)
value_missing               p, T, q or the height are not given            none          —
height_from_hypsometry      its height was computed from p, T, q           none          —
==========================  =============================================  ============  ========

RH over water is what radiosondes report at every temperature (WMO-No. 8, Part I, chapter 4).
Supersaturation is cut to the bound, not to saturation: a step from 105 to 100 % between two
levels would look like a trapping layer.
"""

from __future__ import annotations

import numpy as np

from forecast.schema import QUALITY_FLAGS

__all__ = [
    "TEMPERATURE_RANGE",
    "flag_counts",
    "frozen_levels",
    "gaps_near_ground",
    "height_spikes",
    "hydrostatic_mismatch",
    "limit_humidity",
    "rising_levels",
    "value_spikes",
]

#: Range of air temperature, K.
TEMPERATURE_RANGE = (150.0, 340.0)
#: Relative humidity above which it is cut, and range that is believed at all.
SUPERSATURATION = 1.05
HUMIDITY_RANGE = (-0.02, 1.5)
MAX_SPECIFIC_HUMIDITY = 0.06
#: Spikes: K, relative humidity, m; neighbours no further than m.
TEMPERATURE_SPIKE = 5.0
HUMIDITY_SPIKE = 0.4
HEIGHT_SPIKE = 50.0
END_SPIKE = 500.0
SPIKE_SPACING = 60.0
#: Frozen sensor: levels, and m for temperature and humidity.
FROZEN_LEVELS = 20
FROZEN_TEMPERATURE_DEPTH = 500.0
FROZEN_HUMIDITY_DEPTH = 1000.0
#: Hydrostatic check: depth compared (m), absolute and relative tolerance, rounding of p (Pa).
MISMATCH_DEPTH = 300.0
MISMATCH_ABSOLUTE = 20.0
MISMATCH_RELATIVE = 0.1
PRESSURE_ROUNDING = 10.0
#: Gap near the ground: m, within m of the ground.
GAP = 100.0
GAP_WITHIN = 300.0

#: Specific gas constant of dry air over gravity, m/K.
_SCALE = 287.05 / 9.80665


def flag_counts(quality: np.ndarray) -> dict[str, int]:
    """Number of levels that carry each flag, flags that none carries left out."""
    counts = {name: int(np.count_nonzero(quality & bit)) for name, bit in QUALITY_FLAGS.items()}
    return {name: count for name, count in counts.items() if count}


def limit_humidity(
    specific_humidity: np.ndarray, temperature: np.ndarray, pressure: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Humidity within what air can hold.

    Parameters
    ----------
    specific_humidity, temperature, pressure : ndarray
        kg/kg, K, Pa, of one shape; NaN where missing.

    Returns
    -------
    specific_humidity : ndarray
        NaN where out of range, cut at `SUPERSATURATION`.
    out_of_range, supersaturated : ndarray of bool
    """
    from forecast.physics.moisture import (
        relative_humidity,
        specific_humidity_from_relative_humidity,
    )

    with np.errstate(all="ignore"):
        humidity = relative_humidity(specific_humidity, temperature, pressure)
        outside = (humidity < HUMIDITY_RANGE[0]) | (humidity > HUMIDITY_RANGE[1])
        # Where saturation exceeds the total pressure (thin warm air) only q itself can be judged.
        outside |= (specific_humidity < -1e-3) | (specific_humidity > MAX_SPECIFIC_HUMIDITY)
        dry = ~outside & (specific_humidity < 0.0)
        wet = ~outside & (humidity > SUPERSATURATION)
        capped = specific_humidity_from_relative_humidity(SUPERSATURATION, temperature, pressure)
    result = np.where(outside, np.nan, specific_humidity)
    result = np.where(dry, 0.0, result)
    return np.where(wet, capped, result), outside | dry, wet


def value_spikes(values: np.ndarray, height: np.ndarray, threshold: float) -> np.ndarray:
    """Levels whose value stands out from both neighbours by more than `threshold`.

    Neighbours are the next levels with a value; they count only within `SPIKE_SPACING`.

    Parameters
    ----------
    values, height : ndarray (level,)
        NaN where missing.
    threshold : float
        In the unit of the values.

    Returns
    -------
    ndarray of bool (level,)
    """
    result = np.zeros(values.shape, dtype=bool)
    at = np.flatnonzero(np.isfinite(values) & np.isfinite(height))
    if at.size < 3:
        return result
    step, spacing = np.diff(values[at]), np.abs(np.diff(height[at]))
    up, down = step[:-1], -step[1:]
    result[at[1:-1]] = (
        (np.minimum(np.abs(up), np.abs(down)) > threshold)
        & (np.sign(up) == np.sign(down))
        & (np.maximum(spacing[:-1], spacing[1:]) <= SPIKE_SPACING)
    )
    return result


def height_spikes(height: np.ndarray, thickness: np.ndarray) -> np.ndarray:
    """Levels whose height stands out from both neighbours against the hypsometric height.

    Parameters
    ----------
    height, thickness : ndarray (level,)
        Given height, and hypsometric height over any datum, m.

    Returns
    -------
    ndarray of bool (level,)
    """
    result = np.zeros(height.shape, dtype=bool)
    difference = height - thickness
    at = np.flatnonzero(np.isfinite(difference))
    if at.size < 3:
        return result
    step = np.diff(difference[at])
    up, down = step[:-1], -step[1:]
    result[at[1:-1]] = (np.minimum(np.abs(up), np.abs(down)) > HEIGHT_SPIKE) & (
        np.sign(up) == np.sign(down)
    )
    # The first and the last level have one neighbour, which must agree with the one beyond it.
    size = np.abs(step)
    result[at[0]] = size[0] > END_SPIKE and size[1] < HEIGHT_SPIKE
    result[at[-1]] = size[-1] > END_SPIKE and size[-2] < HEIGHT_SPIKE
    return result


def rising_levels(height: np.ndarray) -> np.ndarray:
    """Levels that lie above every level before them; levels without height do not.

    Parameters
    ----------
    height : ndarray (level,)

    Returns
    -------
    ndarray of bool (level,)
    """
    known = np.where(np.isfinite(height), height, -np.inf)
    before = np.maximum.accumulate(np.concatenate([[-np.inf], known[:-1]]))
    return known > before


def frozen_levels(
    values: np.ndarray, height: np.ndarray, depth: float, judged: np.ndarray
) -> np.ndarray:
    """Levels in a long run of one and the same value.

    Parameters
    ----------
    values, height : ndarray (level,)
        NaN where missing.
    depth : float
        Least extent of a run, m.
    judged : ndarray of bool (level,)
        Levels that may belong to a run.

    Returns
    -------
    ndarray of bool (level,)
    """
    result = np.zeros(values.shape, dtype=bool)
    at = np.flatnonzero(np.isfinite(values) & np.isfinite(height))
    if at.size < FROZEN_LEVELS:
        return result
    starts = np.flatnonzero(np.concatenate([[True], np.diff(values[at]) != 0.0]))
    ends = np.concatenate([starts[1:], [at.size]])
    frozen = (ends - starts >= FROZEN_LEVELS) & (height[at[ends - 1]] - height[at[starts]] >= depth)
    result[at] = np.repeat(frozen, ends - starts)
    return result & judged


def hydrostatic_mismatch(
    height: np.ndarray, thickness: np.ndarray, pressure: np.ndarray, temperature: np.ndarray
) -> np.ndarray:
    """Levels where given heights and hypsometric thickness disagree over the last 300 m.

    Parameters
    ----------
    height, thickness, pressure, temperature : ndarray (level,)
        Rising height, hypsometric height over any datum (m), Pa, K.

    Returns
    -------
    ndarray of bool (level,)
    """
    result = np.zeros(height.shape, dtype=bool)
    at = np.flatnonzero(np.isfinite(height) & np.isfinite(thickness))
    if at.size < 2:
        return result
    z, h = height[at], thickness[at]
    below = np.searchsorted(z, z - MISMATCH_DEPTH, side="right") - 1
    below = np.where(below < 0, 0, below)
    below = np.minimum(below, np.arange(at.size) - 1)
    below[0] = 0
    depth = z - z[below]
    rounding = 2.0 * _SCALE * temperature[at] * PRESSURE_ROUNDING / pressure[at]
    allowed = np.maximum(MISMATCH_ABSOLUTE, MISMATCH_RELATIVE * depth) + rounding
    result[at] = np.abs(depth - (h - h[below])) > allowed
    return result


def gaps_near_ground(height: np.ndarray, usable: np.ndarray) -> np.ndarray:
    """Usable levels with no usable level for more than `GAP` below, near the ground.

    Parameters
    ----------
    height : ndarray (level,)
        Above ground, m, rising where usable.
    usable : ndarray of bool (level,)

    Returns
    -------
    ndarray of bool (level,)
    """
    result = np.zeros(height.shape, dtype=bool)
    at = np.flatnonzero(usable)
    if at.size:
        below = np.concatenate([[0.0], height[at[:-1]]])
        result[at] = (height[at] - below > GAP) & (below < GAP_WITHIN)
    return result
