"""Variables of sightlines, and of where to stand for them."""

from __future__ import annotations

from forecast.schema.codes import (
    APPEARANCES,
    SIGHTLINE_STATES,
    TWILIGHT_CLASSES,
    VISUAL_RANGE_SOURCES,
    WEATHER_ON_PATH,
)
from forecast.schema.variable import (
    PLACE,
    PROFILE,
    SIGHT,
    STAND,
    Variable,
    coded,
)

__all__ = ["SIGHTLINE_ROWS"]

SIGHTLINE_ROWS = [
    # --- Sightlines --------------------------------------------------------------------------
    Variable("sightline_name", "name of the sightline", None, ("sightline",)),
    Variable("observer_height", "height of the observer above the surface", "m", ("sightline",)),
    Variable("target_height", "height of the target's top above the surface", "m", ("sightline",)),
    Variable(
        "target_base_height", "height of the target's lowest part that counts", "m", ("sightline",)
    ),
    Variable("distance", "geodesic distance from observer to target", "m", ("sightline",)),
    Variable("azimuth", "azimuth of the target seen from the observer", "degree", ("sightline",)),
    Variable(
        "sightline_state", "state of the sightline", None, SIGHT, extra=coded(SIGHTLINE_STATES)
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
        "twilight_class", "day, twilight or night", None, PROFILE, extra=coded(TWILIGHT_CLASSES)
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
        extra=coded(VISUAL_RANGE_SOURCES),
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
        extra=coded(WEATHER_ON_PATH),
    ),
    # --- Where to stand ----------------------------------------------------------------------
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
]
