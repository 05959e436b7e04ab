"""Variables of the outlook: probabilities, the surface, resolution."""

from __future__ import annotations

from forecast.schema.codes import (
    LEVEL_ORIGINS,
    SURFACE_AIR_SOURCES,
    SURFACE_REASONS,
    SURFACE_SOURCES,
    SURFACE_STATES,
    SURFACE_WIND_SOURCES,
)
from forecast.schema.variable import (
    BAND,
    CEILING,
    JOINED,
    PROFILE,
    SIGHT,
    Variable,
    coded,
)

__all__ = ["OUTLOOK_ROWS"]

OUTLOOK_ROWS = [
    # --- Outlook -----------------------------------------------------------------------------
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
        extra=coded(SURFACE_STATES),
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
        extra=coded(SURFACE_REASONS),
    ),
    Variable(
        "surface_source",
        "where the temperature of water or ground is from",
        None,
        PROFILE,
        extra=coded(SURFACE_SOURCES),
    ),
    Variable(
        "surface_wind_source",
        "where the wind of the surface layer is from",
        None,
        PROFILE,
        extra=coded(SURFACE_WIND_SOURCES),
    ),
    Variable(
        "surface_air_source",
        "which air the surface layer is solved from",
        None,
        PROFILE,
        extra=coded(SURFACE_AIR_SOURCES),
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
        extra=coded(LEVEL_ORIGINS),
    ),
    Variable("near_ground_resolution", "mean level spacing in the lowest 300 m", "m", PROFILE),
]
