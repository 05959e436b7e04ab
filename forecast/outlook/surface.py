"""The surface layer under the profiles of sites over water: from what, how sure, or why not.

Sightlines run through the lowest metres, which neither balloons nor model levels resolve. Where a
site says that its paths lie over the sea, the air between the water and the lowest trusted level
is modelled (`forecast.physics.surface_layer`). Its inputs carry errors of their own, and the choice
of stable function is one: members differ in all of them. Without a water temperature or wind
nothing is modelled, and the outlook says so and is less sure.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from forecast.outlook.members import error_model, generator
from forecast.physics.stability import STABLE_FUNCTIONS
from forecast.physics.surface_join import join_surface_layer, trusted_level
from forecast.physics.surface_layer import SurfaceLayer, solve_sea
from forecast.schema import SURFACE_STATES

if TYPE_CHECKING:
    from forecast.settings import Settings

__all__ = [
    "STATE_NAMES",
    "SurfaceInputs",
    "add_surface_layer",
    "draw_errors",
    "surface_inputs",
]

STATE_NAMES = ("height", "air_pressure", "air_temperature", "specific_humidity")

_MODELLED = SURFACE_STATES["modelled"]
_UNKNOWN = SURFACE_STATES["unknown"]
_NONE = SURFACE_STATES["none"]
_SST_RANGE = (268.15, 313.15)  # K; outside, a water temperature is not believed


@dataclass(frozen=True)
class SurfaceInputs:
    """Water temperature (K) and wind speed (m/s) at the trusted level, per profile or column.

    ``wanted``: whether its site lies over water.
    """

    wanted: np.ndarray
    sst: np.ndarray
    wind: np.ndarray

    def take(self, index: Any) -> SurfaceInputs:
        """Those of some profiles, repeated as the index says."""
        return SurfaceInputs(self.wanted[index], self.sst[index], self.wind[index])


def surface_inputs(
    profiles: xr.Dataset, wind: np.ndarray, height: np.ndarray, settings: Settings
) -> SurfaceInputs:
    """Gather what the surface layer of each profile needs.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles with the coordinate ``site``; ``sea_surface_temperature`` is used if it is there.
    wind : ndarray
        Wind speed, m/s, (profile, level), on the same packed levels as `height`.
    height : ndarray
        Heights, m, (profile, level).
    settings : forecast.settings.Settings
        ``surface`` and ``sea_surface_temperature`` of each site.

    Returns
    -------
    SurfaceInputs
        NaN where something is not known; a water temperature that cannot be one counts as not
        known.
    """
    site = profiles["site"].values.astype(str)
    wanted = np.zeros(site.size, dtype=bool)
    sst = np.full(site.size, np.nan)
    if "sea_surface_temperature" in profiles:
        sst = profiles["sea_surface_temperature"].values.astype(float).copy()
        low, high = _SST_RANGE
        sst[~((sst >= low) & (sst <= high))] = np.nan
    for row in settings.sites:
        mine = site == row.name
        if row.surface == "sea":
            wanted |= mine
        if row.sea_surface_temperature is not None:
            sst[mine] = row.sea_surface_temperature
    trusted = trusted_level(height)
    speed = wind[np.arange(site.size), np.maximum(trusted, 0)]
    return SurfaceInputs(wanted, sst, np.where(trusted >= 0, speed, np.nan))


def draw_errors(identity: str, members: int, seed: int) -> np.ndarray:
    """Draw what the members of one profile take for water, wind and stable function.

    Parameters
    ----------
    identity : str
        What the random numbers hang on, besides the seed.
    members : int
        How many to draw.
    seed : int
        Seed of the run.

    Returns
    -------
    ndarray
        (3, member): error of the water temperature (K), of the wind (m/s), number of the stable
        function.
    """
    row = error_model()["surface"]
    rng = generator(seed, f"surface|{identity}")
    errors = rng.standard_normal((2, members))
    function = rng.integers(0, len(STABLE_FUNCTIONS), members)
    return np.stack([row["sea_surface_temperature"] * errors[0], row["wind"] * errors[1], function])


def add_surface_layer(
    state: dict[str, np.ndarray], inputs: SurfaceInputs, errors: np.ndarray | None = None
) -> tuple[dict[str, np.ndarray], np.ndarray, SurfaceLayer | None]:
    """Put the surface layer under columns whose site lies over water.

    Parameters
    ----------
    state : dict of ndarray
        ``height``, ``air_pressure``, ``air_temperature``, ``specific_humidity``, (column, level).
    inputs : SurfaceInputs
        Per column.
    errors : ndarray, optional
        (3, column) from `draw_errors`; without it the best guess is modelled.

    Returns
    -------
    state : dict of ndarray
        With modelled levels below the lowest trusted one where that could be done.
    code : ndarray of int8
        Per column: `forecast.schema.SURFACE_STATES`.
    layer : SurfaceLayer or None
        Scales of each column; None if no site lies over water.
    """
    code = np.where(inputs.wanted, _UNKNOWN, _NONE).astype(np.int8)
    if not inputs.wanted.any():
        return state, code, None
    sst, wind = inputs.sst, inputs.wind
    function = np.zeros(sst.size, dtype=int)
    if errors is not None:
        sst = np.clip(sst + errors[0], *_SST_RANGE)
        wind = np.abs(wind + errors[1])
        function = errors[2].astype(int)
    trusted = trusted_level(state["height"])
    usable = inputs.wanted & (trusted >= 0) & np.isfinite(sst + wind)
    at = (np.arange(sst.size), np.maximum(trusted, 0))
    z, p, t, q = (np.where(usable, state[name][at], np.nan) for name in STATE_NAMES)
    parts = [
        solve_sea(
            np.where(function == number, wind, np.nan), t, q, p, sst, z, z, stable_function=name
        )
        for name, number in STABLE_FUNCTIONS.items()
    ]
    layer = SurfaceLayer(*(np.choose(function, arrays) for arrays in zip(*parts, strict=True)))
    joined = join_surface_layer(
        state["height"],
        state["air_pressure"],
        state["air_temperature"],
        state["specific_humidity"],
        trusted,
        layer,
    )
    code[usable & layer.converged] = _MODELLED
    return dict(zip(STATE_NAMES, joined, strict=True)), code, layer
