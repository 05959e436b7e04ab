"""The surface layer under the profiles of a site: from what, how sure, or why not.

Sightlines run through the lowest metres, which neither balloons nor model levels resolve. Where a
site says what its paths run over, sea or land, the air between the surface and the lowest trusted
level is modelled (`forecast.physics.surface_layer`). Its inputs carry errors of their own, and the
choice of stable function is one: members differ in all of them. Without a surface temperature, wind
or a level near the surface nothing is modelled, and the outlook says so and is less sure.

Where the inputs are from, best first:

- temperature of the water: settings, water series, profiles; of the ground: settings, profiles;
- wind: settings (taken at 10 m), water series (at 10 m), 10 m of the profiles, their trusted level;
- air: 2 m of the profiles where temperature and humidity are both there, else the trusted level.

The humidity next to the ground is that of the air above it: no evaporation, as over dry ground.

Very stable air: each member takes a stable function; where the air is too stable for it, the next
wider one that holds. As those that hold grow fewer (`surface_function_share`), so does the sample
that intervals are made from: agreement among fewer functions is not knowledge. Where none holds
the air is `unknown`, and the reason says that it is too stable.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
import xarray as xr

from forecast.outlook.members import error_model, generator
from forecast.physics.stability import LARGEST_ZETA, STABLE_FUNCTIONS
from forecast.physics.surface_join import join_surface_layer, trusted_level
from forecast.physics.surface_layer import SurfaceLayer, solve_land, solve_sea
from forecast.schema import (
    LEVEL_ORIGINS,
    SURFACE_AIR_SOURCES,
    SURFACE_REASONS,
    SURFACE_SOURCES,
    SURFACE_STATES,
    SURFACE_WIND_SOURCES,
)

if TYPE_CHECKING:
    from forecast.ingest.water_series import WaterSeries
    from forecast.settings import Settings

__all__ = [
    "STATE_NAMES",
    "LaidSurface",
    "SurfaceInputs",
    "draw_errors",
    "lay_surface",
    "surface_inputs",
]

STATE_NAMES = ("height", "air_pressure", "air_temperature", "specific_humidity")

_NONE, _SEA, _LAND = 0, 1, 2
_SST_RANGE = (268.15, 313.15)  # K; outside, a water temperature is not believed
_GROUND_RANGE = (200.0, 350.0)  # K
_WIND_HEIGHT, _SCREEN_HEIGHT = 10.0, 2.0  # m
_COARE = STABLE_FUNCTIONS["beljaars_holtslag_1991"]
# Codes of the functions from the shortest range to the longest, and the place of each in that row.
_BY_RANGE = np.argsort(LARGEST_ZETA)
_RANK = np.argsort(_BY_RANGE)
_NAMES = {code: name for name, code in STABLE_FUNCTIONS.items()}


@dataclass(frozen=True)
class SurfaceInputs:
    """What the surface layer is made from, per profile or column.

    ``kind`` 0 none, 1 sea, 2 land; ``skin`` temperature of water or ground, K; ``wind`` m/s at
    ``wind_height`` m; ``roughness`` of the ground, m; ``warmer``: air at 2 m less that of the
    trusted level, K, and ``moister``: ratio of the specific humidities, NaN where 2 m values are
    not known; codes of where skin, wind and air are from.
    """

    kind: np.ndarray
    skin: np.ndarray
    wind: np.ndarray
    wind_height: np.ndarray
    roughness: np.ndarray
    warmer: np.ndarray
    moister: np.ndarray
    skin_source: np.ndarray
    wind_source: np.ndarray
    air_source: np.ndarray

    def take(self, index: Any) -> SurfaceInputs:
        """Those of some profiles, repeated as the index says."""
        return SurfaceInputs(*(a[index] for a in vars(self).values()))

    @property
    def wanted(self) -> np.ndarray:
        """Where the site says what its paths run over."""
        return self.kind != _NONE

    @property
    def over_sea(self) -> np.ndarray:
        """Where they run over water."""
        return self.kind == _SEA

    @property
    def screened(self) -> np.ndarray:
        """Where the air at 2 m is known."""
        return np.isfinite(self.warmer + self.moister)


class LaidSurface(NamedTuple):
    """Columns with the surface layer below, and what became of it in each.

    ``air``: `STATE_NAMES`, (column, level); ``origin``: code of
    `forecast.schema.LEVEL_ORIGINS`, −1 without a level; per column ``state`` and ``reason``: codes
    of `SURFACE_STATES` and `SURFACE_REASONS`; ``functions``: share of the stable functions that
    hold, 1 where nothing was asked for; ``layer``: scales, None if no site asks for any.
    """

    air: dict[str, np.ndarray]
    origin: np.ndarray
    state: np.ndarray
    reason: np.ndarray
    functions: np.ndarray
    layer: SurfaceLayer | None


def surface_inputs(
    profiles: xr.Dataset,
    wind: np.ndarray,
    state: Mapping[str, np.ndarray],
    settings: Settings,
    series: Mapping[str, WaterSeries] | None = None,
) -> SurfaceInputs:
    """Gather what the surface layer of each profile needs.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles with the coordinates ``site`` and ``time``; per-profile values are used where
        they are there.
    wind : ndarray
        Wind speed, m/s, (profile, level), on the same packed levels as `state`.
    state : mapping
        `STATE_NAMES`, (profile, level).
    settings : forecast.settings.Settings
        Surface, temperatures, wind and roughness of each site.
    series : mapping, optional
        Site name → `forecast.ingest.water_series.WaterSeries`.

    Returns
    -------
    SurfaceInputs
        NaN where something is not known; a temperature that cannot be one counts as not known.
    """
    site = profiles["site"].values.astype(str)
    n = site.size

    def values(name: str) -> np.ndarray:
        if name in profiles:
            return np.asarray(profiles[name].values, dtype=float)
        return np.full(n, np.nan)

    kind = np.zeros(n, dtype=np.int8)
    skin, roughness = np.full(n, np.nan), np.full(n, np.nan)
    skin_source = np.zeros(n, dtype=np.int8)
    speed, speed_height = np.full(n, np.nan), np.full(n, _WIND_HEIGHT)
    wind_source = np.zeros(n, dtype=np.int8)

    def fill(into: np.ndarray, code: np.ndarray, where: np.ndarray, new: Any, number: int) -> None:
        new = np.broadcast_to(np.asarray(new, dtype=float), (n,))
        empty = where & np.isnan(into) & np.isfinite(new)
        into[empty] = new[empty]
        code[empty] = number

    for row in settings.sites:
        mine = site == row.name
        if row.surface not in ("sea", "land"):
            continue
        sea = row.surface == "sea"
        kind[mine] = _SEA if sea else _LAND
        roughness[mine] = getattr(row, "roughness", 0.03)
        fixed = row.sea_surface_temperature if sea else getattr(row, "surface_temperature", None)
        if fixed is not None:
            fill(skin, skin_source, mine, fixed, SURFACE_SOURCES["settings"])
        calm = getattr(row, "wind_speed", None)
        if calm is not None:
            fill(speed, wind_source, mine, calm, SURFACE_WIND_SOURCES["settings"])
        if sea and series and row.name in series:
            water, blowing = series[row.name].at(profiles["time"].values)
            fill(skin, skin_source, mine, _believed(water, _SST_RANGE), SURFACE_SOURCES["series"])
            fill(speed, wind_source, mine, blowing, SURFACE_WIND_SOURCES["series"])
        name = "sea_surface_temperature" if sea else "surface_temperature"
        own = _believed(values(name), _SST_RANGE if sea else _GROUND_RANGE)
        fill(skin, skin_source, mine, own, SURFACE_SOURCES["profile"])
    wanted = kind != _NONE
    ten_metres = np.hypot(values("eastward_wind_10m"), values("northward_wind_10m"))
    fill(speed, wind_source, wanted, ten_metres, SURFACE_WIND_SOURCES["ten_metres"])

    screen_t, screen_q = values("air_temperature_2m"), values("specific_humidity_2m")
    screened = wanted & np.isfinite(screen_t + screen_q)
    trusted = trusted_level(state["height"], screened)
    at = (np.arange(n), np.maximum(trusted, 0))
    level_wind = np.where(trusted >= 0, wind[at], np.nan)
    fill(speed, wind_source, wanted, level_wind, SURFACE_WIND_SOURCES["level"])
    # The height of a level is that of each member, which may be shifted.
    speed_height[wind_source == SURFACE_WIND_SOURCES["level"]] = np.nan
    screened &= trusted >= 0
    with np.errstate(divide="ignore", invalid="ignore"):
        warmer = np.where(screened, screen_t - state["air_temperature"][at], np.nan)
        moister = np.where(screened, screen_q / state["specific_humidity"][at], np.nan)
    known = np.isfinite(warmer + moister)
    air_source = np.where(known, SURFACE_AIR_SOURCES["two_metres"], SURFACE_AIR_SOURCES["level"])
    air_source[~wanted | (trusted < 0)] = SURFACE_AIR_SOURCES["none"]
    return SurfaceInputs(
        kind, skin, speed, speed_height, roughness, warmer, moister, skin_source, wind_source,
        air_source.astype(np.int8),
    )  # fmt: skip


def _believed(temperature: np.ndarray, limits: tuple[float, float]) -> np.ndarray:
    low, high = limits
    return np.where((temperature >= low) & (temperature <= high), temperature, np.nan)


def draw_errors(identity: str, members: int, seed: int) -> np.ndarray:
    """Draw what the members of one profile take for surface, wind and stable function.

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
        (3, member): errors of the surface temperature and of the wind, in standard deviations;
        number of the stable function.
    """
    rng = generator(seed, f"surface|{identity}")
    errors = rng.standard_normal((2, members))
    function = rng.integers(0, len(STABLE_FUNCTIONS), members)
    return np.stack([errors[0], errors[1], function])


def lay_surface(
    state: dict[str, np.ndarray], inputs: SurfaceInputs, errors: np.ndarray | None = None
) -> LaidSurface:
    """Put the surface layer under columns whose site asks for one.

    Parameters
    ----------
    state : dict of ndarray
        ``height``, ``air_pressure``, ``air_temperature``, ``specific_humidity``, (column, level).
    inputs : SurfaceInputs
        Per column.
    errors : ndarray, optional
        (3, column) from `draw_errors`; without it the best guess is modelled, with COARE's own
        stable function where it holds.

    Returns
    -------
    LaidSurface
        With modelled levels below the lowest trusted one where that could be done.
    """
    wanted = inputs.wanted
    size = wanted.size
    code = np.where(wanted, SURFACE_STATES["unknown"], SURFACE_STATES["none"]).astype(np.int8)
    reason = np.zeros(size, dtype=np.int8)
    share = np.ones(size)
    if not wanted.any():
        measured = np.where(np.isfinite(state["height"]), LEVEL_ORIGINS["measured"], -1)
        return LaidSurface(state, measured.astype(np.int8), code, reason, share, None)
    skin, wind = inputs.skin, inputs.wind
    function = np.full(size, _COARE)
    if errors is not None:
        rule = error_model()["surface"]
        sea = inputs.kind == _SEA
        spread = np.where(sea, rule["sea_surface_temperature"], rule["ground_temperature"])
        low, high = (np.where(sea, a, b) for a, b in zip(_SST_RANGE, _GROUND_RANGE, strict=True))
        skin = np.clip(skin + spread * errors[0], low, high)
        wind = np.abs(wind + rule["wind"] * errors[1])
        function = errors[2].astype(int)
    trusted = trusted_level(state["height"], inputs.screened)
    at = (np.arange(size), np.maximum(trusted, 0))
    z, p, t, q = (state[name][at] for name in STATE_NAMES)
    screened = inputs.screened & (trusted >= 0)
    solved_at = np.where(screened, _SCREEN_HEIGHT, z)
    t = np.where(screened, t + inputs.warmer, t)
    q = np.where(screened, q * inputs.moister, q)
    wind_height = np.where(np.isnan(inputs.wind_height), z, inputs.wind_height)
    for missing, name in (
        (trusted < 0, "no_level_near_surface"),
        (np.isnan(wind), "no_wind"),
        (np.isnan(skin), "no_surface_temperature"),
    ):
        reason[wanted & missing] = SURFACE_REASONS[name]
    usable = wanted & (reason == SURFACE_REASONS["none"])
    arrays = (wind, t, q, p, skin, wind_height, solved_at, inputs.roughness)
    layer, share = _solve(arrays, inputs.kind, function, usable, every=errors is None)
    joined = join_surface_layer(
        state["height"],
        state["air_pressure"],
        state["air_temperature"],
        state["specific_humidity"],
        trusted,
        layer,
        np.where(screened, _SCREEN_HEIGHT, np.nan),
    )
    code[usable & layer.converged] = SURFACE_STATES["modelled"]
    reason[usable & layer.too_stable] = SURFACE_REASONS["too_stable"]
    reason[usable & ~layer.too_stable & ~layer.converged] = SURFACE_REASONS["not_converged"]
    return LaidSurface(
        dict(zip(STATE_NAMES, joined[:4], strict=True)), joined.origin, code, reason, share, layer
    )


def _solve(
    arrays: tuple[np.ndarray, ...],
    kind: np.ndarray,
    function: np.ndarray,
    usable: np.ndarray,
    every: bool,
) -> tuple[SurfaceLayer, np.ndarray]:
    """Solve each column with its function or, where it is too stable for that, a wider one.

    Returns the scales and the share of functions that hold; that is only found out (all of them
    tried) if `every` is set, and 1 otherwise.
    """
    size = function.size
    floats = np.full((8, size), np.nan)
    flags = np.zeros((2, size), dtype=bool)
    iterations, codes = np.zeros(size, dtype=np.int8), np.full(size, -1, dtype=np.int8)
    holds = np.zeros((_BY_RANGE.size, size), dtype=bool)
    waiting = usable.copy()  # no function has held yet
    for number, code in enumerate(_BY_RANGE.tolist()):
        due = waiting & (_RANK[function] <= number)
        for ground in (_SEA, _LAND):
            tried = np.flatnonzero((usable if every else due) & (kind == ground))
            if tried.size == 0:
                continue
            layer = _solve_ground(ground, _NAMES[code], *(a[tried] for a in arrays))
            holds[number, tried] = layer.converged
            take = due[tried]
            into = tried[take]
            floats[:, into] = np.stack(layer[:8])[:, take]
            flags[:, into] = np.stack([layer.converged, layer.too_stable])[:, take]
            iterations[into], codes[into] = layer.iterations[take], code
        waiting &= ~flags[0]
    share = np.where(usable, holds.mean(axis=0), 1.0) if every else np.ones(size)
    return SurfaceLayer._make([*floats, *flags, iterations, codes]), share


def _solve_ground(
    ground: int, name: str, wind: np.ndarray, t: np.ndarray, q: np.ndarray, p: np.ndarray,
    skin: np.ndarray, wind_height: np.ndarray, air_height: np.ndarray, roughness: np.ndarray,
) -> SurfaceLayer:  # fmt: skip
    if ground == _SEA:
        return solve_sea(wind, t, q, p, skin, wind_height, air_height, stable_function=name)
    return solve_land(
        wind, t, q, p, skin, q, roughness, wind_height=wind_height, air_height=air_height,
        stable_function=name,
    )  # fmt: skip
