"""Every variable bendcast makes: name, CF standard name, units, long name, dimensions.

One table used by every stage, so that a quantity is named and described once. Names follow the
CF standard name table where it has one (https://cfconventions.org, version 90 and later); the
others are the trade's own words.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import xarray as xr

__all__ = [
    "APPEARANCES",
    "CAUTION",
    "CEILINGS_M",
    "DUCT_KINDS",
    "LAYER_CLASSES",
    "LEVEL_ORIGINS",
    "QUALITY_FLAGS",
    "SIGHTLINE_STATES",
    "SURFACE_AIR_SOURCES",
    "SURFACE_REASONS",
    "SURFACE_SOURCES",
    "SURFACE_STATES",
    "SURFACE_WIND_SOURCES",
    "TWILIGHT_CLASSES",
    "VARIABLES",
    "VISUAL_RANGE_SOURCES",
    "WEATHER_ON_PATH",
    "Variable",
    "attributes",
    "describe",
]

#: The caution that every product carries.
CAUTION = (
    "Not for navigation or safety of life. Never point optics near the Sun. Lasers, masts and "
    "transmitters fall under local codes and licensed practice."
)

#: Ceilings (m above ground) under which the outlook asks for a duct.
CEILINGS_M = (300.0, 1000.0, 3000.0)

#: Layer class by refractivity gradient; the value is the code stored in `layer_class`.
LAYER_CLASSES = {"sub_refractive": 0, "normal": 1, "super_refractive": 2, "trapping": 3}

#: Duct kinds, ITU-R P.453 meaning; the value is the code stored in `duct_kind`.
DUCT_KINDS = {"surface_duct": 1, "elevated_surface_duct": 2, "elevated_duct": 3}

#: Sightline states; the value is the code stored in `sightline_state`.
SIGHTLINE_STATES = {"shut": 0, "grazing": 1, "open": 2}

#: What a target looks like: bits of `appearance`; a target may have several.
APPEARANCES = {
    "looming": 1 << 0,
    "sinking": 1 << 1,
    "towering": 1 << 2,
    "stooping": 1 << 3,
    "superior_mirage": 1 << 4,
    "inferior_mirage": 1 << 5,
}

#: Daylight by the Sun's altitude; the value is the code stored in `twilight_class`.
TWILIGHT_CLASSES = {
    "day": 0,
    "civil_twilight": 1,
    "nautical_twilight": 2,
    "astronomical_twilight": 3,
    "night": 4,
}

#: What the visual range is told from; code of `visual_range_source`.
VISUAL_RANGE_SOURCES = {"none": 0, "settings": 1, "profile": 2, "humidity": 3}

#: What the profile shows of fog and low cloud at the heights of the ray; code of
#: `weather_on_path`.
WEATHER_ON_PATH = {
    "no_saturated_level": 0,
    "near_saturation": 1,
    "saturated_level": 2,
    "unknown": 3,
}

#: What is known of the air between the surface and the lowest trusted level; code of
#: `surface_layer_state`.
SURFACE_STATES = {"none": 0, "modelled": 1, "unknown": 2}

#: Why the air next to the surface is not known; code of `surface_layer_reason`.
SURFACE_REASONS = {
    "none": 0,
    "no_surface_temperature": 1,
    "no_wind": 2,
    "no_level_near_surface": 3,
    "too_stable": 4,
    "not_converged": 5,
}

#: Where the temperature of water or ground is from; code of `surface_source`.
SURFACE_SOURCES = {"none": 0, "settings": 1, "series": 2, "profile": 3}

#: Where the wind of the surface layer is from; code of `surface_wind_source`.
SURFACE_WIND_SOURCES = {"none": 0, "settings": 1, "series": 2, "ten_metres": 3, "level": 4}

#: Which air the surface layer is solved from; code of `surface_air_source`.
SURFACE_AIR_SOURCES = {"none": 0, "two_metres": 1, "level": 2}

#: Where a level of the joined profile comes from; code of `level_origin`.
LEVEL_ORIGINS = {"measured": 0, "modelled_surface_layer": 1, "interpolated": 2}

#: Quality bits of the Profiles dataset; a level may carry several.
QUALITY_FLAGS = {
    "height_not_monotonic": 1 << 0,
    "duplicate_level": 1 << 1,
    "spike": 1 << 2,
    "temperature_out_of_range": 1 << 3,
    "humidity_out_of_range": 1 << 4,
    "frozen_sensor": 1 << 5,
    "supersaturation": 1 << 6,
    "hydrostatic_mismatch": 1 << 7,
    "gap_near_ground": 1 << 8,
    "descending_branch": 1 << 9,
    "first_level_not_at_station": 1 << 10,
    "value_missing": 1 << 11,
    "height_from_hypsometry": 1 << 12,
    "interpolated": 1 << 13,
}

PROFILE = ("profile",)
LEVEL = ("profile", "level")
DUCT = ("profile", "duct")
SIGHT = ("profile", "sightline")
CEILING = ("profile", "ceiling")
BAND = ("profile", "height_bin")
JOINED = ("profile", "joined_level")
STAND = ("profile", "sightline", "stand")
PLACE = ("profile", "sightline", "place", "stand")


@dataclass(frozen=True)
class Variable:
    """One row of the table."""

    name: str
    long_name: str
    units: str | None = "1"
    dims: tuple[str, ...] = ()
    standard_name: str | None = None
    extra: dict[str, Any] = field(default_factory=dict)


def _codes(table: dict[str, int]) -> dict[str, Any]:
    return {"flag_values": tuple(table.values()), "flag_meanings": " ".join(table)}


_ROWS = [
    # --- coordinates of a profile -------------------------------------------------------------
    Variable("time", "valid time of the profile (launch time of an ascent)", None, PROFILE, "time"),
    Variable(
        "latitude", "latitude of the profile's lowest level", "degrees_north", PROFILE, "latitude"
    ),
    Variable(
        "longitude", "longitude of the profile's lowest level", "degrees_east", PROFILE, "longitude"
    ),
    Variable("station", "station or grid point of the profile", None, PROFILE, "platform_name"),
    Variable("lead_time", "time since the model run started", None, PROFILE, "forecast_period"),
    Variable("source_kind", "ascent or model", None, PROFILE),
    Variable("source_file", "file the profile was read from", None, PROFILE),
    Variable("member", "ensemble member", "1", PROFILE, "realization"),
    Variable("site", "site of the settings the profile serves", None, PROFILE),
    Variable("surface_altitude", "altitude of the ground", "m", PROFILE, "surface_altitude"),
    # --- Profiles -----------------------------------------------------------------------------
    Variable("height", "height above ground or sea surface", "m", LEVEL, "height"),
    Variable("altitude", "altitude above mean sea level", "m", LEVEL, "altitude"),
    Variable("air_pressure", "air pressure", "Pa", LEVEL, "air_pressure"),
    Variable("air_temperature", "air temperature", "K", LEVEL, "air_temperature"),
    Variable("specific_humidity", "specific humidity", "kg kg-1", LEVEL, "specific_humidity"),
    Variable("eastward_wind", "eastward wind", "m s-1", LEVEL, "eastward_wind"),
    Variable("northward_wind", "northward wind", "m s-1", LEVEL, "northward_wind"),
    Variable(
        "quality",
        "quality control flags",
        None,
        LEVEL,
        "quality_flag",
        {"flag_masks": tuple(QUALITY_FLAGS.values()), "flag_meanings": " ".join(QUALITY_FLAGS)},
    ),
    Variable(
        "sea_surface_temperature",
        "sea surface temperature",
        "K",
        PROFILE,
        "sea_surface_temperature",
    ),
    Variable("surface_temperature", "skin temperature", "K", PROFILE, "surface_temperature"),
    Variable(
        "surface_air_pressure", "air pressure at the ground", "Pa", PROFILE, "surface_air_pressure"
    ),
    Variable("air_temperature_2m", "air temperature at 2 m", "K", PROFILE, "air_temperature"),
    Variable(
        "specific_humidity_2m", "specific humidity at 2 m", "kg kg-1", PROFILE, "specific_humidity"
    ),
    Variable("eastward_wind_10m", "eastward wind at 10 m", "m s-1", PROFILE, "eastward_wind"),
    Variable("northward_wind_10m", "northward wind at 10 m", "m s-1", PROFILE, "northward_wind"),
    Variable(
        "boundary_layer_height",
        "boundary layer height",
        "m",
        PROFILE,
        "atmosphere_boundary_layer_thickness",
    ),
    Variable("visibility", "horizontal visibility", "m", PROFILE, "visibility_in_air"),
    # --- Refraction ---------------------------------------------------------------------------
    Variable("earth_radius", "Euler radius of the Earth at the profile", "m", PROFILE),
    Variable("refractivity", "refractivity N, (n - 1) 1e6", "1", LEVEL),
    Variable("modified_refractivity", "modified refractivity M = N + 1e6 z / a", "1", LEVEL),
    Variable(
        "refractivity_gradient",
        "gradient of N from this level to the next valid one",
        "km-1",
        LEVEL,
    ),
    Variable(
        "ray_curvature",
        "curvature of a level ray from this level to the next, positive towards the Earth",
        "m-1",
        LEVEL,
    ),
    Variable(
        "effective_earth_radius_factor",
        "effective Earth radius factor k from this level to the next",
        "1",
        LEVEL,
    ),
    Variable(
        "layer_class",
        "refraction class of the layer from this level to the next",
        None,
        LEVEL,
        extra=_codes(LAYER_CLASSES),
    ),
    # --- Ducts --------------------------------------------------------------------------------
    Variable("duct_count", "number of ducts", "1", PROFILE),
    Variable("duct_kind", "kind of duct (ITU-R P.453)", None, DUCT, extra=_codes(DUCT_KINDS)),
    Variable("duct_base", "height of the duct's base above ground", "m", DUCT),
    Variable("duct_top", "height of the duct's top above ground", "m", DUCT),
    Variable("duct_thickness", "thickness of the duct", "m", DUCT),
    Variable("duct_strength", "M deficit: largest M in the duct less M at its top", "1", DUCT),
    Variable("trapping_base", "height of the bottom of the trapping layer", "m", DUCT),
    Variable("height_of_maximum", "height of the largest M in the duct", "m", DUCT),
    Variable("grazing_angle", "critical grazing angle of the duct", "rad", DUCT),
    Variable(
        "longest_trapped_wavelength",
        "longest wavelength trapped in the first mode (phase integral)",
        "m",
        DUCT,
    ),
    Variable("enclosed", "1 where the duct lies wholly inside another's extent", "1", DUCT),
    # --- Sightlines ---------------------------------------------------------------------------
    Variable("sightline_name", "name of the sightline", None, ("sightline",)),
    Variable("observer_height", "height of the observer above the surface", "m", ("sightline",)),
    Variable("target_height", "height of the target's top above the surface", "m", ("sightline",)),
    Variable(
        "target_base_height", "height of the target's lowest part that counts", "m", ("sightline",)
    ),
    Variable("distance", "geodesic distance from observer to target", "m", ("sightline",)),
    Variable("azimuth", "azimuth of the target seen from the observer", "degree", ("sightline",)),
    Variable(
        "sightline_state", "state of the sightline", None, SIGHT, extra=_codes(SIGHTLINE_STATES)
    ),
    Variable("hidden_height", "lowest height visible at the target's distance", "m", SIGHT),
    Variable("visible_extent", "height of the target's visible part", "m", SIGHT),
    Variable(
        "apparent_elevation",
        "elevation angle at which the highest visible part of the target appears",
        "rad",
        SIGHT,
    ),
    Variable("upright_images", "directions in which that part appears upright", "1", SIGHT),
    Variable("inverted_images", "directions in which that part appears inverted", "1", SIGHT),
    Variable(
        "horizon_elevation",
        "elevation of the highest ray that meets the surface, less than 0 by the dip",
        "rad",
        SIGHT,
    ),
    Variable(
        "lift",
        "elevation of the highest visible part less that of the same point in standard air",
        "rad",
        SIGHT,
    ),
    Variable(
        "arrival_change",
        "elevation of the target's highest visible part less its median over the local day",
        "rad",
        SIGHT,
    ),
    Variable(
        "magnification",
        "vertical magnification of the target's largest image against straight rays",
        "1",
        SIGHT,
    ),
    Variable(
        "clear_height",
        "lowest height at the target's distance that shows 10 arc seconds above the horizon",
        "m",
        SIGHT,
    ),
    Variable("apparent_height", "angle that all images of the target fill", "rad", SIGHT),
    Variable(
        "appearance",
        "what the target looks like",
        None,
        SIGHT,
        extra={"flag_masks": tuple(APPEARANCES.values()), "flag_meanings": " ".join(APPEARANCES)},
    ),
    Variable(
        "blocked_by",
        "distance of the ground that stops the ray just under the lowest visible one",
        "m",
        SIGHT,
    ),
    Variable(
        "visible_bottom",
        "lower ends of the visible heights at the target's distance",
        "m",
        ("profile", "sightline", "interval"),
    ),
    Variable(
        "visible_top",
        "upper ends of the visible heights at the target's distance",
        "m",
        ("profile", "sightline", "interval"),
    ),
    Variable(
        "hidden_height_straight", "hidden height with straight rays (no air)", "m", ("sightline",)
    ),
    Variable(
        "hidden_height_standard", "hidden height in the standard atmosphere", "m", ("sightline",)
    ),
    Variable(
        "apparent_elevation_straight",
        "elevation of the target's highest visible part with straight rays",
        "rad",
        ("sightline",),
    ),
    Variable(
        "apparent_elevation_standard",
        "elevation of the target's highest visible part in the standard atmosphere",
        "rad",
        ("sightline",),
    ),
    Variable(
        "sun_altitude",
        "geometric altitude of the Sun's centre",
        "degree",
        PROFILE,
        "solar_elevation_angle",
    ),
    Variable(
        "sun_azimuth",
        "azimuth of the Sun, clockwise from north",
        "degree",
        PROFILE,
        "solar_azimuth_angle",
    ),
    Variable(
        "twilight_class", "day, twilight or night", None, PROFILE, extra=_codes(TWILIGHT_CLASSES)
    ),
    Variable("sun_separation", "angle between the target and the Sun", "degree", SIGHT),
    Variable(
        "visual_range",
        "distance at which a black target on the horizon fades to a contrast of 0.02",
        "m",
        SIGHT,
    ),
    Variable("visual_range_lower", "lower bound of the visual range", "m", SIGHT),
    Variable("visual_range_upper", "upper bound of the visual range", "m", SIGHT),
    Variable(
        "visual_range_limit", "visual range in air without haze (Rayleigh scattering)", "m", SIGHT
    ),
    Variable(
        "visual_range_source",
        "what the visual range is told from",
        None,
        SIGHT,
        extra=_codes(VISUAL_RANGE_SOURCES),
    ),
    Variable(
        "apparent_contrast",
        "the target's contrast against the horizon sky at the observer",
        "1",
        SIGHT,
    ),
    Variable(
        "target_range", "distance at which this target fades to a contrast of 0.02", "m", SIGHT
    ),
    Variable("target_range_lower", "lower bound of the target's range", "m", SIGHT),
    Variable("target_range_upper", "upper bound of the target's range", "m", SIGHT),
    Variable("lamp_illuminance", "illuminance from the lamp at the observer", "lx", SIGHT),
    Variable("lamp_range", "distance at which the lamp is lost to the eye", "m", SIGHT),
    Variable("lamp_range_lower", "lower bound of the lamp's range", "m", SIGHT),
    Variable("lamp_range_upper", "upper bound of the lamp's range", "m", SIGHT),
    Variable(
        "path_relative_humidity",
        "largest relative humidity of the profile at the heights of the ray",
        "1",
        SIGHT,
    ),
    Variable(
        "weather_on_path",
        "fog and low cloud at the heights of the ray",
        None,
        SIGHT,
        extra=_codes(WEATHER_ON_PATH),
    ),
    # --- Where to stand -----------------------------------------------------------------------
    Variable("stand_height", "height of the observer that is tried", "m", ("sightline", "stand")),
    Variable(
        "stand_eye_height",
        "the same above the water or ground, sea level offset taken off",
        "m",
        ("sightline", "stand"),
    ),
    Variable(
        "stand_probability", "probability that the sightline is open from this height", "1", STAND
    ),
    Variable(
        "stand_probability_lower", "lower bound (5 %) of the probability at this height", "1", STAND
    ),
    Variable(
        "stand_probability_upper",
        "upper bound (95 %) of the probability at this height",
        "1",
        STAND,
    ),
    Variable(
        "stand_visible_extent",
        "median over members of the target's visible part from this height",
        "m",
        STAND,
    ),
    Variable(
        "stand_in_duct",
        "share of members in which a duct above or around the eye holds level rays down",
        "1",
        STAND,
    ),
    Variable("best_stand_height", "likeliest height to see the target from", "m", SIGHT),
    Variable(
        "best_stand_height_overall",
        "likeliest height to see the target from, over all valid times of the site",
        "m",
        ("sightline",),
    ),
    Variable("place_name", "name of the candidate place", None, ("sightline", "place")),
    Variable(
        "place_ground_height", "height of the ground at the place", "m", ("sightline", "place")
    ),
    Variable(
        "place_distance", "distance from the place to the target", "m", ("sightline", "place")
    ),
    Variable(
        "place_probability",
        "probability that the sightline is open from this height above the place's ground",
        "1",
        PLACE,
    ),
    Variable("place_probability_lower", "lower bound (5 %) of the place's probability", "1", PLACE),
    Variable(
        "place_probability_upper", "upper bound (95 %) of the place's probability", "1", PLACE
    ),
    Variable(
        "place_visible_extent",
        "median over members of the target's visible part from the place",
        "m",
        PLACE,
    ),
    Variable(
        "best_place_height",
        "likeliest height above the place's ground to see the target from",
        "m",
        ("profile", "sightline", "place"),
    ),
    Variable("best_place", "position of the likeliest place, -1 for none", "1", SIGHT),
    Variable(
        "best_place_overall",
        "position of the likeliest place over all valid times of the site, -1 for none",
        "1",
        ("sightline",),
    ),
    # --- Outlook ------------------------------------------------------------------------------
    Variable("ceiling", "ceiling under which a duct is asked for, above ground", "m", ("ceiling",)),
    Variable("height_bin", "height above ground", "m", ("height_bin",), "height"),
    Variable("member_count", "number of members behind the probabilities", "1", PROFILE),
    Variable("duct_probability", "probability of a duct wholly under the ceiling", "1", CEILING),
    Variable("duct_probability_lower", "lower bound (5 %) of the duct probability", "1", CEILING),
    Variable("duct_probability_upper", "upper bound (95 %) of the duct probability", "1", CEILING),
    Variable("duct_likelihood", "share of members with this height inside a duct", "1", BAND),
    Variable("sightline_probability", "probability that the sightline is open", "1", SIGHT),
    Variable(
        "sightline_probability_lower", "lower bound (5 %) of the sightline probability", "1", SIGHT
    ),
    Variable(
        "sightline_probability_upper", "upper bound (95 %) of the sightline probability", "1", SIGHT
    ),
    Variable("hidden_height_lower", "5 % quantile of the hidden height over members", "m", SIGHT),
    Variable("hidden_height_upper", "95 % quantile of the hidden height over members", "m", SIGHT),
    Variable("lowest_level", "height of the profile's lowest level above ground", "m", PROFILE),
    Variable(
        "near_ground_warming", "largest warming above the lowest level within 300 m", "K", PROFILE
    ),
    Variable("near_ground_warming_depth", "depth over which the air warms so", "m", PROFILE),
    Variable(
        "surface_layer_state",
        "whether sightlines run through a modelled surface layer",
        None,
        PROFILE,
        extra=_codes(SURFACE_STATES),
    ),
    Variable(
        "air_sea_temperature_difference",
        "air at the lowest trusted level less water",
        "K",
        PROFILE,
    ),
    Variable(
        "evaporation_duct_height",
        "height of the evaporation duct of the surface layer",
        "m",
        PROFILE,
    ),
    Variable(
        "evaporation_duct_strength",
        "M just above the surface less M at the height of the evaporation duct",
        "1",
        PROFILE,
    ),
    Variable(
        "surface_layer_reason",
        "why the air next to the surface is not known",
        None,
        PROFILE,
        extra=_codes(SURFACE_REASONS),
    ),
    Variable(
        "surface_source",
        "where the temperature of water or ground is from",
        None,
        PROFILE,
        extra=_codes(SURFACE_SOURCES),
    ),
    Variable(
        "surface_wind_source",
        "where the wind of the surface layer is from",
        None,
        PROFILE,
        extra=_codes(SURFACE_WIND_SOURCES),
    ),
    Variable(
        "surface_air_source",
        "which air the surface layer is solved from",
        None,
        PROFILE,
        extra=_codes(SURFACE_AIR_SOURCES),
    ),
    Variable(
        "surface_function_share",
        "share of the published stable functions that hold in this surface layer",
        "1",
        PROFILE,
    ),
    Variable(
        "surface_layer_unconverged",
        "members whose surface layer did not converge",
        "1",
        PROFILE,
    ),
    Variable(
        "surface_layer_too_stable",
        "members whose surface layer is too stable to be modelled",
        "1",
        PROFILE,
    ),
    Variable("joined_height", "height above ground or sea surface", "m", JOINED, "height"),
    Variable(
        "joined_air_temperature",
        "air temperature, surface layer included",
        "K",
        JOINED,
        "air_temperature",
    ),
    Variable(
        "joined_modified_refractivity",
        "modified refractivity M, surface layer included",
        "1",
        JOINED,
    ),
    Variable(
        "level_origin",
        "whether the level is measured, modelled or interpolated",
        None,
        JOINED,
        extra=_codes(LEVEL_ORIGINS),
    ),
    Variable("near_ground_resolution", "mean level spacing in the lowest 300 m", "m", PROFILE),
]

#: The table by name.
VARIABLES: dict[str, Variable] = {row.name: row for row in _ROWS}


def attributes(name: str) -> dict[str, Any]:
    """CF attributes of a variable of the table.

    Parameters
    ----------
    name : str
        A name in `VARIABLES`.

    Returns
    -------
    dict
        ``long_name`` and, where they apply, ``standard_name``, ``units``, flag attributes.
    """
    row = VARIABLES[name]
    attrs: dict[str, Any] = {"long_name": row.long_name}
    if row.standard_name:
        attrs["standard_name"] = row.standard_name
    if row.units is not None:
        attrs["units"] = row.units
    attrs.update(row.extra)
    return attrs


def describe(dataset: xr.Dataset, names: Iterable[str] | None = None) -> xr.Dataset:
    """Write the table's attributes onto a dataset's variables, in place.

    Parameters
    ----------
    dataset : xarray.Dataset
        Any stage's dataset.
    names : iterable of str, optional
        Variables to describe; by default all that the table knows.

    Returns
    -------
    xarray.Dataset
        The same dataset.
    """
    for name in names if names is not None else list(dataset.variables):
        if name in VARIABLES and name in dataset.variables:
            dataset[name].attrs = attributes(str(name))
    return dataset
