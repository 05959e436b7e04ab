"""Could a target be seen: Sun and twilight, haze and contrast, fog on the way, for each row.

A sightline that is open can still show nothing: the air on the way may be thick, the Sun in the
eyes, or the night dark. None of this enters the probability; it is told beside it.

How far one sees is told from the visibility of the settings, else of the data, else from humidity
alone. Reported visibilities are taken as meteorological optical range at the surface, good to 20 %
(the accuracy that WMO-No. 8 asks for, from memory). From humidity alone the amount of dry haze is
assumed, with bounds a factor of three away (ours, no source; the order of clean sea air to
polluted land), and none below where fog is possible. Haze thins with height; the ray is followed
through it.

Fog and low cloud: levels near saturation at the heights that the ray crosses. A radiosonde's
humidity is good to some 4 % near saturation (WMO-No. 8, from memory), so that saturation is told
from 99 %, and from 95 % said to be possible (as in cloud detection from soundings: Zhang et al.
2010, J. Geophys. Res. 115, D00K30, from memory). The air within 2 m of the surface is left out:
over water the modelled layer nears saturation there in any weather. Rain and snow are known only as
far as a visibility counts them.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from forecast.outlook.along import NO_STATIONS, Stations
from forecast.outlook.line_air import LineAir, over_water
from forecast.outlook.sightlines import line_airs
from forecast.outlook.surface import STATE_NAMES
from forecast.outlook.surroundings import NOTHING_AROUND, Surroundings
from forecast.physics import contrast
from forecast.physics.moisture import relative_humidity
from forecast.physics.sun import (
    CIVIL_TWILIGHT,
    direction_angle,
    sun_position,
    twilight_class,
)
from forecast.schema import TWILIGHT_CLASSES, VISUAL_RANGE_SOURCES, WEATHER_ON_PATH

if TYPE_CHECKING:
    from forecast.settings import Sightline

__all__ = [
    "DRY_HAZE",
    "LAMP_THRESHOLDS",
    "NEAR_SATURATION",
    "SATURATION",
    "bounded",
    "seeing_conditions",
]

#: Extinction of dry haze at 550 nm where no visibility is given: least, usual, most, m⁻¹.
DRY_HAZE = (1.7e-5, 5e-5, 1.5e-4)

#: Relative humidity (1) from which fog or low cloud is possible, and from which it is likely.
NEAR_SATURATION, SATURATION = 0.95, 0.99

#: Least illuminance (lx) that the eye notices from a lamp. Day: ICAO Annex 3, attachment D, bright
#: day; civil twilight: same, intermediate; then WMO-No. 8: twilight, not yet quite dark, dark (all
#: from memory).
LAMP_THRESHOLDS = {
    "day": 1e-3,
    "civil_twilight": 1e-5,
    "nautical_twilight": 1e-6,
    "astronomical_twilight": 10.0**-6.7,
    "night": 10.0**-7.5,
}

_STEPS = 33  # points at which a ray is followed
_SKIN = 2.0  # m; see above
_UNSEEN = 10.0  # m of a ray's way under the lowest level that still count as known
_VISIBILITY_ERROR = np.array([0.8, 1.0, 1.2])
_LEAST_VISIBILITY = 10.0  # m; 0 is reported for less than some 50 m
_HAZE_COLOUR = 1.3  # exponent by wavelength, as of visibilities from 6 km

_BOTH = ("profile", "sightline")
_NUMBERS = (
    "visual_range_limit",
    "apparent_contrast",
    "lamp_illuminance",
    "path_relative_humidity",
)
_CODES = ("visual_range_source", "weather_on_path")
_RANGES = ("visual_range", "target_range", "lamp_range")


class _Air(NamedTuple):
    """Profiles of a site, (column, level): m, relative humidity (1), Pa, K."""

    height: np.ndarray
    humidity: np.ndarray
    pressure: np.ndarray
    temperature: np.ndarray


def seeing_conditions(
    lines: list[Sightline],
    state: dict[str, np.ndarray],
    time: np.ndarray,
    latitude: np.ndarray,
    longitude: np.ndarray,
    site: np.ndarray,
    apparent_elevation: np.ndarray,
    visibility: np.ndarray | None = None,
    stations: Mapping[int, Stations] = NO_STATIONS,
    around: Surroundings = NOTHING_AROUND,
) -> dict[str, Any]:
    """What Sun, haze and fog leave to be seen, for every row and sightline.

    Parameters
    ----------
    lines : list of Sightline
        Radio ones are left out (NaN, code −1).
    state : dict of ndarray
        Height (m), pressure (Pa), temperature (K), specific humidity (kg/kg), (row, level), the
        surface layer already joined. Supersaturated air counts as saturated.
    time : ndarray of datetime64
        UTC, (row,).
    latitude, longitude : ndarray
        Degrees, (row,); the Sun is that of the profile's place.
    site : ndarray of str
        (row,).
    apparent_elevation : ndarray
        Elevation at which the target is seen, rad, (row, sightline). Where it is hidden (NaN) the
        path is taken to follow the Earth from the observer to the target's top, as it would if the
        sightline opened.
    visibility : ndarray, optional
        Visibility of the data, m, (row,). Less than 0 or NaN: not known. 9,990 to 10,000 m too,
        since stations report so for "10 km or more".
    stations, around
        As for `forecast.outlook.sightlines.line_airs`.

    Returns
    -------
    dict
        Variables of `forecast.schema`, {name: (dims, array)}.

    Raises
    ------
    ValueError
        If a sightline's visibility is not above 0, its wavelength lies outside 300…1700 nm or its
        contrast is below −1.
    """
    shape = (site.size, len(lines))
    sun = sun_position(time, latitude, longitude)
    light = twilight_class(sun.altitude)
    azimuth = np.array([line.azimuth for line in lines], dtype=float)
    elevation = np.degrees(np.nan_to_num(apparent_elevation))  # of a hidden target: level
    out = {name: np.full(shape, np.nan) for name in (*_NUMBERS, *bounded(_RANGES))}
    codes = {name: np.full(shape, -1, dtype=np.int8) for name in _CODES}
    reported = _reported(visibility, site.size)
    airs: dict[str, _Air] = {}
    for i, line, own, paths in line_airs(lines, state, latitude, site, stations, around):
        if line.wave != "optical":
            continue
        if line.site not in airs:
            airs[line.site] = _air({name: a[own] for name, a in state.items()})
        air = airs[line.site]
        along, height = _path(paths, line, apparent_elevation[own, i])
        humidity, weather = _weather(air, height)
        out["path_relative_humidity"][own, i] = humidity
        codes["weather_on_path"][own, i] = weather
        clean, haze, source = _extinction(air, height, line, reported[own])
        codes["visual_range_source"][own, i] = source
        limit = contrast.optical_depth(clean, along) / line.distance
        out["visual_range_limit"][own, i] = contrast.visual_range(limit)
        depth = contrast.optical_depth(clean + haze, along)
        fog = (source == VISUAL_RANGE_SOURCES["humidity"]) & (humidity >= NEAR_SATURATION)
        mean = depth / line.distance
        found = {
            "visual_range": contrast.visual_range(mean),
            "target_range": contrast.contrast_range(line.contrast, mean),
        }
        daylight = sun.altitude[own] >= CIVIL_TWILIGHT
        faded = contrast.apparent_contrast(line.contrast, depth[1])
        out["apparent_contrast"][own, i] = np.where(daylight, faded, np.nan)
        if line.lamp_intensity is not None:
            lamp = line.lamp_intensity
            lux = contrast.lamp_illuminance(lamp, depth[1], line.distance)
            out["lamp_illuminance"][own, i] = lux
            found["lamp_range"] = contrast.lamp_range(lamp, mean, _lamp_threshold(light[own]))
        for name, ranges in found.items():
            ranges[0, fog] = 0.0  # humidity does not tell how thick fog is
            for bound, values in zip(bounded((name,)), ranges[[1, 0, 2]], strict=True):
                out[bound][own, i] = values
    return {
        "sun_altitude": ("profile", sun.altitude),
        "sun_azimuth": ("profile", sun.azimuth),
        "twilight_class": ("profile", light),
        "sun_separation": (
            _BOTH,
            direction_angle(azimuth, elevation, sun.azimuth[:, None], sun.altitude[:, None]),
        ),
        **{name: (_BOTH, values) for name, values in {**out, **codes}.items()},
    }


def bounded(names: tuple[str, ...]) -> list[str]:
    """Names of ranges and of their bounds."""
    return [name + end for name in names for end in ("", "_lower", "_upper")]


def _reported(visibility: np.ndarray | None, rows: int) -> np.ndarray:
    """Visibilities (m) that say something, NaN for the others."""
    if visibility is None:
        return np.full(rows, np.nan)
    v = np.asarray(visibility, dtype=float)
    says = np.isfinite(v) & (v >= 0.0) & ~((v >= 9990.0) & (v <= 10000.0))
    return np.where(says, np.maximum(v, _LEAST_VISIBILITY), np.nan)


def _air(state: dict[str, np.ndarray]) -> _Air:
    z, p, t, q = (state[name] for name in STATE_NAMES)
    return _Air(z, np.clip(relative_humidity(q, t, p), 0.0, 1.0), p, t)


def _path(paths: LineAir, line: Sightline, elevation: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Distances (step,) and heights (column, step) of the rays outside the skin, m."""
    observer, top, distance, _ = over_water(line)
    along = np.linspace(0.0, distance, _STEPS)
    traced = paths.heights(line, elevation[:, None], along)[:, 0]
    level = observer + (top - observer) * along / distance
    height = np.where(np.isfinite(traced), traced, level)
    return along, np.maximum(height, _SKIN)


