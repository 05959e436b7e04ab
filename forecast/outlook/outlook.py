"""From profiles to probabilities: ducts and sightlines, each with an interval, by valid time.

The members of the profile that speaks for a site and valid time (a model ensemble of eight or more
as it is, otherwise Monte Carlo draws) go through the same physics, and the probability is the share
of members in which the thing happens, with the central 90 % interval of its Beta posterior
(Jeffreys' prior; Brown, Cai & DasGupta 2001, Statistical Science 16, sect. 3.1.3), widened for
coarse profiles.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from forecast.errors import InputError
from forecast.outlook import members as draws
from forecast.outlook.seeing import seeing_conditions
from forecast.outlook.sightlines import arrival_change, look_along, sightline_geometry
from forecast.outlook.speaking import speaking_profiles
from forecast.outlook.statistics import Progress, height_bins, member_statistics
from forecast.outlook.surface_told import joined_air, surface_variables
from forecast.outlook.surroundings import NOTHING_AROUND, Surroundings
from forecast.physics.column_batch import analyse_columns
from forecast.physics.columns import duct_dataset
from forecast.physics.curvature import classify_layers, ray_curvature
from forecast.physics.earth import euler_radius
from forecast.schema import CAUTION, CEILINGS_M, describe

if TYPE_CHECKING:
    from forecast.settings import Settings

__all__ = ["make_outlook"]

_NEAR_GROUND = 300.0  # m


def make_outlook(
    profiles: xr.Dataset,
    settings: Settings,
    progress: Progress | None = None,
    around: Surroundings = NOTHING_AROUND,
) -> xr.Dataset:
    """Probabilities of ducts and open sightlines for every site and valid time.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles (profile, level) with the coordinate ``site``; without it the station is the
        site.
    settings : forecast.settings.Settings
        Members, seed, thresholds, sightlines.
    progress : callable, optional
        Called with (done, total, label).
    around : Surroundings
        Water series and terrain.

    Returns
    -------
    xarray.Dataset
        One row per site and valid time: refraction and ducts of the profile itself, sightlines,
        probabilities with intervals.

    Raises
    ------
    InputError
        If no profile is left.
    """
    if profiles.sizes.get("profile", 0) == 0:
        raise InputError("no profile to work on", source="make_outlook")
    lines = list(settings.sightlines)
    told = speaking_profiles(profiles, settings, around)
    radius = euler_radius(told.latitude)
    data = _best_guess(told.guess, radius, settings.chart_top)
    geometry = sightline_geometry(lines, told.latitude, told.site, around)
    data.update(geometry)
    data.update(
        look_along(lines, told.air, told.latitude, told.site, geometry, told.stations, around)
    )
    zones = {site.name: site.timezone for site in settings.sites}
    data["arrival_change"] = (
        ("profile", "sightline"),
        arrival_change(data["apparent_elevation"][1], told.chosen["time"].values, told.site, zones),
    )
    data.update(
        seeing_conditions(
            lines, told.air, told.chosen["time"].values, told.latitude,
            told.chosen["longitude"].values.astype(float), told.site,
            data["apparent_elevation"][1],
            told.chosen["visibility"].values.astype(float) if "visibility" in told.chosen else None,
            told.stations, around,
        )
    )  # fmt: skip
    data.update(_resolution(told.guess))
    data.update(surface_variables(told))
    data.update(joined_air(told, radius))
    data.update(member_statistics(told, lines, data, settings, progress, around))

    coords = {name: c for name, c in told.chosen.coords.items() if c.dims == ("profile",)}
    coords.pop("member", None)
    outlook = xr.Dataset(data, coords=coords)
    outlook = outlook.assign_coords(
        ceiling=("ceiling", np.array(CEILINGS_M)),
        height_bin=("height_bin", height_bins(settings.chart_top)),
        sightline_name=("sightline", np.array([line.name for line in lines], dtype=str)),
        sightline_site=("sightline", np.array([line.site for line in lines], dtype=str)),
        sightline_wave=("sightline", np.array([line.wave for line in lines], dtype=str)),
    )
    outlook.attrs = {
        "title": settings.title,
        "source": "radiosonde ascents and model profiles; refraction computed by bendcast",
        "calibration": "uncalibrated",
        "error_model": _error_model_text(settings),
        "minimum_duct_strength": settings.minimum_duct_strength,
        "caution": CAUTION,
    }
    return describe(outlook)


def _best_guess(
    guess: dict[str, np.ndarray], radius: np.ndarray, chart_top: float
) -> dict[str, Any]:
    """Radio refraction and ducts of the profiles themselves, cut just above the chart."""
    z = guess["height"]
    batch = analyse_columns(
        guess["air_pressure"], guess["air_temperature"], guess["specific_humidity"], z, radius
    )
    top = max(chart_top, max(CEILINGS_M))
    keep = max(2, int(np.max(np.sum(z <= top, axis=1))) + 1)
    gradient = batch.refractivity_gradient
    level = {
        "height": z,
        "air_temperature": guess["air_temperature"],
        "refractivity": batch.refractivity,
        "modified_refractivity": batch.modified_refractivity,
        "refractivity_gradient": gradient,
        "ray_curvature": ray_curvature(gradient, batch.refractivity),
        "effective_earth_radius_factor": batch.effective_earth_radius_factor,
        "layer_class": classify_layers(gradient, radius[:, None]),
    }
    data: dict[str, Any] = {name: (("profile", "level"), a[:, :keep]) for name, a in level.items()}
    data["earth_radius"] = ("profile", radius)
    data.update({str(k): v.variable for k, v in duct_dataset(batch.ducts, {}).data_vars.items()})
    return data


def _resolution(guess: dict[str, np.ndarray]) -> dict[str, Any]:
    """What the profile can resolve near the ground, and how the air warms there."""
    z, t = guess["height"], guess["air_temperature"]
    low = z <= z[:, :1] + _NEAR_GROUND
    low[:, 1] = np.isfinite(z[:, 1])  # the first layer counts, however thick
    count = low.sum(axis=1)
    highest = np.where(low, z, -np.inf).max(axis=1)
    spacing = (highest - z[:, 0]) / np.maximum(count - 1, 1)
    warmest = np.argmax(np.where(low, t, -np.inf), axis=1)
    row = np.arange(z.shape[0])
    return {
        "lowest_level": ("profile", z[:, 0]),
        "near_ground_resolution": ("profile", spacing),
        "near_ground_warming": ("profile", t[row, warmest] - t[:, 0]),
        "near_ground_warming_depth": ("profile", z[row, warmest] - z[:, 0]),
    }


def _error_model_text(settings: Settings) -> str:
    ascent = draws.error_sizes("ascent", 0.0)
    model = draws.error_sizes("model", 0.0)
    growth = draws.error_model()["model"]["growth_per_day"]
    return (
        f"{settings.members} Monte Carlo members, seed {settings.seed}; standard deviations: "
        f"ascent {ascent.temperature:.2f} K, {100 * ascent.relative_humidity:.1f} % relative "
        f"humidity, layers displaced by {ascent.displacement:.0f} m; model "
        f"{model.temperature:.2f} K, {100 * model.relative_humidity:.1f} %, "
        f"{model.displacement:.0f} m, growing by {100 * growth:.0f} % a day"
    )
