"""What coded variables mean, the caution, the ceilings: constants that any stage may use."""

from __future__ import annotations

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
    "VISUAL_RANGE_SOURCES",
    "WEATHER_ON_PATH",
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