def _weather(air: _Air, height: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Largest relative humidity at the heights of the rays, and code of `WEATHER_ON_PATH`."""
    ends = np.stack([height.min(axis=1), height.max(axis=1)], axis=1)
    known = np.isfinite(air.humidity) & np.isfinite(air.height)
    lowest = np.where(known, air.height, np.inf).min(axis=1)
    highest = np.where(known, air.height, -np.inf).max(axis=1)
    inside = known & (air.height >= ends[:, :1]) & (air.height <= ends[:, 1:])
    largest = np.where(inside, air.humidity, -np.inf).max(axis=1)
    at_ends = contrast.profile_at(air.height, air.humidity, ends).max(axis=1)
    largest = np.where(np.isfinite(at_ends), np.maximum(largest, at_ends), np.nan)
    covered = (lowest <= ends[:, 0] + _UNSEEN) & (highest >= ends[:, 1])
    weather = np.where(covered, WEATHER_ON_PATH["no_saturated_level"], WEATHER_ON_PATH["unknown"])
    weather = np.where(largest >= NEAR_SATURATION, WEATHER_ON_PATH["near_saturation"], weather)
    weather = np.where(largest >= SATURATION, WEATHER_ON_PATH["saturated_level"], weather)
    return largest, weather


def _extinction(
    air: _Air, height: np.ndarray, line: Sightline, reported: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Extinction (m⁻¹) along the rays by clean air and by haze, and code of its source.

    (column, step), (bound, column, step), (column,). The bounds are those of the visual range:
    lower (most haze), best, upper.
    """
    humidity, pressure, temperature = (
        contrast.profile_at(air.height, a, height)
        for a in (air.humidity, air.pressure, air.temperature)
    )
    clean = contrast.rayleigh_extinction(pressure, temperature, line.wavelength)
    source = np.where(
        np.isfinite(humidity[:, 0]), VISUAL_RANGE_SOURCES["humidity"], VISUAL_RANGE_SOURCES["none"]
    )
    told = "profile" if line.visibility is None else "settings"
    given = reported if line.visibility is None else np.full(reported.size, line.visibility)
    source[np.isfinite(given)] = VISUAL_RANGE_SOURCES[told]
    surface = np.zeros((height.shape[0], 1))
    p, t = (contrast.profile_at(air.height, a, surface) for a in (air.pressure, air.temperature))
    behind = contrast.extinction_from_visibility(
        _VISIBILITY_ERROR[:, None] * given,
        contrast.rayleigh_extinction(p, t)[:, 0],
        line.wavelength,
    )
    colour = (550e-9 / line.wavelength) ** _HAZE_COLOUR
    grown = np.stack(
        [
            contrast.haze_extinction(humidity, dry * colour, exponent)
            for dry, exponent in zip(DRY_HAZE[::-1], contrast.GROWTH_EXPONENT[::-1], strict=True)
        ]
    )
    haze = np.where(np.isfinite(given)[:, None], behind[:, :, None], grown)
    return clean, haze * np.exp(-height / contrast.HAZE_SCALE_HEIGHT), source


def _lamp_threshold(light: np.ndarray) -> np.ndarray:
    """Least illuminance (lx) that the eye notices, by code of twilight class; NaN if unknown."""
    values = np.array([LAMP_THRESHOLDS[name] for name in TWILIGHT_CLASSES])
    codes = np.array(list(TWILIGHT_CLASSES.values()))
    chosen = values[np.searchsorted(codes, np.maximum(light, 0))]
    return np.where(light >= 0, chosen, np.nan)
