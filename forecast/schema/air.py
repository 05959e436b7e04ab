"""Variables of profiles, of refraction and of ducts."""

from __future__ import annotations

from forecast.schema.codes import (
    DUCT_KINDS,
    LAYER_CLASSES,
    QUALITY_FLAGS,
)
from forecast.schema.variable import (
    DUCT,
    LEVEL,
    PROFILE,
    Variable,
    coded,
)

__all__ = ["AIR_ROWS"]

AIR_ROWS = [
    # --- coordinates of a profile ------------------------------------------------------------
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
    # --- Profiles ----------------------------------------------------------------------------
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
    # --- Refraction --------------------------------------------------------------------------
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
        extra=coded(LAYER_CLASSES),
    ),
    # --- Ducts -------------------------------------------------------------------------------
    Variable("duct_count", "number of ducts", "1", PROFILE),
    Variable("duct_kind", "kind of duct (ITU-R P.453)", None, DUCT, extra=coded(DUCT_KINDS)),
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
]
