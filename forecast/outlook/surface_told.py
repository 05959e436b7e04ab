"""What the outlook tells of the surface layer: what it is made from, its ducts, the joined air."""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.outlook.speaking import Speaking
from forecast.outlook.surface import STATE_NAMES
from forecast.physics.column_batch import analyse_columns
from forecast.physics.evaporation_duct import evaporation_duct
from forecast.physics.surface_join import trusted_level
from forecast.schema import LEVEL_ORIGINS

__all__ = ["joined_air", "surface_variables"]

_TOLD_UP_TO = 300.0  # m


def surface_variables(told: Speaking) -> dict[str, Any]:
    """What is known of the air next to the surface, and from what.

    Parameters
    ----------
    told : Speaking
        Rows of the outlook.

    Returns
    -------
    dict
        Variables of `forecast.schema` on (profile,).
    """
    inputs, laid = told.row_water, told.surface
    trusted = trusted_level(told.guess["height"], inputs.screened)
    t = told.guess["air_temperature"][np.arange(trusted.size), np.maximum(trusted, 0)]
    difference = np.where(inputs.wanted & (trusted >= 0), t - inputs.skin, np.nan)
    height, strength = np.full((2, trusted.size), np.nan)
    if laid.layer is not None:
        duct = evaporation_duct(laid.layer, told.guess["air_pressure"][:, 0])
        # Dry ground evaporates nothing.
        height, strength = (np.where(inputs.over_sea, a, np.nan) for a in duct)
    values = {
        "surface_layer_state": laid.state,
        "surface_layer_reason": laid.reason,
        "surface_source": inputs.skin_source,
        "surface_wind_source": inputs.wind_source,
        "surface_air_source": inputs.air_source,
        "surface_function_share": laid.functions,
        "air_sea_temperature_difference": difference,
        "evaporation_duct_height": height,
        "evaporation_duct_strength": strength,
    }
    return {name: ("profile", a) for name, a in values.items()}


def joined_air(told: Speaking, earth_radius: np.ndarray) -> dict[str, Any]:
    """The lowest 300 m as sightlines see them, each level with its origin.

    Parameters
    ----------
    told : Speaking
        Rows of the outlook.
    earth_radius : ndarray
        For M, m, (profile,).

    Returns
    -------
    dict
        Variables of `forecast.schema` on (profile, joined_level), NaN (origin −1) beyond the
        last level of a profile.
    """
    laid = told.surface
    origin = laid.origin.astype(np.int8)
    own = origin[:, origin.shape[1] - told.filled.shape[1] :]
    own[told.filled & (own == LEVEL_ORIGINS["measured"])] = LEVEL_ORIGINS["interpolated"]
    height = laid.air["height"]
    keep = (origin >= 0) & (height <= _TOLD_UP_TO)
    order = np.argsort(~keep, axis=1, kind="stable")[:, : max(2, int(keep.sum(axis=1).max()))]
    kept = np.take_along_axis(keep, order, axis=1)
    z, p, t, q = (
        np.where(kept, np.take_along_axis(laid.air[name], order, axis=1), np.nan)
        for name in STATE_NAMES
    )
    batch = analyse_columns(p, t, q, z, earth_radius)
    values = {
        "joined_height": z,
        "joined_air_temperature": t,
        "joined_modified_refractivity": batch.modified_refractivity,
        "level_origin": np.where(kept, np.take_along_axis(origin, order, axis=1), -1),
    }
    return {
        name: (("profile", "joined_level"), a.astype(np.int8) if name == "level_origin" else a)
        for name, a in values.items()
    }
