"""One sounding as read, turned into a column that physics can use: heights, ground, quality.

Heights come from the file (geometric altitude, height above ground, geopotential or geopotential
height) or, where it gives none, from the hypsometric equation. Levels are put in the order of
rising height; what was done is marked with the bits explained in `forecast.ingest.quality`.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from forecast.errors import InputError
from forecast.ingest import quality as rules
from forecast.ingest.assemble import Column
from forecast.ingest.vertical import (
    geometric_altitude,
    geopotential_height,
    hypsometric_height,
)
from forecast.schema import QUALITY_FLAGS

__all__ = ["Sounding", "to_column"]

#: A height of this many metres below the ground is taken for rounding, m; common practice.
ROUNDING = 1.0

#: Distance between first level and station from which it is marked, m; common practice.
STATION_DISTANCE = 50.0

#: Ratio of given to hypsometric thickness outside which heights or pressures have a wrong unit.
THICKNESS_RATIO = (0.7, 1.4)


@dataclass
class Sounding:
    """Levels of one launch in file order, SI units, NaN where missing.

    ``altitude`` is geometric above mean sea level; ``above_ground`` says that it counts from the
    ground instead. ``quality`` holds bits set while reading, ``humidity_given`` where the file
    gives humidity, whether or not it could be converted.
    """

    time: np.datetime64
    station: str
    source_file: str
    pressure: np.ndarray
    temperature: np.ndarray
    specific_humidity: np.ndarray
    altitude: np.ndarray | None
    above_ground: bool = False
    latitude: float = float("nan")
    longitude: float = float("nan")
    surface_altitude: float = float("nan")
    u: np.ndarray | None = None
    v: np.ndarray | None = None
    quality: np.ndarray | None = None
    lead_time: np.timedelta64 | None = None
    source_kind: str = "ascent"
    member: int | None = None
    extras: dict[str, float] = field(default_factory=dict)
    humidity_name: str = "humidity"
    humidity_given: np.ndarray | None = None


def to_column(sounding: Sounding) -> Column:
    """Check a sounding and bring it into the shape of a column.

    Parameters
    ----------
    sounding : Sounding
        As read; not changed.

    Returns
    -------
    Column

    Raises
    ------
    InputError
        If fewer than two levels are usable, position or time are missing, or heights and
        pressures contradict each other.
    """
    p = np.asarray(sounding.pressure, dtype=float)
    fill = np.full(p.shape, np.nan)
    t, q = sounding.temperature.astype(float), sounding.specific_humidity.astype(float)
    z = fill.copy() if sounding.altitude is None else sounding.altitude.astype(float)
    u = fill if sounding.u is None else sounding.u
    v = fill if sounding.v is None else sounding.v
    flags = np.zeros(p.shape, np.int32) if sounding.quality is None else sounding.quality.copy()
    _check_enough(sounding)

    # Places that hold nothing at all are padding, not levels.
    held = np.isfinite(p) | np.isfinite(t) | np.isfinite(q) | np.isfinite(z) | np.isfinite(u)
    p, t, q, z, u, v, flags = (a[held] for a in (p, t, q, z, u, v, flags))
    p = np.where((p > 0.0) & (p < 1.2e5), p, np.nan)
    low, high = rules.TEMPERATURE_RANGE
    with np.errstate(invalid="ignore"):
        bad = (t < low) | (t > high)
    t, q = np.where(bad, np.nan, t), np.where(bad, np.nan, q)
    flags |= _bit("temperature_out_of_range", bad)

    order = _upward(z, p)
    p, t, q, z, u, v, flags = (a[order] for a in (p, t, q, z, u, v, flags))

    q, outside, wet = rules.limit_humidity(q, t, p)
    flags |= _bit("humidity_out_of_range", outside) | _bit("supersaturation", wet)
    flags |= _bit("value_missing", ~(np.isfinite(p) & np.isfinite(t) & np.isfinite(q)))

    thickness = _thickness(sounding, p, t, q)
    spiked = rules.height_spikes(z, thickness)
    z = np.where(spiked, np.nan, z)
    _check_thickness(sounding, z, thickness)
    above_ground, computed = sounding.above_ground, np.isfinite(thickness) & ~np.isfinite(z)
    if computed.any():
        z, above_ground = _fill_heights(sounding, z, thickness, p, t, q)
    computed &= ~spiked
    z = np.where(spiked, np.nan, z)
    flags |= _bit("spike", spiked) | _bit("height_from_hypsometry", computed)
    flags |= _bit("value_missing", ~np.isfinite(z))

    # Nothing after the highest level is part of the way up.
    if np.isfinite(z).any():
        top = int(np.nanargmax(z))
        if top + 1 < z.size and np.isfinite(z[top + 1 :]).any():
            flags[top] |= QUALITY_FLAGS["descending_branch"]
            p, t, q, z, u, v, flags, thickness = (
                a[: top + 1] for a in (p, t, q, z, u, v, flags, thickness)
            )
            flags = flags.copy()

    ground, below = _ground(z, sounding.surface_altitude, above_ground)
    height = z if above_ground else z - ground
    height = np.where((height < 0.0) & (height >= -ROUNDING), 0.0, height)
    flags |= _bit("first_level_not_at_station", below & (height < 0.0))
    height = np.where(height < 0.0, np.nan, height)

    rising = rules.rising_levels(height)
    stalled = np.isfinite(height) & ~rising
    same = stalled & (np.concatenate([[np.nan], p[:-1]]) == p)
    flags |= _bit("duplicate_level", same) | _bit("height_not_monotonic", stalled & ~same)
    height = np.where(rising, height, np.nan)
    altitude = height + (0.0 if np.isnan(ground) else ground)
    if np.isnan(ground):
        altitude = np.full(height.shape, np.nan)

    t, q, flags = _mark_values(p, t, q, height, flags)
    flags |= _bit(
        "hydrostatic_mismatch",
        rules.hydrostatic_mismatch(height, np.where(computed[: z.size], np.nan, thickness), p, t),
    )
    column = _column(sounding, ground, (height, altitude, p, t, q, u, v), flags)
    usable = column.usable
    _check_usable(sounding, column)
    first = int(usable.argmax())
    if height[first] > STATION_DISTANCE:
        column.quality[first] |= QUALITY_FLAGS["first_level_not_at_station"]
    column.quality |= _bit("gap_near_ground", rules.gaps_near_ground(height, usable))
    return column


def _column(
    sounding: Sounding, ground: float, levels: tuple[np.ndarray, ...], flags: np.ndarray
) -> Column:
    height, altitude, p, t, q, u, v = levels
    longitude = (sounding.longitude + 180.0) % 360.0 - 180.0
    column = Column(
        time=sounding.time,
        latitude=sounding.latitude,
        longitude=longitude,
        station=sounding.station,
        source_file=sounding.source_file,
        height=height,
        altitude=altitude,
        pressure=p,
        temperature=t,
        specific_humidity=q,
        u=u,
        v=v,
        quality=flags.astype(np.int32),
        surface_altitude=ground,
        source_kind=sounding.source_kind,
        member=sounding.member,
        extras=dict(sounding.extras),
    )
    if sounding.lead_time is not None:
        column.lead_time = sounding.lead_time
    return column


def _bit(name: str, mask: np.ndarray) -> np.ndarray:
    return np.where(mask, np.int32(QUALITY_FLAGS[name]), np.int32(0))


def _upward(altitude: np.ndarray, pressure: np.ndarray) -> slice:
    """The slice that puts levels in the order of rising height.

    Most steps decide, so that neither a lone wild height nor the way down after the top counts
    for the whole.
    """
    rank = altitude if np.isfinite(altitude).sum() >= 2 else -pressure
    steps = np.sign(np.diff(rank[np.isfinite(rank)]))
    return slice(None, None, -1) if steps.sum() < 0 else slice(None)


def _thickness(sounding: Sounding, p: np.ndarray, t: np.ndarray, q: np.ndarray) -> np.ndarray:
    """Geometric height of levels over the lowest by the hypsometric equation, m.

    NaN where p or T is missing; air of unknown humidity counts as dry.
    """
    ground = 0.0 if np.isnan(sounding.surface_altitude) else sounding.surface_altitude
    datum = geopotential_height(ground, sounding.latitude)
    levels = hypsometric_height(p, t, np.nan_to_num(q), datum)
    return geometric_altitude(levels, sounding.latitude) - geometric_altitude(
        datum, sounding.latitude
    )


def _check_thickness(sounding: Sounding, z: np.ndarray, thickness: np.ndarray) -> None:
    """Refuse heights and pressures of which one has a wrong unit."""
    both = np.isfinite(z) & np.isfinite(thickness)
    if both.sum() < 5:
        return
    given, computed = np.ptp(z[both]), np.ptp(thickness[both])
    if computed < 500.0 and given < 500.0:
        return
    ratio = given / max(computed, 1e-9)
    if not THICKNESS_RATIO[0] <= ratio <= THICKNESS_RATIO[1]:
        raise InputError(
            f"heights and pressures contradict each other: heights span {given:.4g} m, the "
            f"pressures {computed:.4g} m by the hypsometric equation",
            source=sounding.source_file,
            remedy="check the units of height and pressure, set them in names",
        )


def _fill_heights(
    sounding: Sounding,
    z: np.ndarray,
    thickness: np.ndarray,
    p: np.ndarray,
    t: np.ndarray,
    q: np.ndarray,
) -> tuple[np.ndarray, bool]:
    """Heights where the file gives none, and whether they count from the ground.

    Between given heights the hypsometric thickness is stretched to fit them; beyond them it is
    added. With no height at all it starts at the ground: from the surface pressure where that is
    known, else from the first level.
    """
    given = np.flatnonzero(np.isfinite(z) & np.isfinite(thickness))
    at = np.flatnonzero(~np.isfinite(z) & np.isfinite(thickness))
    result = z.copy()
    if given.size:
        order = given[np.argsort(thickness[given], kind="stable")]
        offset = z[order] - thickness[order]
        result[at] = thickness[at] + np.interp(thickness[at], thickness[order], offset)
        return result, sounding.above_ground
    first = at[0]
    above_ground = sounding.above_ground or np.isnan(sounding.surface_altitude)
    start = 0.0 if above_ground else sounding.surface_altitude
    surface = sounding.extras.get("surface_air_pressure", np.nan)
    if surface > p[first]:
        pair = np.array([surface, p[first]]), np.repeat(t[first], 2), np.repeat(q[first], 2)
        start += float(_thickness(sounding, *pair)[-1])
    result[at] = thickness[at] - thickness[first] + start
    return result, above_ground


def _ground(z: np.ndarray, ground: float, above_ground: bool) -> tuple[float, np.ndarray]:
    """Altitude of the ground, and the levels that lie below it."""
    none = np.zeros(z.shape, dtype=bool)
    if above_ground:
        return ground, z < 0.0
    if np.isfinite(ground):
        return ground, z < ground
    known = z[np.isfinite(z)]
    return (float(known[0]) if known.size else float("nan")), none


def _mark_values(
    p: np.ndarray, t: np.ndarray, q: np.ndarray, height: np.ndarray, flags: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Spikes dropped and marked, frozen sensors marked."""
    from forecast.physics.moisture import relative_humidity

    with np.errstate(all="ignore"):
        humidity = relative_humidity(q, t, p)
    hot = rules.value_spikes(t, height, rules.TEMPERATURE_SPIKE)
    moist = rules.value_spikes(humidity, height, rules.HUMIDITY_SPIKE) & ~hot
    flags = flags | _bit("spike", hot | moist)
    everywhere = np.ones(t.shape, dtype=bool)
    with np.errstate(invalid="ignore"):
        judged = (humidity > 0.03) & (humidity < 0.99) & (p > 3.0e4)
    frozen = rules.frozen_levels(t, height, rules.FROZEN_TEMPERATURE_DEPTH, everywhere)
    frozen |= rules.frozen_levels(
        np.round(humidity, 4), height, rules.FROZEN_HUMIDITY_DEPTH, judged
    )
    flags |= _bit("frozen_sensor", frozen)
    return np.where(hot, np.nan, t), np.where(hot | moist, np.nan, q), flags


def _check_enough(sounding: Sounding) -> None:
    """Refuse a sounding without time or position, or with what physics needs wholly missing."""
    source = sounding.source_file
    if np.isnat(sounding.time):
        raise InputError("time of the profile is missing", source=source)
    if not (abs(sounding.latitude) <= 90.0 and -360.0 <= sounding.longitude <= 360.0):
        raise InputError(
            f"position of the profile is missing or impossible (latitude {sounding.latitude:g}, "
            f"longitude {sounding.longitude:g})",
            source=source,
        )
    counts = {
        "pressure": np.isfinite(sounding.pressure),
        "temperature": np.isfinite(sounding.temperature),
        sounding.humidity_name: np.isfinite(sounding.specific_humidity)
        if sounding.humidity_given is None
        else sounding.humidity_given,
    }
    empty = [name for name, known in counts.items() if not known.any()]
    if empty:
        every = " and ".join(empty)
        raise InputError(
            f"holds no {every} value: all {sounding.pressure.size} are missing", source=source
        )
    lone = {name: int(known.argmax()) for name, known in counts.items() if known.sum() == 1}
    if lone:
        place = "first" if set(lone.values()) == {0} else "one"
        plural = "s are" if len(lone) > 1 else " is"
        raise InputError(
            f"only the {place} {' and '.join(lone)} value{plural} present of "
            f"{sounding.pressure.size} levels",
            source=source,
        )


def _check_usable(sounding: Sounding, column: Column) -> None:
    usable = int(column.usable.sum())
    if usable < 2:
        counts = rules.flag_counts(column.quality)
        found = ", ".join(f"{name} {count}" for name, count in counts.items()) or "none flagged"
        raise InputError(
            f"only {usable} of {column.height.size} levels can be used, at least 2 are needed "
            f"({found})",
            source=sounding.source_file,
        )
